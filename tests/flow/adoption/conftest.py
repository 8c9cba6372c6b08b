"""A study sampled here, its samples written as others would write them, and what adopting them gives."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner, Result

import canonry
import canonry.adopted
import canonry.adoption
import canonry.estimation
from canonry.adoption import Adoption
from canonry.cli import main
from canonry.directory import stored
from canonry.sampling import recorded
from canonry.study import Study
from sampler.fluid import State
from sampler.series import Series

ARGON = 'epsilon = "119.8 K"\nsigma = "3.405 angstrom"\nmass = "39.948 u"'
HOME = f"""
[fluid]
potential = "lennard-jones"
{ARGON}
cutoff = 2.2
[state]
density = 0.7
temperatures = [1.2, 1.4, 1.65]
particles = 64
[sampling]
seed = 12
repeats = 2
equilibration = 2000
steps = 30000
frame_every = 500
"""
SIZES = {"epsilon": "119.8 K", "sigma": "3.405 angstrom", "mass": "39.948 u"}
INSERTED = {"residual_chemical_potential", "residual_helmholtz_energy", "residual_entropy"}
"""What only frames say, which are adopted with few of the samples."""
NAMES = {"time": "t", "potential": "U", "dynamical": "U_dyn", "kinetic": "K", "pressure": "P", "virial": "W"}


@dataclass(frozen=True)
class Home:
    """A study sampled here, its series by state, and what it says."""

    study: Study
    series: Mapping[State, list[Series]]
    properties: pd.DataFrame
    structure: pd.DataFrame


@pytest.fixture(scope="session")
def home(tmp_path_factory: pytest.TempPathFactory) -> Home:
    directory = tmp_path_factory.mktemp("home")
    (directory / "liquid.toml").write_text(HOME)
    with pytest.MonkeyPatch.context() as patch:
        keep_all(patch)
        results = canonry.run(directory / "liquid.toml", into=directory / "liquid")
    study = stored(directory / "liquid")
    series = {state: recorded(study, directory / "liquid", state) for state in study.states}
    return Home(study, series, results.properties, results.structure)


@pytest.fixture(autouse=True)
def apart(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.chdir(tmp_path)
    keep_all(monkeypatch)


def keep_all(monkeypatch: pytest.MonkeyPatch) -> None:
    """Nothing is cut off as unsettled: what a column would say about that is not what is looked at here."""
    monkeypatch.setattr(canonry.estimation, "settled_start", lambda values: 0)


def table(series: Series, *, kinetic_part: str = "set", sizes: Mapping[str, float] | None = None) -> pd.DataFrame:
    """What another program would have written of a series; `sizes` are those of the units of its columns."""
    state, sizes = series.state, {"energy": 1.0, "pressure": 1.0, "time": 1.0} | dict(sizes or {})
    part = state.particles * state.temperature if kinetic_part == "set" else 2.0 / 3.0 * series.kinetic
    energies = {"U": series.energy, "U_dyn": series.sampled_energy, "K": series.kinetic, "W": series.virial}
    columns = {name: values / sizes["energy"] for name, values in energies.items()}
    pressure = (series.virial + part) / state.volume / sizes["pressure"]
    return pd.DataFrame({"t": series.times / sizes["time"], **columns, "P": pressure})


def description(home: Home, *, columns: Mapping[str, Any] = NAMES, **changes: Any) -> dict[str, Any]:
    """Of all series, in reduced units and with energies of the whole box; rungs without samples."""
    named = {holds: name for holds, name in columns.items() if not (holds == "virial" and "pressure" in columns)}
    whole = {
        "molecules": 64,
        "columns": named,
        "units": "reduced",
        "energy": "total",
        "long_range": True,
        "pressure_kinetic": "set",
        "kinetic_freedom": "3N",
        "fluid": {"potential": "lennard-jones", "cutoff": 2.2, "truncation": "corrected"},
        "rungs": [{"temperature": state.temperature, "density": state.density} for state in home.study.states],
    }
    return whole | changes


def taken_in(home: Home, make: Callable[[Series], Any] = table, into: str = "got", **changes: Any) -> Adoption:
    """Adopted from data frames that `make` makes."""
    whole = description(home, **changes)
    for rung, series in zip(whole["rungs"], home.series.values(), strict=True):
        rung["samples"] = [make(each) for each in series]
    return canonry.adopt(whole, into=into)


def assert_same(found: pd.DataFrame, wanted: pd.DataFrame, *, but: set[str] = frozenset()) -> None:
    """All values and errors to rounding, but those of some properties, which are absent from what was found."""
    key = ["temperature", "density", "property", "method"]
    wanted = wanted[~wanted["property"].isin(but)]
    both = wanted.merge(found, on=key, suffixes=("", "_found"), how="outer", indicator=True)
    assert set(both["_merge"]) == {"both"}
    for column in ("value", "standard_error", "effective_samples"):
        np.testing.assert_allclose(both[f"{column}_found"], both[column], rtol=1e-7)
    assert (both["headline"] == both["headline_found"]).all()


def command(*arguments: object, code: int = 0) -> Result:
    result = CliRunner().invoke(main, list(map(str, arguments)))
    assert result.exit_code == code, result.output
    assert result.exception is None or isinstance(result.exception, SystemExit)
    return result
