"""What may be wrong with a study's states and cutoff, known before anything is sampled."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING

from canonry.border import Border
from canonry.study import Study

if TYPE_CHECKING:
    from reference import Reference
    from sampler.fluid import Fluid, State

__all__ = ["guide", "risks"]

_LIQUID = 0.5  # sigma^-3
_CUTOFFS = (5.0, 3.0)  # sigma, below and above that density


def guide(fluid: Fluid) -> Reference:
    """The reference for this model, or that of the full potential as the nearest."""
    from reference import find, names

    references = [find(name) for name in names()]
    return next((each for each in references if each.same_model(fluid.truncation, fluid.cutoff)), references[0])


def risks(study: Study, border: Border) -> list[str]:
    """One sentence each: two phases, freezing, a cutoff too short for its correction."""
    return [*_phases(study.states, guide(study.fluid), border), *_cutoffs(study, border)]


def _phases(states: Sequence[State], reference: Reference, border: Border) -> Iterator[str]:
    from reference.errors import OutOfRange
    from reference.freezing import freezing_density

    for state in states:
        try:
            if reference.phase(state.temperature, state.density) == "two-phase":
                pair = reference.coexistence(state.temperature)
                yield (
                    f"{border.state(state)}: liquid and vapour coexist here, at densities "
                    f"{border.text('density', pair.liquid)} and {border.text('density', pair.vapour)} "
                    f"({reference.name}); the sample is no bulk phase, and its values depend on its size."
                )
        except OutOfRange:
            pass
        try:
            freezing = freezing_density(state.temperature)
        except OutOfRange:
            continue
        if state.density > freezing:
            yield (
                f"{border.state(state)}: the liquid freezes from density {border.text('density', freezing)} on (M. A. "
                "van der Hoef, J. Chem. Phys. 113, 8142 (2000)); the sample may be an undercooled liquid, or "
                "crystallise."
            )


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
