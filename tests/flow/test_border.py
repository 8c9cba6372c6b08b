"""What crosses the border: values and sentences of estimators, in the units of a study."""

import re
from pathlib import Path

import pytest

from canonry.border import Border
from canonry.job import run
from canonry.results import Results
from canonry.units import Scale

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


@pytest.mark.parametrize(
    ("sentence", "told"),
    [
        ("31 effective samples support temperature 1.09612 epsilon/k_B, 50 are needed", "temperature 109.61 K, 50"),
        ("the nearest rung is at 1 epsilon/k_B, set one closer", "at 100 K, set"),
        ("the rungs at 1.2 and 8 epsilon/k_B do not overlap", "rungs at 120 and 800 K do not"),
        ("set rungs at 1.928, 3.098 and 4.979 epsilon/k_B between them", "at 192.8, 309.8 and 497.9 K between"),
        ("support temperature 1e-05 epsilon/k_B, 50 are", "temperature 0.001 K, 50 are"),
        ("only about 43 effective samples", "only about 43 effective samples"),
    ],
)
def test_temperatures_of_a_sentence_are_told_in_the_units_of_the_border(sentence: str, told: str) -> None:
    assert told in Border("SI", SCALE).told(sentence)
    assert Border("reduced", SCALE).told(sentence) == Border("reduced", None).told(sentence) == sentence


def test_refusals_advise_in_the_units_of_the_study(tmp_path: Path) -> None:
    """Two rungs far apart: what is refused between them and which rungs would help, in kelvin throughout."""
    results = sampled(tmp_path)
    refused = results.curve[results.curve["value"].isna()].drop_duplicates("temperature")
    assert len(refused) > 20
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
