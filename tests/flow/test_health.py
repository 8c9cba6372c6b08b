"""Health in the product: how strict checks are, what a failed one marks, and where a reader finds it."""

import csv
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import canonry.health
from canonry.failures import failures
from canonry.findings import Check, Finding
from canonry.health import CHECKS, Samples, judged, wavelength
from canonry.job import run
from canonry.marking import marked
from canonry.notes import DOUBTS
from canonry.report.page import html
from canonry.risks import guide, stability
from canonry.terminal import closing_text
from canonry.units import PROPERTIES, Scale
from estimators.estimate import exact
from estimators.health.reading import Reading, threshold
from reference import find
from reference.freezing import freezing_density
from sampler.fluid import Fluid, State
from sampler.series import Series

COLUMNS = "temperature,density,repeat,check,statistic,threshold,passed,touches,meaning"
LADDER = [State(temperature, 0.8, 500) for temperature in (0.9, 1.0, 1.2, 1.5)]
STUDY = """
[fluid]
potential = "lennard-jones"
cutoff = 2.1
[state]
density = 0.7
temperatures = [1.3, 1.6, 2.0]
particles = 64
[sampling]
seed = 6
equilibration = 1000
steps = 20000
frame_every = 200
"""


def check(name: str, state: State, warmer: State | None = None, *, statistic: float = 9.0) -> Check:
    return Check(state, Reading(name, statistic, 3.0, f"What {name} says."), warmer)


def finding(state: State, name: str = "pressure", trust: str = "ok", reason: str = "") -> Finding:
    return Finding(state, name, "average", exact(1.0), 1000.0, trust, reason, True)


def touched(checks: list[Check], states: list[State], name: str = "pressure") -> list[State]:
    found = marked([finding(state, name) for state in states], checks, LADDER, {})
    return [each.state for each in found if each.trust != "ok"]


def at(temperature: float, density: float = 0.8) -> State:
    return State(temperature, density, 500)


def test_the_table_of_touches_names_properties_and_trust() -> None:
    for kind in CHECKS.values():
        assert set(kind.touches) <= set(PROPERTIES)
        assert kind.touches
        assert kind.trust in ("caution", "no")


@pytest.mark.parametrize(("number", "level"), [(1, 0.01), (5, 0.01), (6, 0.05 / 6), (400, 0.05 / 400)])
def test_readings_share_the_false_alarms_of_the_study(number: int, level: float) -> None:
    """Those that rest on a distribution, however strict each is at first; a limit of another kind stays as it is."""
    statistical = [
        Check(LADDER[0], Reading.deviation("ledger", 1.0, 0.01 / (1 + index % 2), "")) for index in range(number)
    ]
    others = [Check(LADDER[0], Reading("one-phase", 0.9, limit, "")) for limit in (1.0, threshold(0.01))]
    found = judged([*statistical, *others])
    assert {(each.reading.threshold, each.reading.level) for each in found[:-2]} == {(threshold(level), level)}
    assert found[-2:] == others


def test_a_failed_check_marks_its_state_and_the_curve_to_the_rungs_beside_it() -> None:
    between = [at(0.95), at(1.1), at(1.19), at(1.3)]
    assert touched([check("kinetic-law", LADDER[1])], [*LADDER, *between]) == [LADDER[1], *between[:3]]
    assert touched([check("kinetic-law", LADDER[0])], [*LADDER, *between]) == [LADDER[0], between[0]]
    assert touched([check("kinetic-law", LADDER[1])], [at(1.0, 0.7), at(1.1, 0.7)]) == []
    assert touched([check("kinetic-law", LADDER[1], statistic=3.0)], [*LADDER, *between]) == []


def test_a_failed_check_of_two_rungs_marks_both_and_the_curve_between_them() -> None:
    between = [at(0.95), at(1.1), at(1.3)]
    assert touched([check("pair-slope", LADDER[1], LADDER[2])], [*LADDER, *between]) == [*LADDER[1:3], between[1]]


def test_a_failed_check_marks_what_it_touches_only() -> None:
    failed = [check("heat-routes", LADDER[1])]
    assert touched(failed, LADDER, "heat_capacity") == [LADDER[1]]
    assert touched(failed, LADDER, "pressure") == []


def test_what_was_noticed_on_adoption_marks_as_far_as_a_check_does() -> None:
    between = [at(0.95), at(1.1), at(1.19), at(1.3)]
    found = [*marked(map(finding, [*LADDER, *between]), [], LADDER, {LADDER[1]: ["times-uneven"]})]
    doubtful = [each for each in found if each.trust == "caution"]
    assert [each.state for each in doubtful] == [LADDER[1], *between[:3]]
    assert {each.reason for each in doubtful} == {DOUBTS["times-uneven"].reason}
    assert {name for doubt in DOUBTS.values() for name in doubt.touches} <= set(PROPERTIES)


def test_the_reason_names_the_check_once_and_keeps_what_was_there() -> None:
    failed = [check("ledger", LADDER[1]), check("ledger", LADDER[1]), check("settled", LADDER[1])]
    (found,) = marked([finding(LADDER[1], trust="caution", reason="too few")], failed, LADDER, {})
    assert found.trust == "no"
    assert found.reason.startswith("too few; ")
    assert found.reason.count("(check ledger)") == found.reason.count("(check settled)") == 1
    (mild,) = marked([finding(LADDER[1], trust="no", reason="too few")], [check("settled", LADDER[1])], LADDER, {})
    assert mild.trust == "no"


def test_refused_values_need_no_further_reason() -> None:
    refused = replace(finding(at(1.1)), estimate=None, trust="no", reason="no overlap")
    assert [*marked([refused], [check("ledger", LADDER[1])], LADDER, {})] == [refused]


