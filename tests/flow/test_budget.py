"""The uncertainty budget: what is known of each source, and what is not."""

from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

from canonry.budget import finite_size, tail
from canonry.job import run
from reference import find
from sampler.fluid import Fluid, State

STUDY = """
[fluid]
potential = "lennard-jones"
cutoff = 2.1
truncation = "{truncation}"
[state]
density = 0.7
temperatures = [1.6, 2.0]
particles = 256
[sampling]
seed = 6
scheme = "{scheme}"
equilibration = 1000
steps = 6000
frame_every = {frame_every}
"""
KEYS = {"truncation": "corrected", "scheme": "baoab", "frame_every": 200}


def budget(directory: Path, **changes: object) -> pd.DataFrame:
    (directory / "study.toml").write_text(STUDY.format(**KEYS | changes))
    results = run(directory / "study.toml", into=directory / "study")
    assert (directory / "study" / "budget.csv").exists()
    return results.budget.set_index(["temperature", "property"])


@dataclass
class Structure:
    """As much of a pair structure as the tail needs."""

    r: np.ndarray
    g: np.ndarray


def test_finite_size_of_a_dilute_gas() -> None:
    """N particles have (N - 1)/N of the pairs: the second virial's part of every property is less by 1/N.

    At density 1e-3 the third virial coefficient adds a share of about rho C/B: below 1 %.
    """
    state, gas = State(1.5, 1e-3, 100), find("thol-2016")
    found = finite_size(state, gas)
    second, step = gas.second_virial(1.5), 1e-3
    slope = (gas.second_virial(1.5 + step) - gas.second_virial(1.5 - step)) / (2.0 * step)
    pressure = state.density**2 * state.temperature * second
    assert found["pressure"] == pytest.approx(-pressure / 100, rel=0.02)
    assert found["bulk_modulus"] == pytest.approx(-2.0 * pressure / 100, rel=0.02)
    assert found["residual_energy"] == pytest.approx(state.density * 1.5**2 * slope / 100, rel=0.02)
    assert found["compressibility_factor"] == pytest.approx(found["pressure"] / 1.5e-3)


def test_finite_size_goes_as_one_over_the_number() -> None:
    few, many = (finite_size(State(1.2, 0.7, number), find("thol-2016")) for number in (100, 1000))
    for name, shift in few.items():
        assert shift == pytest.approx(10.0 * many[name])
    assert finite_size(State(1.2, 0.7, 100), None) == finite_size(State(50.0, 0.7, 100), find("thol-2016")) == {}


def test_tail_of_a_fluid_that_is_not_homogeneous() -> None:
    """g = 1.1 from the cutoff of 2.5 to 5: a tenth of what two tails, from 2.5 and from 5, differ by."""
    r = np.arange(0.0005, 5.0, 0.001)
    state, fluid = State(1.2, 0.7, 500), Fluid(cutoff=2.5)
    near, far = np.array(fluid.tail(0.7)), np.array(Fluid(cutoff=5.0).tail(0.7))
    energy, virial, hypervirial = 0.1 * (near - far)
    found = tail(fluid, state, Structure(r, np.where(r > 2.5, 1.1, 3.0)))
    assert found["residual_energy"] == pytest.approx(energy, rel=1e-4)
    assert found["pressure"] == pytest.approx(0.7 * virial, rel=1e-4)
    assert found["compressibility_factor"] == pytest.approx(virial / 1.2, rel=1e-4)
    assert found["bulk_modulus"] == pytest.approx(0.7 * (virial + hypervirial), rel=1e-4)
    assert "residual_heat_capacity" not in found
    assert tail(fluid, state, None) == tail(fluid, state, Structure(r[r < 3.4], r[r < 3.4])) == {}
    assert set(tail(Fluid(truncation="shifted"), state, None).values()) == {0.0}


def test_what_is_not_known_is_named_and_never_zero(tmp_path: Path) -> None:
    found = budget(tmp_path)
    for _, row in found.iterrows():
        assert row["time_step"] == "not known"
        assert row["equilibration"] in ("within statistical", "not known")
        parts = [row[name] for name in ("statistical", "cutoff", "finite_size") if row[name] != "not known"]
        assert all(part > 0.0 for part in parts)
        assert row["expanded"] == pytest.approx(row["coverage_factor"] * np.sqrt(sum(part**2 for part in parts)))
    assert (found["coverage_factor"] == 2.0).all()
    assert found.loc[(1.6, "heat_capacity"), "cutoff"] == "not known"
    assert found.loc[(1.6, "heat_capacity"), "finite_size"] == found.loc[(1.6, "residual_heat_capacity"), "finite_size"]
    assert found.loc[(1.6, "pressure"), "cutoff"] > 0.0


def test_what_cannot_be_wrong_is_zero(tmp_path: Path) -> None:
    found = budget(tmp_path, truncation="force-shifted", scheme="metropolised", frame_every=6000)
    assert (found["time_step"] == 0.0).all()
    assert (found["cutoff"] == 0.0).all()


def test_without_frames_the_tail_is_not_known(tmp_path: Path) -> None:
    found = budget(tmp_path, frame_every=8000)
    assert (found["cutoff"] == "not known").all()
