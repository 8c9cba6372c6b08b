"""Pair structure of a study from counted pairs and from forces, as its table has it."""

from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from canonry.job import run

STUDY = """
[fluid]
potential = "lennard-jones"
cutoff = 2.1
ideal_heat_capacity = 1.5
{units}
[state]
density = {density}
temperatures = [{temperature}]
particles = 64
[sampling]
scheme = "{scheme}"
equilibration = 1000
steps = 10000
frame_every = 100
"""
REDUCED = {"units": "", "density": "0.7", "temperature": "1.5", "scheme": "baoab"}
UNITS = 'epsilon = "119.8 K"\nsigma = "3.405 angstrom"\nmass = "39.948 u"'
SI = {"units": UNITS, "density": "0.7", "temperature": '"179.7 K"', "scheme": "baoab"}


def structure(directory: Path, keys: dict[str, str]) -> pd.DataFrame:
    file = directory / "study.toml"
    file.write_text(STUDY.format(**keys))
    run(file, into=directory / "study")
    return pd.read_csv(directory / "study" / "structure.csv")


@pytest.mark.parametrize("keys", [REDUCED, SI], ids=["reduced", "SI"])
def test_g_from_forces_stands_beside_counted_pairs_in_any_units(tmp_path: Path, keys: dict[str, str]) -> None:
    """Within 4.5 errors of counted pairs where many were seen, and with smaller errors of its own: known to 7 %."""
    table = structure(tmp_path, keys)
    assert table["r_unit"].nunique() == 1
    sigma = 3.405 if keys is SI else 1.0
    seen = table[table["r"] > 0.95 * sigma * (0.1 if table["r_unit"].iloc[0] == "nm" else 1.0)]
    assert len(seen) > 50
    assert (abs(seen["g"] - seen["g_forced"]) < 4.5 * seen["standard_error"]).all()
    gain = (seen["standard_error"] / seen["forced_error"]) ** 2
    assert 4.0 < gain.median() < 30.0


def test_without_a_bath_only_counted_pairs_are_told(tmp_path: Path) -> None:
    table = structure(tmp_path, {**REDUCED, "scheme": "velocity-verlet"})
    assert np.all(np.isnan(table["g_forced"]) & np.isnan(table["forced_error"]))
    assert np.all(np.isfinite(table["g"]))
