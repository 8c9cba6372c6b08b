"""The plan: steps, cost, predicted overlaps and warnings."""

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner
from scipy import integrate

import canonry.plan
import canonry.proposal
import canonry.trend
from canonry.border import Border
from canonry.cli import main
from canonry.errors import UserError
from canonry.job import estimate, run
from canonry.outlook import predicted_overlap
from canonry.pilot import Pilot, pilot
from canonry.plan import plan
from canonry.proposal import bias_of
from canonry.study import Study, load
from reference import find
from reference.freezing import freezing_density
from sampler.fluid import State

STUDY = """
[fluid]
potential = "lennard-jones"
cutoff = {cutoff}
truncation = "{truncation}"
[state]
{states}
particles = {particles}
[sampling]
seed = 2
equilibration = 1000
steps = 20000
repeats = {repeats}
frame_every = 500
"""
DEFAULTS = {
    "cutoff": 3.0,
    "truncation": "corrected",
    "states": "density = 0.7\ntemperatures = [1.2, 1.4, 1.7]",
    "particles": 256,
    "repeats": 1,
}


@pytest.fixture(autouse=True)
def quick(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.setattr(canonry.plan, "_TRIAL", 10_000)
    monkeypatch.setattr(canonry.proposal, "_PARTICLE_STEPS", 1_500_000)
    monkeypatch.chdir(tmp_path)


def study(**changes: object) -> Study:
    Path("study.toml").write_text(STUDY.format(**DEFAULTS | changes))
    return load("study.toml")


def overlap(centres: list[float], widths: list[float]) -> list[float]:
    """By adaptive quadrature, straight from the definition."""

    def densities(x: float) -> np.ndarray:
        return np.exp(-0.5 * ((x - np.array(centres)) / widths) ** 2) / np.array(widths) / np.sqrt(2.0 * np.pi)

    def shared(x: float, i: int) -> float:
        p = densities(x)
        return float(p[i] * p[i + 1] / max(p.sum(), 1e-300))

    ends = (min(centres) - 9.0 * max(widths), max(centres) + 9.0 * max(widths))
    return [
        integrate.quad(shared, *ends, args=(i,), limit=400, points=sorted(centres))[0] for i in range(len(centres) - 1)
    ]


def test_overlap_of_gaussians_by_quadrature() -> None:
    found = predicted_overlap(
        np.array([-5.5, -5.45, -5.2]), np.array([0.9, 0.8, 0.7]), temperatures=np.array([1.0, 1.06, 1.3]), particles=200
    )
    widths = [float(np.sqrt(200 * c) * t) for c, t in ((0.9, 1.0), (0.8, 1.06), (0.7, 1.3))]
    assert found == pytest.approx(overlap([-1100.0, -1090.0, -1040.0], widths), abs=1e-6)


def test_two_rungs_alike_share_half() -> None:
    (found,) = predicted_overlap(np.zeros(2), np.ones(2), temperatures=np.ones(2), particles=100)
    assert found == pytest.approx(0.5, abs=1e-9)


@pytest.mark.parametrize("temperatures", ["[1.2, 1.4, 1.7]", "[1.1, 1.5]"])
def test_predicted_overlap_is_within_a_tenth_of_the_sampled_one(
    monkeypatch: pytest.MonkeyPatch, temperatures: str
) -> None:
    monkeypatch.setattr(canonry.plan, "_TRIAL", 1_000_000)
    asked = study(states=f"density = 0.7\ntemperatures = {temperatures}", particles=108, cutoff=2.5)
    predicted = [rung.overlap for rung in plan(asked).rungs]
    run("study.toml", into="sampled")
    sampled = list(estimate("sampled").overlap["overlap"])
    assert predicted[-1] is None
    assert predicted[:-1] == pytest.approx(sampled, abs=0.1)
    assert min(sampled) > 0.1  # so that a prediction of nothing would fail


def test_steps_are_those_of_the_study() -> None:
    planned = plan(study(repeats=3))
    assert [rung.steps for rung in planned.rungs] == [21_000] * 3
    assert planned.particle_steps == 3 * 3 * 256 * 21_000


@pytest.mark.parametrize(
    ("workers", "repeats", "expected"),
    [(1, 1, 6.0), (2, 1, 3.0), (2, 2, 6.0), (50, 1, 3.0)],  # the denser rung takes 3 s, the others 1 and 2
)
def test_cost_is_shared_among_workers(
    monkeypatch: pytest.MonkeyPatch, workers: int, repeats: int, expected: float
) -> None:
    def costs(study: Study, states: list[State], **_: int | None) -> dict[State, Pilot]:
        """A step takes time in proportion to the density, and grows with the 1.03rd power of the particles."""
        return {
            state: Pilot(
                replace(made.series, state=state), 10.0 * state.density / 21_000 * (state.particles / 864) ** 1.03
            )
            for state in states
        }

    (made,) = pilot(study(), study().states[:1], particle_steps=100_000, workers=1).values()
    monkeypatch.setattr(canonry.trend, "pilot", costs)
    asked = study(states="points = [[1.5, 0.1], [1.5, 0.2], [1.5, 0.3]]", particles=864, repeats=repeats)
    assert plan(asked, workers=workers).seconds == pytest.approx(expected, rel=1e-9)


def warnings(**changes: object) -> list[str]:
    return list(plan(study(**changes)).warnings)


def test_a_sound_study_has_no_warning() -> None:
    assert warnings() == []


def test_two_phases_are_told_with_their_densities() -> None:
    (warning,) = warnings(states="points = [[0.9, 0.5]]", particles=500)
    pair = find("thol-2016").coexistence(0.9)
    for part in ("T = 0.9", "liquid and vapour coexist", f"{pair.liquid:.6g}", f"{pair.vapour:.6g}", "thol-2016"):
        assert part in warning


def test_two_phases_are_told_once_for_each_density() -> None:
    found = warnings(states="density = [0.5, 0.6]\ntemperatures = [0.9, 1.0, 1.2, 1.5]", particles=500)
    mixed = [each for each in found if "coexist" in each]
    assert [each.split(":")[0] for each in mixed] == [
        "T = 0.9, 1, 1.2 ε/k_B, density 0.5 σ⁻³",
        "T = 0.9, 1 ε/k_B, density 0.6 σ⁻³",
    ]
    pair = find("thol-2016").coexistence(0.9)
    assert f"{pair.vapour:.6g} σ⁻³ at the lowest of these temperatures" in mixed[0]


def test_two_phases_of_the_shifted_fluid_are_its_own() -> None:
    states = "points = [[1.15, 0.3]]"  # above the critical point of the shifted fluid, below that of the full one
    assert warnings(states=states, truncation="shifted", cutoff=2.5) == []
    assert "coexist" in warnings(states=states, cutoff=5.0, particles=500)[0]


def test_freezing_is_told() -> None:
    below, above = freezing_density(1.0) - 0.005, freezing_density(1.0) + 0.005
    assert warnings(states=f"points = [[1.0, {below}]]") == []
    (warning,) = warnings(states=f"points = [[1.0, {above}]]")
    assert "freezes from density 0.92" in warning


@pytest.mark.parametrize(
    ("density", "cutoff", "wanted"), [(0.5, 2.9, "3 σ"), (0.5, 3.0, ""), (0.4, 4.9, "5 σ"), (0.4, 5.0, "")]
)
def test_a_short_cutoff_is_told(density: float, cutoff: float, wanted: str) -> None:
    found = warnings(states=f"points = [[2.0, {density}]]", cutoff=cutoff, particles=500)
    assert len(found) == bool(wanted)
    assert all(f"cutoff of {wanted} at least, not {cutoff:g} σ" in each for each in found)


def test_a_cutoff_that_is_part_of_the_model_is_no_fault() -> None:
    assert warnings(cutoff=2.5, truncation="shifted", states="points = [[2.0, 0.7]]") == []


def test_rungs_too_far_apart_are_told() -> None:
    (warning,) = warnings(states="density = 0.7\ntemperatures = [1.2, 2.6]")
    assert "T = 1.2 ε/k_B" in warning
    assert "hardly overlap" in warning


def test_an_overlap_is_predicted_where_no_reference_speaks() -> None:
    planned = plan(study(states="points = [[8.5, 0.7], [9.0, 0.7], [9.0, 0.75]]"))
    assert planned.rungs[0].overlap == pytest.approx(0.3, abs=0.2)
    assert [rung.overlap for rung in planned.rungs[1:]] == [None, None]


def test_warnings_come_in_the_units_of_the_study() -> None:
    text = STUDY.format(**DEFAULTS | {"cutoff": '"8.5125 angstrom"', "states": 'points = [["179.7 K", 0.7]]'})
    Path("study.toml").write_text(
        text.replace("[state]", 'epsilon = "119.8 K"\nsigma = "3.405 angstrom"\nmass = "39.948 u"\n[state]')
    )
    asked = load("study.toml")
    assert "cutoff of 1.0215 nm at least, not 0.85125 nm" in plan(asked).warnings[0]
    assert "cutoff of 3 σ at least" in plan(asked, border=Border("reduced", asked.scale)).warnings[0]


LIQUID = {"states": "density = [0.6, 0.7]\ntemperatures = [1.2, 2.0]", "particles": 108, "cutoff": 2.5}
SAMPLING = "[sampling]\n"


def with_sampling(keys: str, *, steps: int = 20_000, **changes: object) -> Study:
    text = STUDY.format(**DEFAULTS | LIQUID | changes).replace("steps = 20000", f"steps = {steps}")
    Path("study.toml").write_text(text.replace(SAMPLING, f"{SAMPLING}{keys}\n"))
    return load("study.toml")


def test_a_time_step_is_proposed_for_the_worst_state_of_each_density() -> None:
    asked = with_sampling('scheme = "obabo"\ntime_step = 0.008')
    proposed, twice = (plan(asked, bias=bias).proposals for bias in (0.001, 0.004))
    assert [each.state for each in proposed] == [State(2.0, 0.6, 108), State(2.0, 0.7, 108)]
    for each, other in zip(proposed, twice, strict=True):
        shift = each.shifts["residual_energy"]
        # 0.0119 (dt/0.01)^2 at T 1.5 and density 0.84 (measured); shifts grow with both, and these are not far away
        assert 0.002 < shift.value < 0.012
        assert shift.standard_error < 0.15 * shift.value
        allowed = 0.008 * np.sqrt(0.001 / (shift.value + 2.0 * shift.standard_error))
        assert each.time_step == pytest.approx(allowed, rel=1e-9)
        assert other.time_step == pytest.approx(2.0 * allowed, rel=1e-9)
        assert each.shifts["pressure"].value > 0.0
        assert not each.measured
        assert not each.is_limit
    assert plan(asked).proposals == ()


def test_no_time_step_is_proposed_beyond_what_is_known() -> None:
    (proposed,) = plan(with_sampling("", states="points = [[1.2, 0.7]]"), bias=1.0).proposals
    assert proposed.is_limit
    # where trajectories hold: 0.0173 at T 2, longer when colder (both measured)
    assert 0.011 < proposed.time_step < 0.02


def test_large_systems_are_tried_small() -> None:
    few, many = (plan(with_sampling("", particles=n, cutoff=2.0), bias=0.001).proposals for n in (256, 4000))
    assert [each.state.particles for each in many] == [4000, 4000]
    assert [each.shifts for each in many] == [each.shifts for each in few]


def test_schemes_without_a_proposal_say_so() -> None:
    for scheme, told in (
        ("metropolised", "Time step: metropolised shifts nothing, whatever the time step."),
        ("velocity-verlet", "Time step: none is proposed for velocity-verlet; what is needed is a scheme with a bath."),
    ):
        with_sampling(f'scheme = "{scheme}"')
        shown = CliRunner().invoke(main, ["check", "study.toml", "--bias", "0.001"])
        assert shown.exit_code == 0, shown.output
        assert told in " ".join(shown.stdout.split())


def test_a_shift_seen_against_exact_sampling_is_used() -> None:
    # 0.012 (dt/0.01)^2 is 0.03, the standard error of the difference about 0.005
    liquid = {"states": "points = [[1.5, 0.85]]", "particles": 64, "cutoff": 2.0}
    asked = with_sampling('scheme = "obabo"\ntime_step = 0.016', steps=200_000, **liquid)
    run("study.toml", into="study", step_bias=True)
    (proposed,) = plan(asked, bias=0.002, directory=Path("study")).proposals
    (predicted,) = plan(asked, bias=0.002, directory=Path("elsewhere")).proposals
    assert (proposed.measured, predicted.measured) == (True, False)
    seen, told = (each.shifts["residual_energy"] for each in (proposed, predicted))
    assert abs(seen.value - told.value) < 4.0 * np.hypot(seen.standard_error, told.standard_error) + 0.2 * told.value
    assert seen.value > 3.0 * seen.standard_error
    shown = CliRunner().invoke(main, ["check", "study.toml", "--bias", "0.002"])
    words = " ".join(shown.stdout.split())
    assert "measured at T = " in words
    assert "predicted at" not in words


def test_a_shift_lost_in_noise_is_not_used() -> None:
    liquid = {"states": "points = [[1.5, 0.85]]", "particles": 64, "cutoff": 2.0}
    # 0.003, the standard error of the difference about 0.05
    asked = with_sampling('scheme = "obabo"\ntime_step = 0.005', steps=2000, **liquid)
    run("study.toml", into="study", step_bias=True)
    (proposed,) = plan(asked, bias=0.002, directory=Path("study")).proposals
    assert not proposed.measured
    assert proposed.shifts["residual_energy"].standard_error < 0.001


def test_a_bias_that_is_none_is_refused() -> None:
    reduced = study()
    assert bias_of("0.002", reduced) == 0.002
    for text, reason in (
        ("0.01 kJ/mol", "needs fluid.epsilon, fluid.sigma and fluid.mass"),
        ("little", "needs fluid.epsilon, fluid.sigma and fluid.mass"),
        ("nan", "what is needed is a number from 1e-09"),
        ("-0.1", "what is needed is a number from 1e-09"),
    ):
        with pytest.raises(UserError, match=f"^--bias {text}: .*{reason}"):
            bias_of(text, reduced)


def test_a_bias_may_carry_a_unit() -> None:
    text = STUDY.format(**DEFAULTS | {"states": 'points = [["179.7 K", 0.7]]'})
    scale = 'epsilon = "119.8 K"\nsigma = "3.405 angstrom"\nmass = "39.948 u"\n[state]'
    Path("study.toml").write_text(text.replace("[state]", scale))
    asked = load("study.toml")
    # epsilon is 119.8 K times 8.31446 J/(mol K)
    assert bias_of("0.01 kJ/mol", asked) == pytest.approx(10.0 / (119.8 * 8.31446), rel=1e-5)
    with pytest.raises(UserError, match=r"^--bias 3 MPa: 'MPa' is not a unit of residual energy"):
        bias_of("3 MPa", asked)
    shown = CliRunner().invoke(main, ["check", "study.toml", "--bias", "0.01 kJ/mol"])
    assert shown.exit_code == 0, shown.output
    words = " ".join(shown.stdout.split())
    assert "keeps the shift of u below 0.01 kJ/mol. That of the study shifts u by " in words
    assert "predicted at T = 179.7 K." in words
    sentences = shown.stdout[shown.stdout.index("Density") :]
    assert all(len(row) <= 80 for row in sentences.splitlines())
    made = json.loads(CliRunner().invoke(main, ["check", "study.toml", "--bias", "0.01 kJ/mol", "--json"]).stdout)
    assert made["bias"] == pytest.approx(0.0100394, rel=1e-5)
    (proposed,) = made["proposals"]
    assert set(proposed["shifts"]) == {"residual_energy", "pressure"}
    assert set(proposed["shifts"]["pressure"]) == {"value", "standard_error"}
