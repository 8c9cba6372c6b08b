"""Which health checks look at a study, how strictly, and which values a failed one makes doubtful.

Every check has a false-alarm rate of 1 % where it stands alone. All readings of a study that rest on a distribution
share 5 %: their rate is the smaller of 1 % and 5 % over their number.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from itertools import pairwise
from typing import TYPE_CHECKING

from canonry.findings import Check
from canonry.frames import with_some_frames
from canonry.isochore import Isochore
from canonry.risks import stability
from canonry.units import PROPERTIES, Scale
from estimators.derived import PARTS
from estimators.estimate import Chain, Estimate
from estimators.health.box import box
from estimators.health.enough import enough
from estimators.health.equal_shares import equal_shares
from estimators.health.force_temperature import force_temperature
from estimators.health.heat_routes import heat_routes
from estimators.health.kinetic_law import kinetic_law
from estimators.health.ledger import ledger
from estimators.health.one_phase import one_phase
from estimators.health.pair_slope import pair_slope
from estimators.health.quantum import quantum
from estimators.health.reading import Reading
from estimators.health.settled import settled
from estimators.health.virial_routes import virial_routes
from estimators.structure import Structure
from sampler.fluid import State
from sampler.series import FrameSums, Series

if TYPE_CHECKING:
    from reference import Reference

__all__ = ["CHECKS", "LEVEL", "Kind", "Samples", "blame", "judged", "known", "of_isochore", "of_rung", "wavelength"]

LEVEL = 0.01  # of a check that stands alone
_STUDY_LEVEL = 0.05  # of all statistical readings of a study together
_SAMPLES = 100_000  # of a rung that most checks look at, at most
_FRAMES = 120  # of a rung that are evaluated again, at most: of 300 that is 2 % of the time that sampling them took


def _made_of(*names: str) -> tuple[str, ...]:
    """These properties, and those that are made of any of them."""
    return (*names, *(name for name, parts in PARTS.items() if name not in names and {*parts} & {*names}))


_EVERY = tuple(PROPERTIES)
_HEAT = _made_of("residual_heat_capacity", "heat_capacity")
_MECHANICAL = _made_of("residual_energy", "pressure", "compressibility_factor", "thermal_pressure", "bulk_modulus")


@dataclass(frozen=True)
class Kind:
    """One kind of check.

    asks : what holds where it is passed, in a few words
    doubt : what a failure says of the values it touches, and so why the trust left in them is this
    trust : left at most, "caution" or "no"
    touches : properties
    """

    asks: str
    doubt: str
    trust: str
    touches: tuple[str, ...] = _EVERY


CHECKS: Mapping[str, Kind] = {
    "ledger": Kind(
        "energy changes by what the bath gives and takes, and by nothing else",
        "energies and forces do not belong to one model, so that no formula for fluctuations holds",
        "no",
    ),
    "kinetic-law": Kind(
        "kinetic energy is distributed as the temperature asks",
        "velocities are not those of the temperature stated, and positions may be off by as much",
        "caution",
    ),
    "equal-shares": Kind(
        "every direction holds its share of kinetic energy, and nothing flows",
        "kinetic energy is not shared equally, so that the motion of some is not that of the temperature stated",
        "caution",
    ),
    "pair-slope": Kind(
        "energies of neighbouring rungs differ as their temperatures ask",
        "this rung or its neighbour is not canonical at its temperature, and reweighting between them rests on that",
        "caution",
    ),
    "force-temperature": Kind(
        "positions have the temperature stated, from forces and their slopes",
        "positions are not those of the temperature stated",
        "caution",
    ),
    "step-bias": Kind(
        "sampling that is exact at any time step gives the same values",
        "the time step shifts values by more than their error bars",
        "caution",
    ),
    "settled": Kind(
        "no trend is left, and halves and repeats agree",
        "the run had not settled, or its repeats are caught in different places; longer ones may give other values",
        "caution",
    ),
    "enough": Kind(
        "independent samples are enough to tell their own error",
        "too few independent samples stand behind the error bars, which may be too narrow",
        "caution",
    ),
    "one-phase": Kind(
        "the sample is one fluid phase",
        "the sample is not one homogeneous fluid, so that its values depend on its size and history",
        "no",
    ),
    "box": Kind(
        "the box is wide enough for cutoff and structure, and values are those of any other size sampled",
        "the box is so small that values depend on its size",
        "caution",
    ),
    "virial-routes": Kind(
        "pressure is the same from virial, g(r) and a change of volume",
        "energies, virials and positions on record contradict one another",
        "caution",
        _MECHANICAL,
    ),
    "heat-routes": Kind(
        "heat capacity is the same by every route that was sampled",
        "routes to the heat capacity contradict one another",
        "caution",
        _HEAT,
    ),
    "quantum": Kind(
        "quantum effects are smaller than the error bars",
        "quantum effects left out are larger than the error bar",
        "caution",
        _made_of("residual_energy", "pressure", "compressibility_factor"),
    ),
}
"""By the name of the check. "no" only where a failure leaves nothing that the values could be values of."""


@dataclass(frozen=True, eq=False)
class Samples:
    """One rung after the cut, with frames: what its checks look at.

    cuts : samples cut off and samples recorded, of each repeat
    own : what the rung says alone
    wavelength : thermal de Broglie wavelength, sigma; None where no mass is known
    """

    series: Sequence[Series]
    structure: Structure | None
    cuts: Sequence[tuple[int, int]]
    own: Mapping[str, Estimate]
    wavelength: float | None

    @cached_property
    def sparse(self) -> list[Series]:
        """The same at longer intervals where there are very many samples, which are not needed for a clear answer."""
        return _sparse(self.series)

    @cached_property
    def seen(self) -> list[Series]:
        """The same with some hundred frames in all."""
        return with_some_frames(self.series, _FRAMES)

    @cached_property
    def sums(self) -> dict[Chain, FrameSums] | None:
        """Of the frames of `seen`; None where there are none, no pair functions, or no room for a smaller box."""
        from sampler.errors import BadRequest
        from sampler.frames import reevaluate

        if not (self.seen[0].fluid.has_pairs and any(len(each.frames) for each in self.seen)):
            return None
        try:
            return {each.chain: reevaluate(each.fluid, each.frames, state=each.state) for each in self.seen}
        except BadRequest:
            return None


Found = Reading | Sequence[Reading] | None
Look = Callable[[Samples], Found]

_OF_RUNG: tuple[Look, ...] = (
    lambda of: ledger(of.series, level=LEVEL),
    lambda of: kinetic_law(of.sparse, level=LEVEL),
    lambda of: equal_shares(of.sparse, level=LEVEL),
    lambda of: force_temperature(of.sparse, of.sums, level=LEVEL),
    lambda of: settled(of.sparse, cut=of.cuts, level=LEVEL),
    lambda of: enough(of.own),
    lambda of: one_phase(of.seen, bulk_modulus=of.own.get("bulk_modulus"), level=LEVEL),
    lambda of: box(of.series, of.structure, level=LEVEL),
    lambda of: virial_routes(of.seen, None, of.sums, level=LEVEL) if of.sums else None,
    lambda of: virial_routes(of.series, of.structure, None, level=LEVEL),
    lambda of: quantum(of.seen, of.sums, wavelength=of.wavelength) if of.sums and of.wavelength else None,
)
_OF_SLOPES: tuple[Callable[[Estimate, Estimate], Found], ...] = (
    lambda own, slope: heat_routes(own, slope, level=LEVEL),
)
_OF_PAIRS: tuple[Callable[[Sequence[Series], Sequence[Series]], Found], ...] = (
    lambda colder, warmer: pair_slope(colder, warmer, level=LEVEL),
)


def blame(check: str) -> str:
    """Why values that a failed check touches are in doubt, as a reason says it."""
    return f"{CHECKS[check].doubt} (check {check})"


def of_rung(samples: Samples) -> list[Reading]:
    """What the checks of one rung read, each as strict as if it stood alone."""
    return [reading for look in _OF_RUNG for reading in _listed(look(samples))]


def of_isochore(isochore: Isochore, series: Mapping[State, Sequence[Series]]) -> Iterator[Check]:
    """What the checks read that look at the rungs of one density together; series without frames, by temperature."""
    for state, own, slope in isochore.slopes():
        for look in _OF_SLOPES:
            yield from (Check(state, reading) for reading in _listed(look(own, slope)))
    for colder, warmer in pairwise(series):
        for both in _OF_PAIRS:
            found = _listed(both(_sparse(series[colder]), _sparse(series[warmer])))
            yield from (Check(colder, reading, warmer) for reading in found)


def known(states: Iterable[State], reference: Reference) -> Iterator[Check]:
    """What is known beforehand of the phase at each state."""
    found = ((state, stability(state, reference)) for state in states)
    return (Check(state, reading) for state, reading in found if reading is not None)


def judged(checks: Sequence[Check]) -> list[Check]:
    """The same, where all that rest on a distribution share the false alarms of the study."""
    number = sum(check.reading.level is not None for check in checks)
    level = min(LEVEL, _STUDY_LEVEL / max(number, 1))
    return [replace(check, reading=check.reading.at(level)) for check in checks]


def wavelength(state: State, scale: Scale | None) -> float | None:
    """Thermal de Broglie wavelength, sigma: h / sqrt(2 pi m k_B T); None where no mass is known."""
    from scipy.constants import Planck

    if scale is None:
        return None
    momentum = math.sqrt(2.0 * math.pi * scale.mass * scale.epsilon * state.temperature)
    return float(Planck / (momentum * scale.sigma))


def _sparse(series: Sequence[Series]) -> list[Series]:
    stride = -(-sum(map(len, series)) // _SAMPLES) or 1
    return [each.every(stride) for each in series]


def _listed(found: Found) -> Sequence[Reading]:
    return () if found is None else (found,) if isinstance(found, Reading) else found
