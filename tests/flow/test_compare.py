"""The verdict: value by value, and all together."""

from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
import pytest
from scipy.signal import lfilter

from canonry.border import Border
from canonry.errors import UserError
from canonry.findings import Finding
from canonry.study import COMPARED, Study, Tolerance, load
from canonry.tables import verdict_table
from canonry.units import Scale
from canonry.verdict import FOLLOWS, Verdict, against, compare
from estimators.estimate import Estimate, mean
from reference import find
from reference.equation_of_state import ReferenceValue
from reference.properties import PROPERTIES as PROPERTIES_KNOWN
from sampler.fluid import State

STUDY = """
[fluid]
potential = "lennard-jones"
cutoff = {cutoff}
truncation = "{truncation}"
[state]
density = 0.7
temperatures = [1.2]
"""
STATES = [State(temperature, 0.7, 500) for temperature in (1.2, 1.35, 1.5, 1.7, 1.9, 2.2)]
PROPERTIES = ("residual_energy", "heat_capacity", "pressure", "thermal_pressure", "bulk_modulus")
SAMPLES = 4000


@dataclass(frozen=True)
class Known:
    """A reference of zeros, with one uncertainty for everything, silent where the temperature is above 3."""

    name: str = "zeros"
    uncertainty: float = 0.0

    def same_model(self, truncation: str, cutoff: float) -> bool:
        return True

    def covers(self, temperature: float, density: float) -> str:
        return "too warm" if temperature > 3.0 else ""

    def value(self, name: str, *, temperature: float, density: float, ideal_heat_capacity: float) -> ReferenceValue:
        return ReferenceValue(2.0 * (temperature - 1.2), self.uncertainty, "")


def asked(tmp_path: Path, truncation: str = "corrected", cutoff: float = 3.0) -> Study:
    path = tmp_path / "study.toml"
    path.write_text(STUDY.format(truncation=truncation, cutoff=cutoff))
    return load(path)


def estimate(value: float, error: float, state: State = STATES[0], seed: int = 1) -> Estimate:
    """An estimate of uncorrelated samples with exactly this value and about this standard error."""
    noise = np.random.default_rng(seed).standard_normal(SAMPLES)
    noise = (noise - noise.mean()) / noise.std()
    chain = (state.temperature, state.density, state.particles, 0)
    return replace(mean({chain: noise * error * np.sqrt(SAMPLES)}), value=value)


def finding(found: Estimate, name: str = "pressure", state: State = STATES[0], **rest: object) -> Finding:
    defaults = {"method": "average", "effective_samples": 900.0, "trust": "ok", "reason": "", "headline": True}
    return Finding(state, name, estimate=found, **defaults | rest)


def verdict(difference: float, error: float = 0.3, uncertainty: float = 0.4, **rest: object) -> Verdict:
    """Against a reference value of 10, combined error 0.5 by default."""
    tolerance = rest.pop("tolerance", None)
    known = ReferenceValue(10.0, uncertainty, "")
    return Verdict(finding(estimate(10.0 + difference, error), **rest), known, tolerance)


def test_deviation_is_in_combined_standard_errors() -> None:
    assert verdict(1.0).z == pytest.approx(2.0, rel=0.05)
    assert verdict(-1.0).z == pytest.approx(-2.0, rel=0.05)


@pytest.mark.parametrize(
    ("difference", "outcome"),
    [(0.0, "agrees"), (1.4, "agrees"), (-1.4, "agrees"), (1.6, "disagrees"), (-1.6, "disagrees")],
)
def test_without_tolerance_three_combined_errors_decide(difference: float, outcome: str) -> None:
    assert verdict(difference).outcome == outcome


@pytest.mark.parametrize(
    ("difference", "outcome"),
    [
        (0.0, "agrees"),
        (0.9, "agrees"),
        (1.1, "undecided"),
        (-1.1, "undecided"),
        (2.9, "undecided"),
        (-3.1, "disagrees"),
    ],
)
@pytest.mark.parametrize("tolerance", [Tolerance(2.0, relative=False), Tolerance(0.2, relative=True)])
def test_with_a_tolerance_the_interval_must_lie_inside(difference: float, outcome: str, tolerance: Tolerance) -> None:
    assert verdict(difference, tolerance=tolerance).outcome == outcome


@pytest.mark.parametrize("tolerance", [None, Tolerance(100.0, relative=False)])
def test_what_is_not_to_be_trusted_stays_undecided(tolerance: Tolerance | None) -> None:
    assert verdict(0.0, trust="no", tolerance=tolerance).outcome == "undecided"
    assert verdict(0.0, trust="caution", tolerance=tolerance).outcome == "agrees"


