"""What may be wrong with a study's states and cutoff, known before anything is sampled."""

from __future__ import annotations

from collections.abc import Collection, Iterator, Sequence
from functools import cache
from itertools import chain
from typing import TYPE_CHECKING

from canonry.border import Border
from canonry.numbers import plain
from canonry.study import Study

if TYPE_CHECKING:
    from estimators.health.reading import Reading
    from reference import Reference
    from reference.coexistence import Coexistence
    from sampler.fluid import Fluid, State

__all__ = ["doubt", "guide", "risks", "stability"]

_FREEZING = "M. A. van der Hoef, J. Chem. Phys. 113, 8142 (2000)"
_MIXED = (
    "the density is a factor {ratio:.3g} inside the nearer of those of coexisting vapour and liquid ({name}); above "
    "one the sample is no stable bulk phase, and densities outside that gap are what to sample"
)
_FROZEN = (
    "the density is {ratio:.3g} times that from which the liquid freezes (" + _FREEZING + "); above one the sample may "
    "be an undercooled liquid, or crystallise, and a lower density or a higher temperature is what to sample"
)
_LIQUID = 0.5  # sigma^-3
_CUTOFFS = (5.0, 3.0)  # sigma, below and above that density


def guide(fluid: Fluid) -> Reference:
    """The reference for this model, or that of the full potential as the nearest."""
    from reference import find, names

    references = [find(name) for name in names()]
    return next((each for each in references if each.same_model(fluid.truncation, fluid.cutoff)), references[0])


def doubt(state: State, reference: Reference) -> str:
    """Why a sample at a state may be no stable bulk phase, in a few words; empty where nothing says so."""
    if _coexisting(state, reference) is not None:
        return "liquid and vapour coexist here"
    return "" if _freezing(state) is None else "beyond freezing"


def stability(state: State, reference: Reference) -> Reading | None:
    """How far a density lies beyond freezing, or inside of coexistence, as a ratio; None where nothing is known."""
    from estimators.health.reading import Reading

    pair, freezing = _coexistence(reference.name, state.temperature), _freezing_density(state.temperature)
    known = [(min(state.density / pair.vapour, pair.liquid / state.density), _MIXED)] if pair else []
    known += [(state.density / freezing, _FROZEN)] if freezing else []
    if not known:
        return None
    ratio, meaning = max(known)
    return Reading("one-phase", ratio, 1.0, meaning.format(ratio=ratio, name=reference.name))


def risks(study: Study, border: Border) -> list[str]:
    """One sentence for each density: two phases, freezing, a cutoff too short for its correction."""
    if not study.fluid.has_pairs:
        return []
    reference = guide(study.fluid)
    phases = (_phases(states, reference, border) for states in study.isochores.values())
    return [*chain.from_iterable(phases), *_cutoffs(study, border)]


def _phases(states: Sequence[State], reference: Reference, border: Border) -> Iterator[str]:
    """Of one density; densities of coexistence and freezing are those at the coldest of the states concerned."""
    mixed = {state: pair for state in states if (pair := _coexisting(state, reference)) is not None}
    if mixed:
        pair = mixed[min(mixed)]
        yield (
            f"{_named([*mixed], border)}: liquid and vapour coexist here, at densities "
            f"{border.text('density', pair.liquid)} and {border.text('density', pair.vapour)}{_coldest(mixed)} "
            f"({reference.name}); the sample is no bulk phase, and its values depend on its size."
        )
    frozen = {state: density for state in states if (density := _freezing(state)) is not None}
    if frozen:
        yield (
            f"{_named([*frozen], border)}: the liquid freezes from density "
            f"{border.text('density', frozen[min(frozen)])} on{_coldest(frozen)} ({_FREEZING}); "
            "the sample may be an undercooled liquid, or crystallise."
        )


def _named(states: Sequence[State], border: Border) -> str:
    """States of one density, as `Border.state` names one of them."""
    *others, last = states
    temperatures = (plain(border.coordinate("temperature", state.temperature)) for state in others)
    return border.state(last).replace("T = ", f"T = {''.join(f'{each}, ' for each in temperatures)}", 1)


def _coldest(states: Collection[State]) -> str:
    return " at the lowest of these temperatures" if len(states) > 1 else ""


def _coexisting(state: State, reference: Reference) -> Coexistence | None:
    """Liquid and vapour between whose densities a state lies; None where it does not, or nothing is known."""
    pair = _coexistence(reference.name, state.temperature)
    return pair if pair is not None and pair.vapour < state.density < pair.liquid else None


@cache
def _coexistence(reference: str, temperature: float) -> Coexistence | None:
    from reference import find
    from reference.errors import OutOfRange

    try:
        return find(reference).coexistence(temperature)
    except OutOfRange:
        return None


def _freezing(state: State) -> float | None:
    """Density from which the liquid freezes, where a state lies beyond it; None where not, or nothing is known."""
    freezing = _freezing_density(state.temperature)
    return freezing if freezing is not None and state.density > freezing else None


def _freezing_density(temperature: float) -> float | None:
    from reference.errors import OutOfRange
    from reference.freezing import freezing_density

    try:
        return freezing_density(temperature)
    except OutOfRange:
        return None


def _cutoffs(study: Study, border: Border) -> Iterator[str]:
    if study.fluid.truncation != "corrected":
        return
    for density in study.isochores:
        wanted = _CUTOFFS[density >= _LIQUID]
        if study.fluid.cutoff < wanted:
            yield (
                f"Density {border.text('density', density)}: the correction beyond the cutoff takes the fluid as "
                f"homogeneous there, which wants a cutoff of {border.text('length', wanted)} at least, not "
                f"{border.text('length', study.fluid.cutoff)}."
            )
