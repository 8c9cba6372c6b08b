"""From the series of a study directory to what they say."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np

from canonry.errors import UserError
from canonry.findings import Curve, Cut, Findings
from canonry.isochore import Isochore, assemble
from canonry.sampling import recorded
from canonry.study import Study
from estimators.canonical import rung_properties
from estimators.estimate import Estimate, mean
from estimators.settle import settled_start
from estimators.structure import Structure, pair_structure
from sampler.fluid import State
from sampler.series import Series

__all__ = ["findings"]

_BINS = 60  # of a histogram
_POINTS = 400  # of a ledger curve, at most


@dataclass(frozen=True, eq=False)
class _Rung:
    """Samples of one rung after the cut, without frames, and what they say alone."""

    series: list[Series]
    own: dict[str, Estimate]
    structure: Structure | None
    cuts: list[Cut]
    ledgers: list[Curve]

    @property
    def state(self) -> State:
        return self.series[0].state

    @property
    def histogram(self) -> Curve:
        energies = np.concatenate([each.energy for each in self.series]) / self.state.particles
        density, edges = np.histogram(energies, bins=_BINS, density=True)
        return Curve(self.state, None, 0.5 * (edges[1:] + edges[:-1]), density)


def findings(study: Study, directory: Path, *, watch: Callable[[str], None] | None = None) -> Findings:
    """What a study directory's samples say, also while it is still being sampled.

    watch : called with a few words on what is worked on
    Raises UserError if nothing has been sampled yet; BadSeries or NotSolved if samples cannot be used.
    """
    tell = watch or (lambda words: None)
    rungs: list[_Rung] = []
    unfinished = []
    for number, state in enumerate(study.states, start=1):
        tell(f"estimating rung {number} of {len(study.states)}")
        series = recorded(study, directory, state)
        if series:
            rungs.append(_rung(series))
        asked = study.sampling.steps // study.sampling.record_every
        if len(series) < study.sampling.repeats or any(len(each) < asked for each in series):
            unfinished.append(state)
    if not rungs:
        raise UserError(f"{directory}: there are no samples yet; what is needed is `canonry run` or `canonry sample`")
    tell("reweighting between the rungs")
    isochores = [_isochore(study, [rung for rung in rungs if rung.state.density == rho]) for rho in _densities(rungs)]
    return Findings(
        properties=tuple(finding for isochore in isochores for finding in isochore.properties()),
        curve=tuple(finding for isochore in isochores for finding in isochore.curve()),
        structures={rung.state: rung.structure for rung in rungs if rung.structure is not None},
        cuts=tuple(cut for rung in rungs for cut in rung.cuts),
        overlaps=tuple(overlap for isochore in isochores for overlap in isochore.overlaps()),
        histograms=tuple(rung.histogram for rung in rungs),
        ledgers=tuple(ledger for rung in rungs for ledger in rung.ledgers),
        unfinished=tuple(unfinished),
    )


def _densities(rungs: list[_Rung]) -> list[float]:
    return list(dict.fromkeys(rung.state.density for rung in rungs))


def _isochore(study: Study, rungs: list[_Rung]) -> Isochore:
    own = {rung.state: rung.own for rung in rungs}
    series = [each for rung in rungs for each in rung.series]
    return assemble(own, series, ideal_heat_capacity=study.ideal_heat_capacity)


def _rung(series: list[Series]) -> _Rung:
    settled = [_settled(each) for each in series]
    structure = pair_structure(settled)
    light = [replace(each, frames=each.frames[:0]) for each in settled]
    return _Rung(
        series=light,
        own=rung_properties(light, contact=structure.contact if structure else None),
        structure=structure,
        cuts=[_cut(before, after) for before, after in zip(series, light, strict=True)],
        ledgers=[_ledger(each) for each in series],
    )


def _settled(series: Series) -> Series:
    """Without what the energy or the virial says is not settled, as long as anything is left."""
    start = max(settled_start(series.sampled_energy), settled_start(series.virial))
    after = series.after(start)
    return after if len(after) else series


def _cut(before: Series, after: Series) -> Cut:
    state = before.state
    chain = (state.temperature, state.density, state.particles, before.repeat)
    effective = mean({chain: after.energy}).effective_samples
    return Cut(state, before.repeat, len(before) - len(after), len(before), effective)


def _ledger(series: Series) -> Curve:
    every = -(-len(series) // _POINTS)
    conserved = (series.kinetic + series.sampled_energy + series.ledger) / series.state.particles
    return Curve(series.state, series.repeat, series.times[::every], (conserved - conserved[0])[::every])