def test_a_state_outside_the_range_stays_undecided(tmp_path: Path) -> None:
    warm = State(3.5, 0.7, 500)
    comparison = compare([finding(estimate(0.0, 0.1, warm), state=warm)], Known(), asked(tmp_path))
    (only,) = comparison.verdicts
    assert (only.known, only.outcome, comparison.outcome) == (None, "undecided", "undecided")
    assert np.isnan(only.z)


@pytest.mark.parametrize(
    ("difference", "error", "uncertainty", "cause"),
    [
        (0.0, 0.3, 0.4, ""),
        (9.0, 0.3, 0.4, ""),
        (0.0, 1.5, 0.4, "the error bar is too wide for the tolerance; longer sampling"),
        (1.6, 0.4, 0.1, "the error bar is too wide for the tolerance; longer sampling"),
        (0.0, 0.1, 1.1, "uncertainty of the reference itself is too large for the tolerance, and no sampling"),
        (0.0, 1.5, 1.1, "uncertainty of the reference itself is too large for the tolerance, and no sampling"),
        (1.6, 0.1, 0.4, "uncertainty of the reference itself is too large for the tolerance, and no sampling"),
    ],
)
def test_undecided_under_a_tolerance_has_its_cause(
    difference: float, error: float, uncertainty: float, cause: str
) -> None:
    """Tolerance 2: twice the uncertainty alone, or the difference with it, may reach past that or not."""
    found = verdict(difference, error, uncertainty, tolerance=Tolerance(0.2, relative=True))
    assert found.limit == pytest.approx(2.0)
    assert (found.outcome == "undecided") is bool(cause)
    assert cause in found.reason
    assert bool(found.reason) is bool(cause)


def test_undecided_without_trust_or_reference_has_its_cause() -> None:
    assert verdict(0.0, trust="no").reason == "the value is not to be trusted"
    silent = Verdict(finding(estimate(10.0, 0.3)), None, Tolerance(1.0, relative=False))
    assert silent.reason == "the state is outside the range of the reference"
    assert np.isnan(silent.limit)


def test_only_headlines_are_compared(tmp_path: Path) -> None:
    found = [
        finding(estimate(0.0, 0.1), headline=False),
        finding(estimate(0.0, 0.1)),
        finding(estimate(9, 0.1), "density"),
    ]
    assert [each.finding for each in compare(found, Known(), asked(tmp_path)).verdicts] == [found[1]]


def test_changes_along_an_isochore_are_compared_from_the_same_start(tmp_path: Path) -> None:
    """d(A_res/NT)/d(1/T) = u, by quadrature over the equation's energy; entropy changes are (u/T) less that."""
    reference = find("thol-2016")
    density, start, end = STATES[0].density, 1.0, STATES[0].temperature
    beta, weights = np.polynomial.legendre.leggauss(16)
    beta = 0.5 * (1 / end - 1 / start) * (beta + 1) + 1 / start
    energies = [reference.value("residual_energy", temperature=1 / b, density=density).value for b in beta]
    helmholtz = 0.5 * (1 / end - 1 / start) * float(weights @ energies)
    low, high = (reference.value("residual_energy", temperature=t, density=density).value / t for t in (start, end))
    found = [
        replace(finding(estimate(0.0, 0.1), name), since=start)
        for name in ("residual_helmholtz_change", "residual_entropy_change")
    ]
    known = [each.known for each in compare(found, reference, asked(tmp_path)).verdicts]
    assert all(each is not None for each in known)
    values = [each.value for each in known if each is not None]
    assert values == pytest.approx([helmholtz, high - low - helmholtz], abs=1e-7)
    assert all(0.0 < each.uncertainty < 0.1 for each in known if each is not None)
    (silent,) = compare([replace(found[0], since=0.1)], reference, asked(tmp_path)).verdicts
    assert silent.known is None


def test_a_measured_temperature_carries_its_error(tmp_path: Path) -> None:
    """The reference rises by 2 with temperature: an error of 0.1 in it makes one of 0.2 in the difference."""
    temperature = estimate(1.2, 0.1, seed=1)
    apart = finding(estimate(0.0, 0.15, seed=2), temperature=temperature)
    along = finding(temperature * 2.0 - 2.4, temperature=temperature)  # rises with it just as the reference does
    far, near = compare([apart, along], Known(), asked(tmp_path)).verdicts
    assert far.error == pytest.approx(np.hypot(0.15, 0.2), rel=0.1)
    assert near.error == pytest.approx(0.0, abs=1e-6)


