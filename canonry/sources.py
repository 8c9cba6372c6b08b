"""Settled samples of a study, and what answers at states never sampled: fields of reweighted rungs, and a surface."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
import numpy.typing as npt

from canonry.border import Border
from canonry.study import Study
from canonry.surface import of_states
from estimators.canonical import rung_properties
from estimators.errors import BadSeries, NotSolved
from estimators.field import Field, field
from estimators.surface.helmholtz import Surface
from sampler.errors import BadRequest
from sampler.fluid import State
from sampler.series import Series

__all__ = ["Sources"]

Floats = npt.NDArray[np.float64]

_THINNED = 20_000  # samples of a rung that are enough to see where support ends
_HALVINGS = 10  # of the way to a state without support


@dataclass(frozen=True)
class Sources:
    """Settled samples, and the fields and the surface that are made of them where they are needed."""

    study: Study
    series: Sequence[Series]
    border: Border

    @cached_property
    def densities(self) -> frozenset[float]:
        return frozenset(each.state.density for each in self.series)

    @cached_property
    def scales(self) -> bool:
        """Whether samples can be scaled to another density as they are."""
        first = self.series[0]
        names = ("energy", "sampled_energy", "virial")
        return first.fluid.has_pairs and first.fluid.truncation == "corrected" and first.has(*names)

    @cached_property
    def whole(self) -> Field:
        return field(self.series) if self.scales else field(self.series, look=_evaluated)

    @cached_property
    def framed(self) -> Field:
        """Of the samples that a frame belongs to, with the frames, to be evaluated again."""
        frames = [each.at_frames() for each in self.series if len(each.frames)]
        if not frames:
            raise BadRequest("no positions are stored to evaluate again at another density")
        return field(frames, look=_evaluated)

    def at(self, density: float) -> Field:
        """The field that answers at a density."""
        return self.whole if self.scales or density in self.densities else self.framed

    @cached_property
    def sparse(self) -> Sources:
        """The same with as many samples as tell where support ends."""
        if not self.scales:
            return self
        return replace(self, series=[each.every(-(-len(each) // _THINNED)) for each in self.series])

    @cached_property
    def surface(self) -> Surface | None:
        """Through what each rung says alone; None where none is found."""
        by_state: dict[State, list[Series]] = defaultdict(list)
        for each in self.series:
            by_state[each.state].append(each)
        own = {state: rung_properties(each) for state, each in by_state.items()}
        ideal = self.study.ideal_heat_capacity
        try:
            return of_states(own, self.study.fluid, ideal_heat_capacity=ideal, spoken=self.border.text)
        except (BadSeries, NotSolved):
            return None

    @cached_property
    def changes(self) -> Mapping[State, Floats]:
        """By state: covariance of the changes of the reduced potential with ln T and ln rho."""
        found = {}
        for each in self.series:
            virial = each.column("virial") if each.has("virial") else np.zeros(len(each))
            both = np.stack([-each.column("sampled_energy"), virial]) / each.state.temperature
            found[each.state] = np.cov(both)
        return found

    def reached(self, wanted: State) -> State | None:
        """The last state with support on the way to a target from the rung that is nearest in what changes."""

        def step(state: State) -> Floats:
            return np.log([wanted.temperature / state.temperature, wanted.density / state.density])

        nearest = min(self.changes, key=lambda state: float(step(state) @ self.changes[state] @ step(state)))
        whole = step(nearest)

        def on_the_way(share: float) -> State:
            t, rho = np.exp(share * whole) * (nearest.temperature, nearest.density)
            return State(float(t), float(rho), nearest.particles)

        low, high = 0.0, 1.0
        for _ in range(_HALVINGS):
            middle = on_the_way(0.5 * (low + high))
            supported = not self.sparse.at(middle.density).at(middle.temperature, middle.density).refused
            low, high = (0.5 * (low + high), high) if supported else (low, 0.5 * (low + high))
        reached = on_the_way(low)
        there = self.at(reached.density).at(reached.temperature, reached.density)
        return None if there.refused else reached


def _evaluated(series: Series, density: float) -> Series:
    """Frames of a series evaluated again in the box of another density, with the fluid's own cutoff."""
    from sampler.frames import totals_at

    return series.moved(density, totals_at(series.fluid, series.frames, state=series.state, density=density))
