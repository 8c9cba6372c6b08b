"""From the series of a study directory to what they say."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Sequence
from dataclasses import dataclass, replace
from itertools import chain
from pathlib import Path
from typing import Any

import numpy as np

from canonry.adopted import doubts
from canonry.allotment import protocols
from canonry.beside import Rung, exactly, found, other_sizes
from canonry.border import Border
from canonry.errors import UserError
from canonry.findings import Check, Curve, Cut, Finding, Findings, one_headline
from canonry.frames import findings_of, inserted, scattered
from canonry.health import Samples, judged, known, of_isochore, of_rung, wavelength
from canonry.isochore import Isochore, assemble
from canonry.marking import marked
from canonry.risks import doubt, guide
from canonry.sampling import recorded
from canonry.study import Study
from canonry.surface import absolute, of_states, on_grid
from canonry.units import Scale
from estimators.canonical import kinetic_temperature, rung_properties
from estimators.compiled import is_cached
from estimators.errors import BadSeries, NotSolved
from estimators.estimate import Estimate, mean
from estimators.insertion import Insertion
from estimators.scattering import Scattering
from estimators.settle import settled_start
from estimators.structure import Structure, pair_structure
from estimators.surface.helmholtz import Surface
from sampler.fluid import State
from sampler.forces import evaluate
from sampler.protocol import Protocol
from sampler.series import Series

__all__ = ["findings", "settled", "without_frames"]

_BINS = 60  # of a histogram
_POINTS = 400  # of a ledger curve, at most
_CONSERVED = ("kinetic", "sampled_energy", "ledger")


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
    insertion: Insertion | None
    scattering: Scattering | None
    cuts: list[Cut]
    ledgers: list[Curve]
    checks: list[Check]

    @property
    def histogram(self) -> Curve | None:
        if not all(each.has("energy") for each in self.series):
            return None
        energies = np.concatenate([each.column("energy") for each in self.series]) / self.state.particles
        density, edges = np.histogram(energies, bins=_BINS, density=True)
        return Curve(self.state, None, 0.5 * (edges[1:] + edges[:-1]), density)

    def beyond(self, surface: Surface | None) -> Iterator[Finding]:
        """What its frames say beyond averages and fluctuations, and what the surface says that these do not."""
        found = [*findings_of(self.state, self.own, self.insertion, self.scattering)]
        if surface is not None:
            found += absolute(surface, self.state)
        for finding in one_headline(found):
            yield replace(finding, temperature=self.temperature)

    @property
    def measured(self) -> dict[str, Estimate]:
        """What it says alone, with the chemical potential where that can be trusted."""
        if self.insertion is None or self.insertion.trust != "ok":
            return self.own
        return {**self.own, "residual_chemical_potential": self.insertion.chemical_potential}

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
    asked = protocols(study, directory)
    for number, state in enumerate(study.states, start=1):
        tell(f"estimating rung {number} of {len(study.states)}{_compiling(study.sampling)}")
        rung = _rung(recorded(study, directory, state), study.scale)
        if rung is not None:
            rungs.append(rung)
        if rung is None or not (study.adopted or rung.is_finished(asked[state])):
            unfinished.append(state)
    if not rungs:
        raise UserError(f"{directory}: there are no samples yet; what is needed is `canonry run` or `canonry sample`")
    tell("reweighting between the rungs")
    reference = guide(study.fluid) if study.fluid.has_pairs else None
    states = [rung.state for rung in rungs]
    isochores = [_isochore(study, own, border) for own in _by_density(rungs)]
    checks = [check for rung in rungs for check in rung.checks]
    for isochore, own in zip(isochores, _by_density(rungs), strict=True):
        checks += of_isochore(isochore, {rung.state: rung.series for rung in own})
    beside = found(study, directory)
    for each in beside:
        checks += each.checks(
            Rung(rung.state, rung.own, rung.series, isochore.pooled)
            for isochore, own in zip(isochores, _by_density(rungs), strict=True)
            for rung in own
        )
    health = judged(checks)
    tell("laying a surface through all rungs")
    between, no_surface = _surface(study, rungs, border)
    noticed = {state: doubts(directory, state) for state in states} if study.adopted else {}

    def doubted(findings: Iterable[Iterable[Finding]]) -> Iterator[Finding]:
        """With less trust where a check failed, and with caution where the state may be no stable bulk phase."""
        for finding in marked(chain.from_iterable(findings), health, states, noticed):
            yield finding.doubted(doubt(finding.state, reference) if reference else "")

    return Findings(
        properties=tuple(
            doubted([*(each.properties() for each in isochores), *(rung.beyond(between) for rung in rungs)])
        ),
        curve=tuple(doubted(each.curve() for each in isochores)),
        structures={rung.state: rung.structure for rung in rungs if rung.structure is not None},
        cuts=tuple(cut for rung in rungs for cut in rung.cuts),
        overlaps=tuple(overlap for isochore in isochores for overlap in isochore.overlaps()),
        histograms=tuple(curve for rung in rungs if (curve := rung.histogram) is not None),
        ledgers=tuple(ledger for rung in rungs for ledger in rung.ledgers),
        health=(*health, *(known(states, reference) if reference else ())),
        exact=exactly(beside),
        sizes=other_sizes(beside),
        unfinished=tuple(unfinished),
        scatterings={rung.state: rung.scattering for rung in rungs if rung.scattering is not None},
        surface=() if between is None else tuple(doubted([on_grid(between, states)])),
        held_out=() if between is None else tuple(between.held_out()),
        no_surface=no_surface,
    )


def _surface(study: Study, rungs: Sequence[_Rung], border: Border) -> tuple[Surface | None, str]:
    """Through all rungs with a bath, or None, and why it was not found."""
    if not all(each.bath for rung in rungs for each in rung.series):
        return None, ""
    try:
        own = {rung.state: rung.measured for rung in rungs}
        ideal = study.ideal_heat_capacity
        return of_states(own, study.fluid, ideal_heat_capacity=ideal, spoken=border.text), ""
    except (BadSeries, NotSolved) as problem:
        return None, str(problem)


def _compiling(sampling: Protocol) -> str:
    """Words for what the first frames ever on a machine cost."""
    return "" if sampling.steps < sampling.frame_every or is_cached() else ", compiling for this machine once"


def _by_density(rungs: Sequence[_Rung]) -> list[list[_Rung]]:
    """The rungs of each density, by temperature."""
    densities = dict.fromkeys(rung.state.density for rung in rungs)
    return [
        sorted((each for each in rungs if each.state.density == rho), key=lambda each: each.state) for rho in densities
    ]


def _isochore(study: Study, rungs: Sequence[_Rung], border: Border) -> Isochore:
    series = [each for rung in rungs for each in rung.series]
    temperatures = {rung.state: rung.temperature for rung in rungs if rung.temperature is not None}
    return assemble(
        {rung.state: rung.own for rung in rungs},
        series,
        temperatures=temperatures,
        ideal_heat_capacity=study.ideal_heat_capacity,
        spoken=border.temperature,
    )


def _rung(recorded: list[Series], scale: Scale | None) -> _Rung | None:
    """None if there are no samples."""
    if not recorded:
        return None
    cut = [settled(each) for each in recorded]
    structure = pair_structure(cut, evaluate=evaluate)
    series = [without_frames(each) for each in cut]
    temperature = None if series[0].bath else kinetic_temperature(series)
    state = series[0].state
    state = state if temperature is None else replace(state, temperature=temperature.value)
    own = rung_properties(series, contact=structure.contact if structure else None)
    cuts = [_cut(state, *both) for both in zip(recorded, series, strict=True)]
    samples = Samples(
        cut,
        structure,
        [(cut.cut, cut.samples) for cut in cuts],
        own,
        wavelength=wavelength(state, scale),
    )
    return _Rung(
        state,
        temperature,
        series,
        own=own,
        structure=structure,
        insertion=inserted(cut),
        scattering=scattered(cut),
        cuts=cuts,
        ledgers=[_ledger(state, each) for each in recorded if each.has(*_CONSERVED)],
        checks=[Check(state, reading) for reading in of_rung(samples)],
    )


def _cut(state: State, before: Series, after: Series) -> Cut:
    name = next(name for name in ("energy", "virial", "kinetic") if after.has(name))
    effective = mean({after.chain: after.column(name)}).effective_samples
    passed = 1.0 - float(np.mean(before.column("rejected"))) if before.has("rejected") else None
    return Cut(state, before.repeat, len(before) - len(after), len(before), effective, passed)


def _ledger(state: State, series: Series) -> Curve:
    every = slice(None, None, -(-len(series) // _POINTS))
    conserved = np.sum([series.column(name)[every] for name in _CONSERVED], axis=0) / state.particles
    return Curve(state, series.repeat, series.times[every], conserved - conserved[0])


def settled(series: Series) -> Series:
    """Without what the energy or the virial says is not settled, half of it at most."""
    told = [series.column(name) for name in ("sampled_energy", "virial") if series.has(name)]
    return series.after(max(map(settled_start, told), default=0))


def without_frames(series: Series) -> Series:
    """A series with columns of its own, which do not keep in memory all that was recorded with them."""
    own: dict[str, Any] = dict.fromkeys(
        ("kinetic_parts", "momentum", "force_square", "laplacian", "rejected", "bath_temperature")
    )
    own |= {name: series.column(name).copy() for name in ("kinetic", "ledger") if series.has(name)}
    return replace(series, frames=series.frames[:0].copy(), **own)
