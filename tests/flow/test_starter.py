"""The files that the user starts from load, and mean what they say."""

import re
from pathlib import Path

import pytest
from scipy.constants import Boltzmann

from canonry.errors import UserError
from canonry.starter import FLUIDS, starter_text
from canonry.study import load
from reference import find

COOLANT = Path(__file__).parents[2] / "studies" / "coolant.toml"


def uncommented(text: str) -> str:
    """The text with its commented-out keys in force; the alternatives to another key stay comments."""
    return re.sub(r"^# (?=(cutoff|friction|tolerance|epsilon|sigma|mass) = )", "", text, flags=re.MULTILINE)


@pytest.mark.parametrize("name", [None, *FLUIDS])
def test_a_starter_loads_and_every_comment_in_it_too(name: str | None, tmp_path: Path) -> None:
    path = tmp_path / "new.toml"
    path.write_text(starter_text(name), encoding="utf-8")
    study = load(path)
    assert study.units == ("reduced" if name is None else "SI")
    assert len(study.states) == 4

    path.write_text(uncommented(starter_text(name)), encoding="utf-8")
    full = load(path)
    assert full.compare.tolerance.keys() == {"heat_capacity"}
    assert (full.states, full.fluid, full.sampling) == (study.states, study.fluid, study.sampling)

    ladder = re.search(r"temperatures = \{.*\}", starter_text(name))
    points = re.search(r"points = \[\[.*\]\]", starter_text(name))
    assert ladder
    assert points
    path.write_text(re.sub(r"^temperatures = .*$", ladder[0], starter_text(name), flags=re.MULTILINE))
    assert len(load(path).states) == 6
    without = re.sub(r"^temperatures = .*\n", "", starter_text(name), flags=re.MULTILINE)
    path.write_text(re.sub(r"^density = .*$", points[0], without, flags=re.MULTILINE))
    assert load(path).states == study.states[:1]


@pytest.mark.parametrize("name", FLUIDS)
def test_parameters_are_the_published_ones_with_their_source(name: str, tmp_path: Path) -> None:
    # Vrabec, Stoll, Hasse (2001) and, for nitrogen, Hirschfelder, Curtiss, Bird (1954); all from memory
    published = {
        "argon": (116.79, 3.3952, 39.948),
        "krypton": (162.58, 3.6274, 83.798),
        "xenon": (227.55, 3.9011, 131.293),
        "methane": (148.55, 3.7281, 16.043),
        "nitrogen": (95.05, 3.698, 28.0134),
    }
    path = tmp_path / "new.toml"
    path.write_text(starter_text(name))
    study = load(path)
    assert study.scale is not None
    epsilon, sigma, mass = published[name]
    found = (study.scale.epsilon / Boltzmann, study.scale.sigma * 1e10, study.scale.mass / 1.66053907e-27)
    assert found == pytest.approx((epsilon, sigma, mass), rel=1e-8)
    assert FLUIDS[name].source in starter_text(name)


def test_ideal_parts_count_the_rotation_of_the_molecule() -> None:
    assert {name: fluid.ideal_heat_capacity for name, fluid in FLUIDS.items()} == {
        **dict.fromkeys(["argon", "krypton", "xenon"], 1.5),
        "nitrogen": 2.5,
        "methane": 3.0,
    }


def test_the_time_step_in_a_comment_is_right() -> None:
    # 0.005 sigma (m/epsilon)^(1/2) of argon: 0.005 * 3.3952e-10 * (6.63352e-26/1.61246e-21)^(1/2) s = 10.89 fs
    assert "time_step = 0.005            # 10.9 fs" in starter_text("argon")


def test_an_unknown_fluid_is_refused() -> None:
    with pytest.raises(UserError, match=r"--fluid helium: not known; what is accepted is argon, krypton"):
        starter_text("helium")


def test_the_coolant_is_one_liquid_phase_within_its_budget() -> None:
    study = load(COOLANT)
    assert study.units == "SI"
    assert len(study.isochores) == 1
    assert len(study.states) >= 5
    equation = find("thol-2016")
    for state in study.states:
        assert state.particles == 500
        assert equation.phase(state.temperature, state.density) != "two-phase"
        assert equation.covers(state.temperature, state.density) == ""
    steps = study.sampling.equilibration + study.sampling.steps
    assert sum(state.particles for state in study.states) * steps * study.sampling.repeats <= 5e8
