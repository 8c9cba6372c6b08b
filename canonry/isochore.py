"""The rungs of one density together: reweighted values, which of two values counts, and the curve between the rungs."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np

from canonry.findings import Finding, Overlap
from estimators.changes import Change, changes
from estimators.derived import derived, unclear
from estimators.estimate import Estimate
from estimators.reweight import Pooled, Reweighted, pool
from sampler.fluid import State
from sampler.series import Series

__all__ = ["Isochore", "assemble"]

_GRID = 61  # temperatures of a curve
_AGREEMENT = 3.0  # combined standard errors between the reweighted value and the rung's own
_ALONE = 1e-9  # share of its samples that a rung connected with no other has in common with others, at most
_STEP = 1e-3  # of the temperature, to either side, for a slope

Properties = Mapping[str, Estimate]


@dataclass(frozen=True, eq=False)
class Isochore:
    """States by rising temperature with what each says alone, and all of them pooled.

    pooled : None where there is nothing to pool: a single rung, no bath, no energy
    temperatures : measured, where no bath acts
    series : those pooled, if any; spoken : writes a temperature (epsilon/k_B) for the reader
    """

    own: Mapping[State, Properties]
    pooled: Pooled | None
    temperatures: Mapping[State, Estimate]
    ideal_heat_capacity: float | None
    series: Sequence[Series] = ()
    spoken: Callable[[float], str] = str

    def overlaps(self) -> Iterator[Overlap]:
        """Of neighbouring rungs."""
        if self.pooled is not None:
            states = list(self.own)
            for index, (low, high) in enumerate(pairwise(states)):
                shared = self.pooled.overlap[index, index + 1] * self.pooled.overlap[index + 1, index]
                yield Overlap(low, high, float(np.sqrt(shared)))

    def properties(self) -> Iterator[Finding]:
        """Of every rung, its own values and the reweighted ones, and what has changed on the way to it."""
        at_rungs = self._at_rungs()
        energies = {
            each.temperature: each.properties["residual_energy"]
            for each in at_rungs
            if each is not None and "residual_energy" in each.properties
        }
        made = {} if self.pooled is None else changes(self.pooled, self.series, energies)
        for (state, properties), pooled in zip(self.own.items(), at_rungs, strict=True):
            others = {} if pooled is None else self._completed(state, pooled.properties)
            for name, own in self._completed(state, properties).items():
                for finding in _both(state, name, own, others.get(name), pooled):
                    yield replace(finding, temperature=self.temperatures.get(state))
            if state.temperature in made:
                yield from self._changed(state, made[state.temperature])

    def _changed(self, state: State, change: Change) -> Iterator[Finding]:
        """With caution where it does not start at the coldest rung of all."""
        coldest = next(iter(self.own)).temperature
        start = (
            ""
            if change.start == coldest
            else f"counted from the rung at {self.spoken(change.start)}: colder ones share too few samples"
        )
        for name in ("helmholtz", "entropy"):
            value = getattr(change, name)
            found = _reweighted(state, f"residual_{name}_change", value, value.effective_samples, headline=True)
            yield replace(found, since=change.start).doubted(start)

    def slopes(self) -> Iterator[tuple[State, Estimate, Estimate]]:
        """Of every rung with both, its own residual heat capacity and the slope of the reweighted energy."""
        if self.pooled is None:
            return
        states = [*self.own]
        beside = [state.temperature * (1.0 + step) for state in states for step in (-_STEP, _STEP)]
        found = [at.properties.get("residual_energy") for at in self.pooled.curve(beside)]
        for state, low, high in zip(states, found[::2], found[1::2], strict=True):
            own = self.own[state].get("residual_heat_capacity")
            if own is not None and low is not None and high is not None:
                yield state, own, (high - low) / (2.0 * _STEP * state.temperature)

    def curve(self) -> Iterator[Finding]:
        """Reweighted values from the coldest rung to the warmest; refused ones carry the reason."""
        if self.pooled is None:
            return
        first, properties = next(iter(self.own.items()))
        names = [*self._completed(first, properties)]
        temperatures = np.linspace(self.pooled.temperatures[0], self.pooled.temperatures[-1], _GRID)
        for at in self.pooled.curve(temperatures.tolist()):
            state = replace(first, temperature=at.temperature)
            for name, value in self._completed(state, at.properties).items():
                yield _reweighted(state, name, value, at.effective_samples, headline=True)
            if at.refused:
                for name in names:
                    yield Finding(state, name, "reweighted", None, at.effective_samples, "no", at.refused, True)

    def _at_rungs(self) -> list[Reweighted | None]:
        """What all samples say at each rung, in one pass over them."""
        if self.pooled is None:
            return [None] * len(self.own)
        found = self.pooled.curve([state.temperature for state in self.own])
        apart = np.diag(self.pooled.overlap) > 1.0 - _ALONE
        refused = "the rung shares too few samples with any other"
        return [
            Reweighted(each.temperature, 0.0, {}, refused) if alone else each
            for each, alone in zip(found, apart, strict=True)
        ]

    def _completed(self, state: State, properties: Properties) -> dict[str, Estimate | str]:
        """With what follows from them, or the reason why it cannot be told."""
        ideal, temperature = self.ideal_heat_capacity, self.temperatures.get(state, state.temperature)
        found = derived(properties, temperature=temperature, density=state.density, ideal_heat_capacity=ideal)
        return {**properties, **found, **unclear(properties, ideal_heat_capacity=ideal)}


def assemble(
    own: Mapping[State, Properties],
    series: Sequence[Series],
    *,
    temperatures: Mapping[State, Estimate],
    ideal_heat_capacity: float | None,
    spoken: Callable[[float], str],
) -> Isochore:
    """The rungs of one density.

    own : what each rung says alone, by rising temperature; temperatures : measured, where no bath acts
    series : all repeats of these rungs, already cut
    spoken : writes a temperature (epsilon/k_B) for the reader
    Raises NotSolved if rungs overlap and yet cannot be pooled.
    """
    weighed = len(own) > 1 and all(each.bath and each.has("sampled_energy") for each in series)
    pooled = pool(series, spoken=spoken) if weighed else None
    return Isochore(own, pooled, temperatures, ideal_heat_capacity, series, spoken)


def _both(
    state: State, name: str, own: Estimate | str, other: Estimate | str | None, pooled: Reweighted | None
) -> Iterator[Finding]:
    """The rung's own value and the reweighted one; exactly one of them is the headline.

    That is the reweighted value where there is one and both agree within three combined standard errors, else the
    rung's own, with caution and the reason. Where there is nothing to reweight (a rung alone at its density, no bath, a
    bulk modulus that needs g at contact) the rung's own stands as it is. Either may be a reason why there is no value.
    """
    doubt = "" if pooled is None else pooled.refused
    if isinstance(own, Estimate) and isinstance(other, Estimate):
        allowed = _AGREEMENT * float(np.hypot(other.standard_error, own.standard_error))
        if not abs(other.value - own.value) <= allowed:
            doubt = "the value from all rungs together lies more than three combined standard errors away"
    chosen = isinstance(other, Estimate) and not doubt
    if isinstance(own, Estimate):
        found = Finding(state, name, own.method, own, own.effective_samples, own.trust, own.reason, not chosen)
        yield found.doubted(doubt)
    else:
        yield Finding(state, name, "derived", None, math.nan, "no", own, not chosen)
    if other is not None and pooled is not None:
        yield _reweighted(state, name, other, pooled.effective_samples, headline=chosen)


def _reweighted(state: State, name: str, value: Estimate | str, samples: float, *, headline: bool) -> Finding:
    if isinstance(value, str):
        return Finding(state, name, "reweighted", None, samples, "no", value, headline)
    return Finding(state, name, "reweighted", value, samples, value.trust, value.reason, headline)
