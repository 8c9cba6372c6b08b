"""Ladders that choose their rungs from pilots, and the standard errors that a plan foretells."""

import json
import shutil
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner

import canonry.ladder
import canonry.plan
from canonry.cli import main
from canonry.errors import UserError
from canonry.job import estimate, run
from canonry.ladder import BEYOND, resolved, rungs
from canonry.outlook import pooled_variances, predicted_overlap
from canonry.plan import plan
from canonry.study import Study, load
from canonry.temperatures import Ladder
from canonry.trend import trends
from reference import find

STUDY = """
[fluid]
potential = "lennard-jones"
cutoff = 2.5
{scale}
[state]
density = {density}
temperatures = {temperatures}
particles = {particles}
[sampling]
seed = 3
scheme = "{scheme}"
equilibration = 1000
steps = {steps}
frame_every = 10000
"""
DEFAULTS = {
    "density": 0.7,
    "temperatures": "{ from = 1.2, to = 1.7, overlap = 0.2 }",
    "particles": 108,
    "steps": 20_000,
    "scheme": "baoab",
    "scale": "",
}
LONG = 40_000  # steps of what is sampled once for several tests
SI = 'epsilon = "119.8 K"\nsigma = "3.405 angstrom"\nmass = "39.948 u"'
Floats = np.ndarray


