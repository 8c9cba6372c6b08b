"""Estimates held against a reference for the same model: value by value, and all together.

Value by value, with s^2 = standard error^2 + reference uncertainty^2 and z = (value - reference)/s:

without tolerance, `agrees` up to |z| = 3 and `disagrees` beyond, which chance alone does to 0.3 % of all values;
with a tolerance, equivalence: `agrees` only where the 95 % interval of the difference (two s to either side) lies
inside the tolerance, `disagrees` where it lies outside altogether, else `undecided`;
`undecided` in any case where the estimate is not to be trusted or the reference does not cover the state.

All together, over the values without tolerance that could be decided: `disagrees` at a level of 1 %, half of it for the
sum of squares under the covariance of the estimates and of the reference (chi-square), half for the largest |z|
(Bonferroni). Values that follow from others at the same state are no evidence beyond those, and are left out. A
reference's uncertainty is one and the same error at all states of a property. A value with a tolerance speaks for
itself: one that disagrees, or leaves open what was asked, makes the whole so.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
from scipy import stats

from canonry.errors import UserError
from canonry.findings import Finding
from canonry.study import COMPARED, Study, Tolerance
from estimators.covariance import covariance_matrix
from estimators.derived import PARTS
from estimators.estimate import Estimate
from sampler.fluid import Fluid

if TYPE_CHECKING:
    from reference import Reference
    from reference.equation_of_state import ReferenceValue

__all__ = ["FOLLOWS", "OUTCOMES", "Comparison", "Verdict", "against", "compare"]

Floats = npt.NDArray[np.float64]

OUTCOMES = ("agrees", "undecided", "disagrees")  # by weight
_WIDEST = 3.0  # combined standard errors within which a value agrees
_LEVEL = 0.01
_STEP = 1e-4  # of the temperature, for a slope
_SMALLEST_EIGENVALUE = 0.02
"""Of the correlation matrix; smaller ones are noise of its finite number of blocks, or rest on the reference's error
being the same at all states to the last digit."""
FOLLOWS: Mapping[str, tuple[str, ...]] = {
    "residual_heat_capacity": ("heat_capacity",),
    "compressibility_factor": ("pressure",),
    **PARTS,
    **dict.fromkeys(("residual_helmholtz_change", "residual_entropy_change"), ("residual_energy",)),
    "residual_helmholtz_energy": ("residual_chemical_potential", "pressure"),
    "residual_entropy": ("residual_chemical_potential", "pressure", "residual_energy"),
}
"""Properties that say nothing but what others do at the same state: these."""
_ABSOLUTE = {
    "residual_helmholtz_change": "residual_helmholtz_energy",
    "residual_entropy_change": "residual_entropy",
}


@dataclass(frozen=True, eq=False)
class Verdict:
    """One headline value held against a reference, in reduced units.

    known : None where the reference is silent
    slope : d known/dT where the temperature is a measured one, else 0
    """

    finding: Finding
    known: ReferenceValue | None
    tolerance: Tolerance | None
    slope: float = 0.0

    @cached_property
    def difference(self) -> Estimate | None:
        """Value less reference value, with the error of a measured temperature but not that of the reference."""
        estimate, temperature = self.finding.estimate, self.finding.temperature
        if self.known is None or estimate is None:
            return None
        difference = estimate - self.known.value
        return difference if temperature is None else difference - (temperature - temperature.value) * self.slope

    @property
    def error(self) -> float:
        """Combined standard error of the difference; not a number where there is none."""
        if self.known is None or self.difference is None:
            return math.nan
        return math.hypot(self.difference.standard_error, self.known.uncertainty)

    @property
    def z(self) -> float:
        """Difference in combined standard errors; not a number where there is none."""
        if self.difference is None or not 0.0 < self.error < math.inf:
            return math.nan
        return self.difference.value / self.error

    @property
    def outcome(self) -> str:
        """'agrees', 'disagrees' or 'undecided'."""
        if self.known is None or not math.isfinite(self.z) or self.finding.trust == "no":
            return "undecided"
        if self.tolerance is None:
            return "agrees" if abs(self.z) <= _WIDEST else "disagrees"
        return self._equivalence(self.error)

    @property
    def limit(self) -> float:
        """The tolerance as a difference; not a number where there is none."""
        if self.tolerance is None or self.known is None:
            return math.nan
        return self.tolerance.value * (abs(self.known.value) if self.tolerance.relative else 1.0)

    @property
    def reason(self) -> str:
        """Why it is undecided, in words; empty if it is not."""
        if self.outcome != "undecided":
            return ""
        if self.known is None:
            return "the state is outside the range of the reference"
        if self.finding.trust == "no" or not math.isfinite(self.z):
            return "the value is not to be trusted"
        uncertainty, error = self.known.uncertainty, math.sqrt(max(self.error**2 - self.known.uncertainty**2, 0.0))
        if 2.0 * uncertainty > self.limit or (uncertainty > error and self._equivalence(uncertainty) == "undecided"):
            return (
                "the uncertainty of the reference itself is too large for the tolerance, and no sampling changes that"
            )
        return "the error bar is too wide for the tolerance; longer sampling narrows it"

    def _equivalence(self, error: float) -> str:
        """Outcome under a tolerance, were this the combined error."""
        size = abs(self.z) * self.error
        if size + 2.0 * error <= self.limit:
            return "agrees"
        return "disagrees" if size - 2.0 * error > self.limit else "undecided"


@dataclass(frozen=True, eq=False)
class Comparison:
    """All headline values held against one reference."""

    reference: str
    verdicts: tuple[Verdict, ...]

    @property
    def outcome(self) -> str:
        """Of all values together, as the module says."""
        plain = [v for v in _independent(self.verdicts) if v.tolerance is None and v.outcome != "undecided"]
        outcomes = [verdict.outcome for verdict in self.verdicts if verdict.tolerance is not None]
        if plain:
            outcomes.append("disagrees" if _improbable(plain) else "agrees")
        return max(outcomes, key=OUTCOMES.index, default="undecided")


def compare(
    findings: Sequence[Finding], reference: Reference, study: Study, *, tolerance: Mapping[str, Tolerance] | None = None
) -> Comparison:
    """Headline findings of a study held against a reference for the same model.

    tolerance : by property, by default the study's
    Raises UserError if the reference describes another model.
    """
    _check_model(reference, study.fluid)
    tolerance = study.compare.tolerance if tolerance is None else tolerance
    ideal = study.ideal_heat_capacity
    return Comparison(
        reference.name,
        tuple(
            Verdict(
                finding,
                _known(reference, finding, finding.state.temperature, ideal),
                tolerance.get(finding.property),
                0.0 if finding.temperature is None else _slope(reference, finding, ideal),
            )
            for finding in findings
            if finding.headline and (finding.property in COMPARED or finding.since is not None)
        ),
    )


def against(name: str, fluid: Fluid) -> Reference:
    """A reference by its name. Raises UnknownReference, or UserError if it describes another model than the fluid."""
    from reference import find

    reference = find(name)
    _check_model(reference, fluid)
    return reference


def _check_model(reference: Reference, fluid: Fluid) -> None:
    if not fluid.has_pairs:
        raise UserError(f"--against {reference.name}: no reference describes a fluid that was sampled elsewhere")
    if reference.same_model(fluid.truncation, fluid.cutoff):
        return
    described = reference.fluid
    needed = (
        'truncation "corrected"'
        if described.truncation == "full"
        else f'truncation "{described.truncation}" at cutoff {described.cutoff:g} sigma'
    )
    raise UserError(
        f"--against {reference.name}: it describes another model than the one sampled, which has truncation "
        f'"{fluid.truncation}" at cutoff {fluid.cutoff:g} sigma; what it needs is {needed}'
    )


def _known(
    reference: Reference, finding: Finding, temperature: float, ideal_heat_capacity: float | None
) -> ReferenceValue | None:
    density = finding.state.density
    if reference.covers(temperature, density):
        return None
    if finding.since is not None:
        return _known_change(reference, finding.property, density, (finding.since, temperature))
    ideal = {} if ideal_heat_capacity is None else {"ideal_heat_capacity": ideal_heat_capacity}
    return reference.value(finding.property, temperature=temperature, density=density, **ideal)


def _known_change(reference: Reference, name: str, density: float, ends: tuple[float, float]) -> ReferenceValue | None:
    """Change of A_res/(NT) or of S_res/N from one temperature to another.

    d(A_res/NT)/d(1/T) = u: what is known of u between the ends tells how uncertain both are.
    """
    from reference.equation_of_state import ReferenceValue

    if any(reference.covers(temperature, density) for temperature in ends):
        return None
    start, end = (
        {each: reference.value(each, temperature=t, density=density) for each in ("residual_energy", _ABSOLUTE[name])}
        for t in ends
    )
    low, high = ends
    energies = [each["residual_energy"].uncertainty for each in (start, end)]
    uncertainty = abs(1.0 / high - 1.0 / low) * max(energies)
    first, last = (each[_ABSOLUTE[name]].value for each in (start, end))
    note = "propagated from the accuracy of residual_energy between the two temperatures"
    if name == "residual_entropy_change":
        return ReferenceValue(last - first, uncertainty + energies[0] / low + energies[1] / high, note)
    return ReferenceValue(last / high - first / low, uncertainty, note)


def _slope(reference: Reference, finding: Finding, ideal_heat_capacity: float | None) -> float:
    """Change of the reference value with temperature; 0 where the reference is silent."""
    temperatures = [finding.state.temperature * (1.0 + step) for step in (-_STEP, _STEP)]
    low, high = (_known(reference, finding, each, ideal_heat_capacity) for each in temperatures)
    return 0.0 if low is None or high is None else (high.value - low.value) / (temperatures[1] - temperatures[0])


def _independent(verdicts: Sequence[Verdict]) -> list[Verdict]:
    """Without values that say what others do at the same state."""
    there = {(verdict.finding.state, verdict.finding.property) for verdict in verdicts}

    def said(verdict: Verdict) -> bool:
        return any((verdict.finding.state, each) in there for each in FOLLOWS.get(verdict.finding.property, ()))

    return [verdict for verdict in verdicts if not said(verdict)]


def _improbable(verdicts: Sequence[Verdict]) -> bool:
    largest = max(abs(verdict.z) for verdict in verdicts)
    chances = [_chance_of_squares(verdicts), min(1.0, 2.0 * stats.norm.sf(largest) * len(verdicts))]
    return min(chances) < 0.5 * _LEVEL


def _chance_of_squares(verdicts: Sequence[Verdict]) -> float:
    """Chance of a larger sum of squares of the deviations, along the directions that the covariance knows."""
    differences = [verdict.difference for verdict in verdicts if verdict.difference is not None]
    covariance = covariance_matrix(differences) + _reference_covariance(verdicts)
    errors = np.sqrt(np.diag(covariance))
    sizes, directions = np.linalg.eigh(covariance / errors[:, None] / errors)
    clear = sizes > _SMALLEST_EIGENVALUE
    deviations = np.array([difference.value for difference in differences]) / errors
    squares = (deviations @ directions[:, clear]) ** 2 / sizes[clear]
    return float(stats.chi2.sf(np.sum(squares), int(np.sum(clear))))


def _reference_covariance(verdicts: Sequence[Verdict]) -> Floats:
    """Fully correlated between the states of one property, independent between properties."""
    uncertainty = np.array([verdict.known.uncertainty for verdict in verdicts if verdict.known is not None])
    names = np.array([verdict.finding.property for verdict in verdicts])
    return np.where(names[:, None] == names, np.multiply.outer(uncertainty, uncertainty), 0.0)
