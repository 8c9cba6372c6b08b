"""The Helmholtz surface through all rungs of a study: values between its isochores."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import replace

import numpy as np

from canonry.findings import Finding
from estimators.estimate import Estimate
from estimators.surface.answer import Answer
from estimators.surface.helmholtz import Surface, surface
from estimators.surface.properties import ABSOLUTE
from sampler.fluid import Fluid, State

__all__ = ["absolute", "findings_of", "of_states", "on_grid"]

_TEMPERATURES, _DENSITIES = 9, 13  # of the grid on which a surface is written down
_FAR = 1e6  # sigma; where a potential that is corrected for its long range may be taken to end

Properties = Mapping[str, Estimate]


def of_states(
    own: Mapping[State, Properties],
    fluid: Fluid,
    *,
    ideal_heat_capacity: float | None,
    spoken: Callable[[str, float], str],
) -> Surface | None:
    """The surface through what rungs say alone and can be trusted; None where they span no area or B2 is not known.

    Raises BadSeries or NotSolved where no surface is found.
    """
    if not fluid.has_pairs or len({state.density for state in own}) < 2:
        return None
    particles = next(iter(own)).particles
    trusted = {
        (state.temperature, state.density): {name: each for name, each in properties.items() if each.trust != "no"}
        for state, properties in own.items()
    }
    return surface(
        trusted,
        second_virial=lambda temperature: (1.0 - 1.0 / particles) * _second_virial(fluid, temperature),
        ideal_heat_capacity=ideal_heat_capacity,
        spoken=spoken,
    )


def _second_virial(fluid: Fluid, temperature: float) -> float:
    from reference.virial import pair_second_virial

    whole = replace(fluid, cutoff=_FAR, truncation="plain") if fluid.truncation == "corrected" else fluid
    cutoff = float("inf") if whole is not fluid else fluid.cutoff
    return pair_second_virial(lambda r: float(whole.pair_energy(np.array(r))), temperature=temperature, cutoff=cutoff)


def on_grid(surface: Surface, states: Sequence[State]) -> Iterator[Finding]:
    """At temperatures and densities over the range of states, even in 1/T and in density, where there are answers."""
    temperatures = np.array([state.temperature for state in states])
    densities = np.array([state.density for state in states])
    along = 1.0 / np.linspace(1.0 / temperatures.min(), 1.0 / temperatures.max(), _TEMPERATURES)
    for density in np.linspace(densities.min(), densities.max(), _DENSITIES):
        for temperature in along:
            yield from findings_of(surface.at(float(temperature), float(density)), states[0].particles)


def absolute(surface: Surface, state: State) -> Iterator[Finding]:
    """At a rung, what only a path from the ideal gas tells."""
    answer = surface.at(state.temperature, state.density)
    yield from (finding for finding in findings_of(answer, state.particles) if finding.property in ABSOLUTE)


def findings_of(answer: Answer, particles: int) -> Iterator[Finding]:
    """What a surface says at a state; nothing where it refuses."""
    for name, value in answer.properties.items():
        state = State(answer.temperature, answer.density, particles)
        yield Finding(state, name, "surface", value, value.effective_samples, value.trust, value.reason, headline=True)