def ladder(rng: np.random.Generator, *, shift: float = 0.0, common: float = 0.0) -> list[Finding]:
    """All properties at six states that scatter about the reference; properties of a state are correlated in time.

    shift : of one value, in standard errors; common : of every pressure, absolute
    """
    found = []
    mixing = 0.6 * np.ones((5, 5)) + 0.4 * np.eye(5)
    for state in STATES:
        steps = rng.standard_normal((5, SAMPLES))
        series = mixing @ lfilter([1.0], [1.0, -0.8], steps, axis=1)
        chain = (state.temperature, state.density, state.particles, 0)
        for name, values in zip(PROPERTIES, series, strict=True):
            value = mean({chain: values}) + 2.0 * (state.temperature - 1.2)
            if name == "pressure":
                value = value + common
                if state == STATES[2]:
                    value = value + shift * value.standard_error
            found.append(finding(value, name, state))
    return found


def test_chance_alone_disagrees_as_rarely_as_stated(tmp_path: Path) -> None:
    """Level 1 %: of 300 studies 3 +- 1.7, at most 11 (4.5 standard deviations); at least a few rows beyond three."""
    rng, study = np.random.default_rng(12), asked(tmp_path)
    comparisons = [compare(ladder(rng), Known(), study) for _ in range(300)]
    assert sum(comparison.outcome == "disagrees" for comparison in comparisons) <= 11
    rows = [verdict.outcome for comparison in comparisons for verdict in comparison.verdicts]
    expected = 0.0027 * len(rows)
    assert rows.count("disagrees") <= expected + 5.0 * np.sqrt(3.0 * expected)  # correlated rows come in groups


def test_one_value_far_off_is_seen(tmp_path: Path) -> None:
    rng, study = np.random.default_rng(13), asked(tmp_path)
    for _ in range(10):
        assert compare(ladder(rng, shift=7.0), Known(), study).outcome == "disagrees"


def test_many_values_a_little_off_are_seen(tmp_path: Path) -> None:
    """Every pressure off by two standard errors: no row disagrees by itself, all together do."""
    rng, study = np.random.default_rng(14), asked(tmp_path)
    error = np.mean([each.estimate.standard_error for each in ladder(rng) if each.property == "pressure"])
    outcomes = [compare(ladder(rng, common=2.5 * float(error)), Known(), study).outcome for _ in range(10)]
    assert outcomes.count("disagrees") >= 8


def test_the_error_of_a_reference_is_one_and_the_same_at_all_states(tmp_path: Path) -> None:
    """All pressures off by 2.5 times its uncertainty: one deviation, not six. Now up, now down: none of its doing."""
    study = asked(tmp_path)
    found = [each for each in ladder(np.random.default_rng(15)) if each.property == "pressure"]
    uncertainty = float(3.0 * np.mean([each.estimate.standard_error for each in found]))

    def outcome(*shifts: float) -> str:
        moved = [
            replace(each, estimate=each.estimate + shift * uncertainty)
            for each, shift in zip(found, shifts, strict=True)
        ]
        return compare(moved, Known(uncertainty=uncertainty), study).outcome

    assert outcome(2.5, 2.5, 2.5, 2.5, 2.5, 2.5) == "agrees"
    assert outcome(1.5, -1.5, 1.5, -1.5, 1.5, -1.5) == "disagrees"


@pytest.mark.parametrize(
    ("differences", "tolerated", "outcome"),
    [
        ({"pressure": 0.0}, 5.0, "agrees"),
        ({"pressure": 5.0}, 5.0, "undecided"),
        ({"pressure": 50.0}, 5.0, "disagrees"),
        ({"pressure": 0.0, "residual_energy": 9.0}, 5.0, "disagrees"),
        ({"pressure": 5.0, "residual_energy": 0.0}, 5.0, "undecided"),
        ({"pressure": 50.0, "residual_energy": 0.0}, 5.0, "disagrees"),
    ],
)
def test_values_with_a_tolerance_speak_for_themselves(
    tmp_path: Path, differences: dict[str, float], tolerated: float, outcome: str
) -> None:
    found = [finding(estimate(value, 1.0, seed=k), name) for k, (name, value) in enumerate(differences.items())]
    tolerance = {"pressure": Tolerance(tolerated, relative=False)}
    assert compare(found, Known(), asked(tmp_path), tolerance=tolerance).outcome == outcome


