"""What crosses the border: values and sentences of estimators, in the units of a study."""

import re
from pathlib import Path

import pytest

from canonry.border import Border
from canonry.job import run
from canonry.results import Results
from canonry.units import Scale
from estimators.derived import PARTS

ARGON = """
[fluid]
potential = "lennard-jones"
epsilon = "119.8 K"
sigma = "3.405 angstrom"
mass = "39.948 u"
cutoff = 2.1
[state]
density = "1320 kg/m3"
temperatures = ["120 K", "360 K"]
particles = 64
[sampling]
seed = 6
scheme = "{scheme}"
equilibration = 1000
steps = 10000
frame_every = 200
"""
SCALE = Scale(epsilon=100.0 * 1.380649e-23, sigma=3e-10, mass=6e-26)  # epsilon/k_B = 100 K


def sampled(directory: Path, scheme: str = "baoab") -> Results:
    path = directory / "study.toml"
    path.write_text(ARGON.format(scheme=scheme))
    return run(path, into=directory / "study")


def test_a_temperature_in_a_sentence_is_short_and_has_the_unit_of_the_border() -> None:
    assert Border("SI", SCALE).temperature(1.0961234567) == "109.61 K"
    assert Border("SI", SCALE).temperature(1.2) == "120 K"
    assert Border("reduced", SCALE).temperature(1.2) == "1.2 epsilon/k_B"


def test_refusals_advise_in_the_units_of_the_study(tmp_path: Path) -> None:
    """Two rungs far apart: what is refused between them and which rungs would help, in kelvin throughout."""
    results = sampled(tmp_path)
    without = results.curve[results.curve["value"].isna()]
    refused = without[without["property"] == "residual_energy"]
    assert len(refused) > 20
    # at the other temperatures only quotients by what may be zero
    rest = without[~without["temperature"].isin(refused["temperature"])]
    assert set(rest["property"]) <= {*PARTS}
    assert rest["reason"].str.contains("not clearly above zero").all()
    page = (tmp_path / "study" / "report.html").read_text()
    assert "No reweighted value" in page
    assert not re.search("epsilon/k|ε/k", page)
    for temperature, reason in refused[["temperature", "reason"]].itertuples(index=False, name=None):
        samples, support, _, *rungs = (float(number) for number in re.findall(r"[\d.]*\d(?:e[+-]\d+)?", reason))
        assert support == pytest.approx(temperature, rel=1e-4)
        assert samples < 50.0
        assert rungs[:2] == [120.0, 360.0]
        assert rungs[2:] == sorted(rungs[2:])
        assert all(120.0 < rung < 360.0 for rung in rungs[2:])
        assert "epsilon" not in reason
        assert f"{support:g} K, " in reason


def test_the_temperature_set_stands_beside_the_one_measured(tmp_path: Path) -> None:
    results = sampled(tmp_path, scheme="velocity-verlet")
    summary = results.summary.sort_values("set_temperature")
    assert list(summary["set_temperature"]) == [120.0, 360.0]
    assert summary["temperature"].to_numpy() == pytest.approx([120.0, 360.0], rel=0.2)
    assert not set(summary["temperature"]) & {120.0, 360.0}
    assert (tmp_path / "study" / "summary.csv").read_text().split(",")[4] == "set_temperature"
    assert "T as set" in (tmp_path / "study" / "report.html").read_text()