def test_thinned_frames_stay_with_their_samples() -> None:
    """Each frame is filled with the number of the sample that it belongs to."""
    stride, offset = 7, 3
    numbers = stride * np.arange(1, 451) - 1 - offset
    frames = np.broadcast_to(numbers[:, None, None], (450, 2, 3)).astype(float)
    column = np.arange(4000.0)
    series = Series(
        Fluid(), LADDER[0], 0, True, 0.05, *(column,) * 6, frames=frames, frame_stride=stride, frame_offset=offset
    )
    samples = Samples([series, series], None, [(0, 4000)] * 2, {}, None)
    for each in samples.seen:
        assert 40 <= len(each.frames) <= 60
        assert np.array_equal(each.frames[:, 0, 0], each.frame_samples)


def test_wavelength_of_argon() -> None:
    """17.458 angstrom / sqrt(39.948 x 119.8) is 0.25236 angstrom, over 3.405 angstrom."""
    argon = Scale(119.8 * 1.380649e-23, 3.405e-10, 39.948 * 1.66053907e-27)
    assert wavelength(at(1.0), argon) == pytest.approx(0.074115, rel=1e-4)
    assert wavelength(at(4.0), argon) == pytest.approx(0.074115 / 2.0, rel=1e-4)
    assert wavelength(at(1.0), None) is None


def test_what_is_known_of_the_phase() -> None:
    reference = guide(Fluid())
    pair, freezing = find(reference.name).coexistence(0.9), freezing_density(1.2)
    for density, inside in ((pair.vapour * 0.98, False), (pair.vapour * 1.02, True), (pair.liquid * 0.98, True)):
        reading = stability(at(0.9, density), reference)
        assert reading is not None
        assert reading.passed is not inside
    for density in (freezing * 1.01, freezing * 0.99):
        reading = stability(at(1.2, density), reference)
        assert reading is not None
        assert reading.statistic == pytest.approx(density / freezing)
        assert reading.passed is (density < freezing)
    assert stability(at(20.0, 0.1), reference) is None


def test_failures_are_told_by_check_worst_first() -> None:
    def row(name: str, temperature: float, statistic: object, passed: object) -> dict[str, object]:
        cells = {"temperature": temperature, "density": 0.8, "check": name, "statistic": statistic, "threshold": "3.0"}
        return {**cells, "passed": passed, "meaning": f"{name} at {temperature}"}

    rows = [row("settled", 1.0, "4.0", "False"), row("settled", 1.2, "5.0", False), row("settled", 1.2, 3.5, False)]
    rows += [row("box", 1.0, "", "False"), row("ledger", 1.0, 1.0, "True"), row("enough", 1.0, 1.0, True)]
    found = failures(rows)
    assert [each.check for each in found] == ["box", "settled"]
    assert found[1].states == ((1.2, 0.8), (1.0, 0.8))
    assert found[1].meaning == "settled at 1.2"


@pytest.fixture(scope="module")
def studied(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, str]:
    """A study whose middle rung fails a check that only this test makes; its directory and its report."""
    home = tmp_path_factory.mktemp("home")
    (home / "study.toml").write_text(STUDY)

    def look(samples: Samples) -> list[Reading]:
        wrong = samples.series[0].state.temperature == 1.6
        meaning = "the bath is 2 % too warm; repair it"
        return [Reading.deviation("kinetic-law", 9.0 if wrong else 0.5, 0.01, meaning, 0)]

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(canonry.health, "_OF_RUNG", (look,))
        patch.setattr(canonry.health, "_OF_PAIRS", ())
        patch.setattr(canonry.health, "_OF_SLOPES", ())
        results = run(home / "study.toml", into=home / "study")
    return home / "study", html(results)


def test_health_is_a_table_with_one_row_a_reading(studied: tuple[Path, str]) -> None:
    with (studied[0] / "health.csv").open() as file:
        assert file.readline().strip() == COLUMNS
        rows = list(csv.DictReader(file, COLUMNS.split(",")))
    mine = [row for row in rows if row["check"] == "kinetic-law"]
    assert [(row["temperature"], row["repeat"], row["passed"]) for row in mine] == [
        ("1.3", "0", "True"),
        ("1.6", "0", "False"),
        ("2", "0", "True"),
    ]
    assert {row["repeat"] for row in rows if row["check"] == "one-phase"} == {""}
    assert set(mine[0]["touches"].split()) >= {"heat_capacity", "pressure"}


def test_a_failed_check_is_in_trust_and_reason_of_every_table(studied: tuple[Path, str]) -> None:
    for name in ("properties", "curve"):
        with (studied[0] / f"{name}.csv").open() as file:
            rows = list(csv.DictReader(file))
        for row in rows:
            temperature = float(row["temperature"])
            concerned = temperature == 1.6 if name == "properties" else 1.3 < temperature < 2.0
            assert ("(check kinetic-law)" in row["reason"]) is concerned
            assert row["trust"] in (("caution", "no") if concerned else ("ok", "caution", "no"))


def test_a_failed_check_is_named_at_the_end_and_in_the_report(studied: tuple[Path, str]) -> None:
    directory, page = studied
    text = " ".join(closing_text(directory).split())
    assert "Failed check: kinetic-law at T = 1.6 ε/k_B, density 0.7 σ⁻³: the bath is 2 % too warm; repair it." in text
    assert "1 of 2 failed, kinetic-law (1 state)" in page
    assert "✗ 1 of 3 fail: T = 1.6" in page
    assert page.index("<li>kinetic-law at T\u00a0=\u00a01.6") < page.index("✓ all 3 pass")
