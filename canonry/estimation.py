"""From the series of a study directory to what they say."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, replace
from itertools import chain
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from canonry.border import Border
from canonry.errors import UserError
from canonry.findings import Curve, Cut, Finding, Findings
from canonry.isochore import Isochore, assemble
from canonry.risks import doubt, guide
from canonry.sampling import recorded
from canonry.study import Study
from estimators.canonical import kinetic_temperature, rung_properties
from estimators.compiled import is_cached
from estimators.estimate import Estimate, mean
from estimators.settle import settled_start
from estimators.structure import Structure, pair_structure
from sampler.fluid import State
from sampler.protocol import Protocol
from sampler.series import Series

if TYPE_CHECKING:
    from reference import Reference

__all__ = ["findings"]

_BINS = 60  # of a histogram
_POINTS = 400  # of a ledger curve, at most


@dataclass(frozen=True, eq=False)
class _Rung:
    """Samples of one rung after the cut, without frames, and what they say alone.

    state : that asked for, but at the temperature measured where no bath acts
    temperature : measured, where no bath acts
    """

    state: State
    temperature: Estimate | None
    series: list[Series]
    own: dict[str, Estimate]
    structure: Structure | None
    cuts: list[Cut]
    ledgers: list[Curve]

    @property
    def histogram(self) -> Curve:
        energies = np.concatenate([each.energy for each in self.series]) / self.state.particles
        density, edges = np.histogram(energies, bins=_BINS, density=True)
        return Curve(self.state, None, 0.5 * (edges[1:] + edges[:-1]), density)

    def is_finished(self, sampling: Protocol) -> bool:
        asked = sampling.steps // sampling.record_every
        return len(self.cuts) == sampling.repeats and all(cut.samples == asked for cut in self.cuts)


def findings(study: Study, directory: Path, border: Border, *, watch: Callable[[str], None] | None = None) -> Findings:
    """What a study directory's samples say, also while it is still being sampled.

    border : the units in which reasons name temperatures
    watch : called with a few words on what is worked on
    Raises UserError if nothing has been sampled yet; BadSeries or NotSolved if samples cannot be used.
    """
    tell = watch or (lambda words: None)
    rungs: list[_Rung] = []
    unfinished = []
    for number, state in enumerate(study.states, start=1):
        tell(f"estimating rung {number} of {len(study.states)}{_compiling(study.sampling)}")
        rung = _rung(recorded(study, directory, state))
        if rung is not None:
            rungs.append(rung)
        if rung is None or not rung.is_finished(study.sampling):
            unfinished.append(state)
    if not rungs:
        raise UserError(f"{directory}: there are no samples yet; what is needed is `canonry run` or `canonry sample`")
    tell("reweighting between the rungs")
    reference = guide(study.fluid)
    isochores = [
        _isochore(study, [rung for rung in rungs if rung.state.density == rho], border) for rho in _densities(rungs)
    ]
    return Findings(
        properties=tuple(_doubted((each.properties() for each in isochores), reference)),
        curve=tuple(_doubted((each.curve() for each in isochores), reference)),
        structures={rung.state: rung.structure for rung in rungs if rung.structure is not None},
        cuts=tuple(cut for rung in rungs for cut in rung.cuts),
        overlaps=tuple(overlap for isochore in isochores for overlap in isochore.overlaps()),
        histograms=tuple(rung.histogram for rung in rungs),
        ledgers=tuple(ledger for rung in rungs for ledger in rung.ledgers),
        unfinished=tuple(unfinished),
    )


def _compiling(sampling: Protocol) -> str:
    """Words for what the first frames ever on a machine cost."""
    return "" if sampling.steps < sampling.frame_every or is_cached() else ", compiling for this machine once"


def _doubted(findings: Iterable[Iterable[Finding]], reference: Reference) -> Iterator[Finding]:
    """With caution where the state may be no stable bulk phase."""
    return (each.doubted(doubt(each.state, reference)) for each in chain.from_iterable(findings))


def _densities(rungs: list[_Rung]) -> list[float]:
    return list(dict.fromkeys(rung.state.density for rung in rungs))


def _isochore(study: Study, rungs: list[_Rung], border: Border) -> Isochore:
    rungs = sorted(rungs, key=lambda rung: rung.state)
    series = [each for rung in rungs for each in rung.series]
    temperatures = {rung.state: rung.temperature for rung in rungs if rung.temperature is not None}
    return assemble(
        {rung.state: rung.own for rung in rungs},
        series,
        temperatures=temperatures,
        ideal_heat_capacity=study.ideal_heat_capacity,
        spoken=border.temperature,
    )


def _rung(recorded: list[Series]) -> _Rung | None:
    """None if there are no samples."""
    if not recorded:
        return None
    settled = [_settled(each) for each in recorded]
    structure = pair_structure(settled)
    series = [_light(each) for each in settled]
    temperature = None if series[0].bath else kinetic_temperature(series)
    state = series[0].state
    state = state if temperature is None else replace(state, temperature=temperature.value)
    return _Rung(
        state,
        temperature,
        series,
        own=rung_properties(series, contact=structure.contact if structure else None),
        structure=structure,
        cuts=[_cut(state, *both) for both in zip(recorded, series, strict=True)],
        ledgers=[_ledger(state, each) for each in recorded],
    )


def _cut(state: State, before: Series, after: Series) -> Cut:
    effective = mean({after.chain: after.energy}).effective_samples
    return Cut(state, before.repeat, len(before) - len(after), len(before), effective)


def _ledger(state: State, series: Series) -> Curve:
    every = slice(None, None, -(-len(series) // _POINTS))
    conserved = (series.kinetic[every] + series.sampled_energy[every] + series.ledger[every]) / state.particles
    return Curve(state, series.repeat, series.times[every], conserved - conserved[0])


def _settled(series: Series) -> Series:
    """Without what the energy or the virial says is not settled, half of it at most."""
    return series.after(max(settled_start(series.sampled_energy), settled_start(series.virial)))


def _light(series: Series) -> Series:
    """Without frames, and with columns of its own, which do not keep in memory all that was recorded with them."""
    own = {name: getattr(series, name).copy() for name in ("kinetic", "ledger")}
    return replace(series, frames=series.frames[:0].copy(), **own)