def shortened(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(canonry.ladder, "TRIAL", 1_000_000)
    monkeypatch.setattr(canonry.plan, "_TRIAL", 1_000_000)


@pytest.fixture(autouse=True)
def quick(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    shortened(monkeypatch)
    monkeypatch.chdir(tmp_path)


@pytest.fixture(scope="module")
def sampled(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """The directory of a ladder of LONG steps; not to be changed."""
    place = tmp_path_factory.mktemp("ladder")
    with pytest.MonkeyPatch.context() as patched:
        shortened(patched)
        patched.chdir(place)
        study(steps=LONG)
        run("study.toml", into="study")
    return place / "study"


def study(**changes: object) -> Study:
    Path("study.toml").write_text(STUDY.format(**DEFAULTS | changes))
    return load("study.toml")


def temperatures(found: Study) -> list[float]:
    return [state.temperature for state in found.states]


@pytest.fixture
def no_pilots(monkeypatch: pytest.MonkeyPatch) -> None:
    def refuse(*arguments: object, **keywords: object) -> None:
        raise AssertionError("a pilot was run")

    monkeypatch.setattr(canonry.ladder, "trends", refuse)


# the variances that are foretold


def test_a_rung_alone_knows_what_its_samples_tell() -> None:
    """Of n normal samples: var(ln s^2) = 2/n, var(mean)/s^2 = 1/n; each slower by its own time."""
    alone = (np.array([3.0]), np.array([2.0]))
    found = pooled_variances(alone, alone, times=np.array([[0.5], [0.25], [0.1]]))
    assert [float(each[0]) for each in found] == pytest.approx([0.5, 0.5, 0.5], rel=1e-6)
    found = pooled_variances(alone, alone, times=np.array([[0.5], [0.1], [0.1]]))
    assert [float(each[0]) for each in found] == pytest.approx([0.2, 0.5, 0.5], rel=1e-6)


def test_rungs_alike_share_and_rungs_far_off_do_not() -> None:
    one, times = np.ones(2), np.ones((1, 2))
    alike, apart = ((np.array([0.0, shift]), one) for shift in (0.0, 15.0))
    target = (np.zeros(1), np.ones(1))
    assert float(pooled_variances(alike, target, times=times)[0][0]) == pytest.approx(1.0, rel=1e-6)
    assert float(pooled_variances(apart, target, times=times)[0][0]) == pytest.approx(2.0, rel=1e-3)


def replicas(centres: Floats, target: float, *, samples: int, number: int) -> Iterator[tuple[float, float]]:
    """Mean and log of the variance at a target, reweighted from normal samples of unit width at each centre."""
    random = np.random.default_rng(11)
    for _ in range(number):
        values = (centres[:, None] + random.standard_normal((len(centres), samples))).ravel()
        free = 0.5 * centres**2
        tilted = np.multiply.outer(centres, values)
        for _ in range(60):  # p_k is exp(centre x) times the same density: free energies by iteration
            total = samples * np.sum(np.exp(tilted - free[:, None]), axis=0)
            free = np.log(np.sum(np.exp(tilted) / total, axis=1))
            free -= free[0] - 0.5 * centres[0] ** 2
        weights = np.exp(target * values) / total
        weights /= np.sum(weights)
        mean = float(weights @ values)
        yield mean, float(np.log(weights @ (values - mean) ** 2))


@pytest.mark.parametrize("target", [-0.4, 1.0, 2.0])
def test_what_is_foretold_is_how_reweighted_values_scatter(target: float) -> None:
    """Beyond the first rung, between two, at one; 300 replicas tell a variance to 8 %, of which four are allowed."""
    centres, samples, number = np.array([0.0, 2.0, 4.0]), 300, 300
    scattered = np.var(list(replicas(centres, target, samples=samples, number=number)), axis=0, ddof=1)
    rungs, at = (centres, np.ones(3)), (np.array([target]), np.ones(1))
    heat_capacity, energy, _ = pooled_variances(rungs, at, times=np.full((2, 3), 1.0 / samples))
    assert scattered[0] == pytest.approx(energy[0], rel=0.33)
    assert scattered[1] == pytest.approx(heat_capacity[0], rel=0.33)
    assert heat_capacity[0] < 0.9 * 2.0 / samples or target < 0.0


# the rungs that are chosen


class Steady:
    """An isochore of constant heat capacity."""

    def energy(self, temperatures: Floats) -> Floats:
        return 0.8 * temperatures

    def heat_capacity(self, temperatures: Floats) -> Floats:
        return np.full_like(temperatures, 0.8)


def least_overlap(found: Floats, particles: int) -> float:
    steady = Steady()
    shared = predicted_overlap(
        steady.energy(found), steady.heat_capacity(found), temperatures=found, particles=particles
    )
    return min(shared)


@pytest.mark.parametrize("overlap", [0.05, 0.1, 0.2])
@pytest.mark.parametrize("particles", [108, 2000])
def test_rungs_are_as_few_as_overlap_as_asked(overlap: float, particles: int) -> None:
    found = rungs(Steady(), Ladder(0.9, 1.8, overlap), particles, at="0.8")  # type: ignore[arg-type]
    width = 1.0 / np.sqrt(0.8 * particles)
    assert np.log(found[[0, -1]]) == pytest.approx(np.log([0.9, 1.8]) + BEYOND * width * np.array([-1, 1]), abs=1e-3)
    assert np.diff(np.log(found)) == pytest.approx(np.full(len(found) - 1, np.log(found[1] / found[0])), rel=1e-3)
    assert least_overlap(found, particles) >= overlap
    fewer = np.geomspace(found[0], found[-1], len(found) - 1)
    assert least_overlap(fewer, particles) < overlap


def test_what_no_ladder_does_is_refused() -> None:
    with pytest.raises(UserError, match=r"overlap = 0\.4: neighbours share no more than 0\.24 of their samples here"):
        rungs(Steady(), Ladder(0.9, 1.8, 0.4), 500, at="0.8")  # type: ignore[arg-type]
    with pytest.raises(UserError, match=r"overlap = 0\.2: at density 0\.8 that takes more than 200 rungs"):
        rungs(Steady(), Ladder(0.9, 1.8, 0.2), 4_000_000, at="0.8")  # type: ignore[arg-type]
    with pytest.raises(UserError, match=r"sampling\.scheme = velocity-verlet: rungs overlap in a bath only"):
        resolved(study(scheme="velocity-verlet"), Path("study"))


def test_a_range_too_narrow_for_anything_else_takes_two_rungs() -> None:
    assert len(rungs(Steady(), Ladder(1.0, 1.001, 0.3), 500, at="0.8")) == 2  # type: ignore[arg-type]


def test_rungs_overlap_as_asked_when_sampled(sampled: Path) -> None:
    """Heat capacities from pilots are known to some percent, overlaps then to 0.03."""
    own = temperatures(load(sampled / "study.toml"))
    assert own[0] < 1.2 < own[1] <= own[-2] < 1.7 < own[-1]
    assert [float(f"{each:.4g}") for each in own] == own
    overlaps = list(estimate(sampled).overlap["overlap"])
    assert len(overlaps) == len(own) - 1
    assert 0.15 < min(overlaps) < 0.32


def test_rungs_do_not_depend_on_the_number_of_workers() -> None:
    alone, crowded = (resolved(study(), Path("study"), workers=workers) for workers in (1, 3))
    assert alone == crowded


def test_pilots_follow_the_isochore() -> None:
    """Against the equation of state, within 5 standard errors of pilots of 1e6 particle-steps (about 0.01 and 5 %)."""
    (trend,) = trends(study(), particle_steps=1_000_000).values()
    reference, at = find("thol-2016"), np.array([1.2, 1.45, 1.7])
    energies, capacities = (
        [reference.value(name, temperature=each, density=0.7).value for each in at]
        for name in ("residual_energy", "residual_heat_capacity")
    )
    assert trend.energy(at) == pytest.approx(energies, abs=0.05)
    assert trend.heat_capacity(at) == pytest.approx(capacities, rel=0.25)


def test_a_directory_keeps_its_rungs(sampled: Path, no_pilots: None) -> None:
    shutil.copytree(sampled, "study")
    text = Path("study/study.toml").read_text()
    there = load("study/study.toml")
    assert there.ladder == Ladder(1.2, 1.7, 0.2, is_chosen=True)
    assert f"overlap = 0.2, chosen = {temperatures(there)} }}" in text
    assert resolved(there, Path("study")) == there
    longer = resolved(study(steps=LONG + 10_000), Path("study"))
    assert longer.states == there.states
    shown = CliRunner().invoke(main, ["run", "study.toml", "--into", "study"])
    assert shown.exit_code == 0, shown.output
    again = CliRunner().invoke(main, ["run", "study.toml", "--into", "study"])
    assert "study is finished" in again.output
    for changes in ({"temperatures": "{ from = 1.2, to = 1.7, overlap = 0.15 }"}, {"density": [0.7, 0.75]}):
        with pytest.raises(AssertionError, match="a pilot was run"):
            resolved(study(**changes), Path("study"))


def test_a_density_that_is_added_leaves_the_rungs_of_others() -> None:
    first = resolved(study(), Path("study"))
    Path("study").mkdir()
    kept = replace(first, states=(replace(first.states[0], temperature=1.1), *first.states[1:]))
    Path("study/study.toml").write_text(kept.to_toml())
    both = resolved(study(density=[0.75, 0.7]), Path("study"))
    assert both.isochores[0.7] == kept.states
    assert len(both.isochores[0.75]) > 2
    assert load_again(both) == both


def load_again(found: Study) -> Study:
    Path("again.toml").write_text(found.to_toml())
    return load("again.toml")


def test_temperatures_read_well_in_the_units_of_the_study() -> None:
    found = resolved(study(scale=SI, temperatures='{ from = "144 K", to = "204 K", overlap = 0.2 }'), Path("study"))
    (line,) = (line for line in found.to_toml().splitlines() if line.startswith("temperatures"))
    chosen = line.split("chosen = ")[1].removesuffix(" }")
    assert all(len(each.replace(".", "")) <= 4 for each in json.loads(chosen.replace(" K", "")))
    assert load_again(found) == found


# the plan


def test_errors_come_out_as_foretold(sampled: Path) -> None:
    """Both are known to about 8 % at this length, together 11 %: four times that a rung, and less their mean."""
    planned = plan(load(sampled / "study.toml")).rungs
    table = estimate(sampled).properties
    for name in ("heat_capacity", "pressure"):
        foretold = np.array([rung.standard_errors[name] for rung in planned])
        rows = table[(table["property"] == name) & table["headline"]]
        own = table[(table["property"] == name) & ~table["headline"]]
        assert foretold == pytest.approx(rows["standard_error"].to_numpy(), rel=0.45)
        assert np.mean(foretold / rows["standard_error"].to_numpy()) == pytest.approx(1.0, abs=0.3)
        assert np.all(foretold < own["standard_error"].to_numpy())


def test_errors_fall_with_the_root_of_the_steps_and_of_the_repeats() -> None:
    few = study(temperatures="[1.2, 1.35]")
    many = replace(few, sampling=replace(few.sampling, repeats=4))
    for one, other in zip(plan(few).rungs, plan(many).rungs, strict=True):
        for name in ("heat_capacity", "pressure"):
            assert other.standard_errors[name] == pytest.approx(0.5 * one.standard_errors[name], rel=1e-6)


def test_a_fluid_without_ideal_part_is_told_the_residual_error() -> None:
    asked = study(temperatures="[1.2]", scale='ideal_heat_capacity = "unknown"')
    assert set(plan(asked).rungs[0].standard_errors) == {"residual_heat_capacity", "pressure"}


@pytest.mark.parametrize(("scheme", "pooled"), [("baoab", True), ("velocity-verlet", False)])
def test_without_a_bath_each_rung_is_told_its_own_error(scheme: str, pooled: bool) -> None:
    """Of n normal samples ln s^2 is known to 2/n; rungs this close share most of theirs."""
    asked = study(temperatures="[1.2, 1.25]", scheme=scheme)
    (trend,) = trends(asked, particle_steps=1_000_000).values()
    at, time = np.array([1.2, 1.25]), 20_000 * 0.005
    own = trend.heat_capacity(at) * np.sqrt(2.0 * trend.waiting("energy squared", at) / time)
    told = np.array([rung.standard_errors["heat_capacity"] for rung in plan(asked).rungs])
    if pooled:
        assert np.all(told < 0.9 * own)
    else:
        assert told == pytest.approx(own, rel=1e-9)


def test_the_plan_shows_rungs_overlaps_and_errors_in_eighty_columns() -> None:
    study(scale=SI, density='["1.18 g/cm3", 0.75]', temperatures='{ from = "144 K", to = "204 K", overlap = 0.2 }')
    shown = CliRunner().invoke(main, ["check", "study.toml"])
    assert shown.exit_code == 0, shown.output
    heads, units, *rows = shown.stdout.split("\n\n")[1].splitlines()
    assert heads.split() == ["T", "density", "particle-", "overlap", "±", "c_v", "±", "P"]
    assert units.split() == ["ε/k_B", "K", "σ⁻³", "kg/m³", "steps", "with", "next", "J/(mol", "K)", "MPa"]
    assert all(len(row) <= 80 for row in [heads, units, *rows])
    made = json.loads(CliRunner().invoke(main, ["check", "study.toml", "--json"]).stdout)
    assert len(made["rungs"]) == len(rows)
    assert not Path("study").exists()
    for row, rung in zip(rows, made["rungs"], strict=True):
        # reduced to SI: R is 8.31446 J/(mol K), epsilon/sigma^3 of this fluid 41.9 MPa
        cells = row.split()
        assert float(cells[-2]) == pytest.approx(8.31446 * rung["standard_errors"]["heat_capacity"], rel=0.06)
        assert float(cells[-1]) == pytest.approx(41.9 * rung["standard_errors"]["pressure"], rel=0.06)


def test_a_range_of_two_phases_is_told() -> None:
    study(density=0.5, temperatures="{ from = 0.9, to = 1.2, overlap = 0.1 }")
    shown = CliRunner().invoke(main, ["check", "study.toml"])
    assert "liquid and vapour coexist here" in " ".join(shown.stdout.split())
