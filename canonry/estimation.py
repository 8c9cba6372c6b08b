"""From the series of a study directory to what they say."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, replace
from functools import cached_property
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
from estimators.estimate import Estimate, mean
from estimators.settle import settled_start
from estimators.structure import Structure, pair_structure
from sampler.fluid import State
from sampler.series import Series

if TYPE_CHECKING:
    from reference import Reference

__all__ = ["findings"]

_BINS = 60  # of a histogram
_POINTS = 400  # of a ledger curve, at most


@dataclass(frozen=True, eq=False)
class _Rung:
    """Samples of one rung after the cut and before, without frames, and what they say alone."""

    series: list[Series]
    own: dict[str, Estimate]
    structure: Structure | None
    before: list[Series]

    @cached_property
    def temperature(self) -> Estimate | None:
        """Measured, where no bath acts."""
        return None if self.series[0].bath else kinetic_temperature(self.series)

    @cached_property
    def state(self) -> State:
        """The state sampled: that asked for, but at the temperature measured where no bath acts."""
        state = self.series[0].state
        return state if self.temperature is None else replace(state, temperature=self.temperature.value)

    @property
    def histogram(self) -> Curve:
        energies = np.concatenate([each.energy for each in self.series]) / self.state.particles
        density, edges = np.histogram(energies, bins=_BINS, density=True)
        return Curve(self.state, None, 0.5 * (edges[1:] + edges[:-1]), density)

    @property
    def cuts(self) -> Iterator[Cut]:
        for before, after in zip(self.before, self.series, strict=True):
            effective = mean({after.chain: after.energy}).effective_samples
            yield Cut(self.state, before.repeat, len(before) - len(after), len(before), effective)

    @property
    def ledgers(self) -> Iterator[Curve]:
        for each in self.before:
            every = -(-len(each) // _POINTS)
            conserved = (each.kinetic + each.sampled_energy + each.ledger) / self.state.particles
            yield Curve(self.state, each.repeat, each.times[::every], (conserved - conserved[0])[::every])


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


def _rung(series: list[Series]) -> _Rung:
    settled = [_settled(each) for each in series]
    structure = pair_structure(settled)
    light = [_light(each) for each in settled]
    return _Rung(
        series=light,
        own=rung_properties(light, contact=structure.contact if structure else None),
        structure=structure,
        before=[_light(each) for each in series],
    )


def _settled(series: Series) -> Series:
    """Without what the energy or the virial says is not settled, half of it at most."""
    return series.after(max(settled_start(series.sampled_energy), settled_start(series.virial)))


def _light(series: Series) -> Series:
    """Without its frames, which take most of the room."""
    return replace(series, frames=series.frames[:0].copy())
