"""The plan: steps, cost, predicted overlaps and warnings."""

from pathlib import Path

import numpy as np
import pytest
from scipy import integrate

import canonry.plan
from canonry.border import Border
from canonry.job import estimate, run
from canonry.plan import plan, predicted_overlap
from canonry.study import Study, load
from reference import find
from reference.freezing import freezing_density

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
def test_predicted_overlap_is_within_a_tenth_of_the_sampled_one(temperatures: str) -> None:
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
    monkeypatch.setattr(
        canonry.plan, "_timed", lambda fluid, state, protocol, repeat: 10.0 * state.density * protocol.steps / 21_000
    )
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


def test_no_overlap_is_predicted_where_no_reference_speaks() -> None:
    planned = plan(study(states="density = 0.7\ntemperatures = [8.5, 9.5, 10.5]"))
    assert [rung.overlap for rung in planned.rungs] == [None, None, None]


def test_warnings_come_in_the_units_of_the_study() -> None:
    text = STUDY.format(**DEFAULTS | {"cutoff": '"8.5125 angstrom"', "states": 'points = [["179.7 K", 0.7]]'})
    Path("study.toml").write_text(
        text.replace("[state]", 'epsilon = "119.8 K"\nsigma = "3.405 angstrom"\nmass = "39.948 u"\n[state]')
    )
    asked = load("study.toml")
    assert "cutoff of 1.0215 nm at least, not 0.85125 nm" in plan(asked).warnings[0]
    assert "cutoff of 3 σ at least" in plan(asked, border=Border("reduced", asked.scale)).warnings[0]
