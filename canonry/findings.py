"""What the samples of a study say, in reduced units: the records between series and tables."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field, replace

import numpy as np
import numpy.typing as npt

from estimators.estimate import Estimate
from estimators.health.reading import Reading
from estimators.scattering import Scattering
from estimators.structure import Structure
from estimators.surface.helmholtz import HeldOut
from sampler.fluid import State

__all__ = ["TRUST", "Check", "Curve", "Cut", "Finding", "Findings", "Overlap", "one_headline"]

Floats = npt.NDArray[np.float64]

TRUST = ("ok", "caution", "no")
"""By weight."""


@dataclass(frozen=True, eq=False)
class Finding:
    """One property at one state by one method.

    estimate : None where it was refused
    temperature : measured, where no bath acts; the state's is then its value
    since : temperature of the rung that a change along the isochore is counted from
    """

    state: State
    property: str
    method: str
    estimate: Estimate | None
    effective_samples: float
    trust: str
    reason: str
    headline: bool
    temperature: Estimate | None = None
    since: float | None = None

    def doubted(self, reason: str, trust: str = "caution") -> Finding:
        """The same with this trust at most, for one more reason, told once; itself where the reason is empty."""
        if not reason:
            return self
        least = max(self.trust, trust, key=TRUST.index)
        reasons = (self.reason, "" if reason in self.reason else reason)
        return replace(self, trust=least, reason="; ".join(filter(None, reasons)))


def one_headline(findings: Sequence[Finding]) -> Iterator[Finding]:
    """The same, where of those of one property and state only the most trusted stays the headline, or the most precise.

    findings : of one state
    """

    def rank(finding: Finding) -> tuple[int, float]:
        error = math.inf if finding.estimate is None else finding.estimate.standard_error
        return TRUST.index(finding.trust), error

    best: dict[str, Finding] = {}
    for finding in findings:
        if finding.headline:
            best[finding.property] = min(best.get(finding.property, finding), finding, key=rank)
    for finding in findings:
        yield replace(finding, headline=best.get(finding.property) is finding)


@dataclass(frozen=True)
class Check:
    """What a health check read at a state; `warmer` is the other one where it looked at two neighbouring rungs."""

    state: State
    reading: Reading
    warmer: State | None = None


@dataclass(frozen=True)
class Cut:
    """Samples left out at the start of a repeat; `effective_samples` stand behind the energy of the rest.

    acceptance : share of the steps that passed the Metropolis test; None where there is none
    """

    state: State
    repeat: int
    cut: int
    samples: int
    effective_samples: float
    acceptance: float | None = None


@dataclass(frozen=True)
class Overlap:
    """Chance that a sample of one of two neighbouring rungs might as well be one of the other (geometric mean)."""

    low: State
    high: State
    value: float


@dataclass(frozen=True, eq=False)
class Curve:
    """A curve of one repeat of a rung, or of all (None): x and y, each (n,)."""

    state: State
    repeat: int | None
    x: Floats
    y: Floats


@dataclass(frozen=True, eq=False)
class Findings:
    """All that the samples of a study say.

    properties : by every method, one headline for each property and state
    curve : on a temperature grid of each isochore
    histograms : probability density of U/N
    ledgers : change of K + U_dyn + ledger per particle over time
    health : what every check read
    exact : estimates by property from sampling that is exact at any time step, where there is such
    sizes : the same from sampling with other numbers of particles, by states with those numbers
    unfinished : states that lack samples the study asks for
    surface : on a grid of temperatures and densities between isochores; none where rungs span no area
    held_out : what was measured at a rung beside what the surface says without that rung
    no_surface : why there is none although there might be
    """

    properties: tuple[Finding, ...]
    curve: tuple[Finding, ...]
    structures: Mapping[State, Structure]
    cuts: tuple[Cut, ...]
    overlaps: tuple[Overlap, ...]
    histograms: tuple[Curve, ...]
    ledgers: tuple[Curve, ...]
    health: tuple[Check, ...]
    exact: Mapping[State, Mapping[str, Estimate]]
    sizes: Mapping[State, Mapping[str, Estimate]]
    unfinished: tuple[State, ...]
    scatterings: Mapping[State, Scattering] = field(default_factory=dict)
    surface: tuple[Finding, ...] = ()
    held_out: tuple[HeldOut, ...] = ()
    no_surface: str = ""

    @property
    def headlines(self) -> tuple[Finding, ...]:
        """The one finding for each property and state that counts."""
        return tuple(finding for finding in self.properties if finding.headline)