def test_values_that_say_the_same_count_once(tmp_path: Path) -> None:
    """P and Z are one deviation of 2.7, which chance makes in 0.7 % of all cases; two of them would be in 0.07 %."""
    found = [finding(estimate(2.7, 0.01), name) for name in ("pressure", "compressibility_factor")]
    assert compare(found, Known(uncertainty=1.0), asked(tmp_path)).outcome == "agrees"
    apart = [finding(estimate(2.7, 0.01), name) for name in ("pressure", "residual_energy")]
    assert compare(apart, Known(uncertainty=1.0), asked(tmp_path)).outcome == "disagrees"


@pytest.mark.parametrize("name", sorted({*FOLLOWS} & {*COMPARED}))
def test_what_follows_from_other_properties_has_rows_and_is_no_evidence_of_its_own(tmp_path: Path, name: str) -> None:
    """Off by 9 of its errors, while what it is made of agrees: its row says so, and all together do not."""
    parts = [finding(estimate(0.0, 0.1, seed=2 + k), each) for k, each in enumerate(FOLLOWS[name])]
    off = finding(estimate(0.9, 0.1), name)
    comparison = compare([*parts, off], Known(), asked(tmp_path))
    assert [verdict.outcome for verdict in comparison.verdicts] == [*("agrees" for _ in parts), "disagrees"]
    assert comparison.outcome == "agrees"
    assert compare([off], Known(), asked(tmp_path)).outcome == "disagrees"
    own = {name: Tolerance(0.3, relative=False)}
    assert compare([*parts, off], Known(), asked(tmp_path), tolerance=own).outcome == "disagrees"


def test_a_tolerance_holds_for_what_says_the_same(tmp_path: Path) -> None:
    """A pressure off by 5 errors and within its tolerance: neither Z nor the enthalpy make the whole disagree."""
    names = ("pressure", "compressibility_factor", "enthalpy")
    found = [finding(estimate(0.5, 0.1), each) for each in names]
    tolerance = {"pressure": Tolerance(1.0, relative=False)}
    assert compare(found, Known(), asked(tmp_path), tolerance=tolerance).outcome == "agrees"
    assert compare(found, Known(), asked(tmp_path)).outcome == "disagrees"


def test_every_property_is_compared_or_cannot_be() -> None:
    """The reference knows what is compared; what is left takes two states. What follows from others follows from rows
    that stand by themselves."""
    assert set(PROPERTIES_KNOWN) == set(COMPARED)
    assert set(FOLLOWS) - set(COMPARED) == {"residual_helmholtz_change", "residual_entropy_change"}
    assert not {part for parts in FOLLOWS.values() for part in parts} - {*PROPERTIES, "residual_chemical_potential"}
    assert not set(FOLLOWS) & {
        part for name in ("residual_helmholtz_energy", "residual_entropy") for part in FOLLOWS[name]
    }


@pytest.mark.parametrize(
    ("name", "truncation", "cutoff", "needed"),
    [
        ("thol-2016", "shifted", 2.5, 'what it needs is truncation "corrected"'),
        ("thol-2015", "corrected", 3.0, 'what it needs is truncation "shifted" at cutoff 2.5 sigma'),
        ("thol-2015", "shifted", 3.0, 'what it needs is truncation "shifted" at cutoff 2.5 sigma'),
        ("kolafa-nezbeda-1994", "force-shifted", 2.5, 'what it needs is truncation "corrected"'),
    ],
)
def test_a_reference_of_another_model_is_refused(
    tmp_path: Path, name: str, truncation: str, cutoff: float, needed: str
) -> None:
    study = asked(tmp_path, truncation, cutoff)
    with pytest.raises(UserError, match=needed):
        against(name, study.fluid)
    with pytest.raises(UserError, match=needed):
        compare([finding(estimate(0.0, 1.0))], find(name), study)


def test_the_table_tells_tolerance_and_cause_in_its_units(tmp_path: Path) -> None:
    """Argon's pressure unit is epsilon/sigma^3 = 41.9 MPa; what was decided has no cause."""
    scale = Scale(epsilon=119.8 * 1.380649e-23, sigma=3.405e-10, mass=6.63e-26)
    found = [finding(estimate(0.0, 1.0)), finding(estimate(0.0, 0.01), state=STATES[1])]
    comparison = compare(found, Known(), asked(tmp_path), tolerance={"pressure": Tolerance(0.5, relative=False)})
    wide, close, overall = verdict_table([comparison], Border("SI", scale)).to_dict("records")
    assert wide["tolerance"] == close["tolerance"] == pytest.approx(0.5 * 41.9, rel=1e-3)
    assert "too wide for the tolerance" in wide["reason"]
    assert close["reason"] == ""
    assert overall["outcome"] == "undecided"
