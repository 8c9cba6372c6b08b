"""What a study will cost, how precise it will be and where it may go wrong, before anything is sampled."""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import chain, pairwise
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from canonry.border import Border
from canonry.ladder import TRIAL
from canonry.outlook import pooled_variances, predicted_overlap, shape
from canonry.proposal import Proposal, proposals
from canonry.risks import risks
from canonry.study import Study
from canonry.trend import ORDERS, Trend, trends

if TYPE_CHECKING:
    from sampler.fluid import State

__all__ = ["Plan", "Rung", "plan"]

Floats = npt.NDArray[np.float64]

_TRIAL = TRIAL
_LEAST_OVERLAP = 0.03  # below it too few samples connect two rungs for reweighting between them


@dataclass(frozen=True)
class Rung:
    """What one rung will take.

    steps : of each repeat, equilibration included
    particle_steps : of all repeats
    overlap : predicted, with the next warmer rung at this density; None for the warmest
    standard_errors : predicted of the headline values, heat capacity (residual where the ideal part is not known) and
        pressure, reduced; not a number where a pilot is too short to tell
    """

    state: State
    steps: int
    particle_steps: int
    overlap: float | None
    standard_errors: Mapping[str, float]


@dataclass(frozen=True)
class Plan:
    """What a study will take and what comes of it.

    seconds : wall time of the sampling on this machine with this many workers
    bias : of the residual energy, as stated; None where no time step was asked for
    """

    rungs: tuple[Rung, ...]
    repeats: int
    workers: int
    seconds: float
    warnings: tuple[str, ...]
    bias: float | None = None
    proposals: tuple[Proposal, ...] = ()

    @property
    def particle_steps(self) -> int:
        """Of all repeats of all rungs."""
        return sum(rung.particle_steps for rung in self.rungs)


def plan(
    study: Study,
    *,
    workers: int | None = None,
    border: Border | None = None,
    bias: float | None = None,
    directory: Path | None = None,
) -> Plan:
    """The plan of a study; its cost from short runs with the compiled kernel, which write nothing.

    border : the units of the warnings, by default those the study was written in
    bias : of the residual energy per particle, reduced, for which to propose a time step; see `canonry.proposal`
    directory : of the study, where its shifts may have been measured already
    Raises BadRequest or DivergedRun where a short run shows that the study cannot be sampled as asked.
    """
    threads, workers = workers, min(workers or os.cpu_count() or 1, len(study.states) * study.sampling.repeats)
    found = trends(study, particle_steps=_trial(study), workers=threads)
    rungs = tuple(chain.from_iterable(_rungs(study, own, found[rho]) for rho, own in study.isochores.items()))
    border = border or Border.of(study)
    return Plan(
        rungs,
        study.sampling.repeats,
        workers,
        seconds=_seconds(study, found, workers),
        warnings=(*risks(study, border), *_gaps(rungs, border)),
        bias=bias,
        proposals=() if bias is None else proposals(study, bias=bias, workers=workers, directory=directory),
    )


def _trial(study: Study) -> int:
    """Particle-steps of a pilot: no more than a rung is to have, but what a ladder was chosen by."""
    if study.ladder is not None:
        return _TRIAL
    return min(_TRIAL, study.sampling.steps * study.sampling.repeats * study.states[0].particles)


def _rungs(study: Study, states: Sequence[State], trend: Trend) -> Iterator[Rung]:
    """Those of one density."""
    sampling, particles = study.sampling, states[0].particles
    temperatures = np.array([state.temperature for state in states])
    energies, heat_capacities = trend.energy(temperatures), trend.heat_capacity(temperatures)
    overlaps = predicted_overlap(energies, heat_capacities, temperatures=temperatures, particles=particles)
    time = sampling.steps * sampling.time_step * sampling.repeats
    errors = _errors(trend, temperatures, particles, time=time, pooled=sampling.bath)
    total = study.ideal_heat_capacity is not None
    names = ("heat_capacity" if total else "residual_heat_capacity", "pressure")
    steps = sampling.settling + sampling.steps
    for number, state in enumerate(states):
        own = {name: float(each[number]) for name, each in zip(names, errors, strict=True)}
        overlap = overlaps[number] if number < len(overlaps) else None
        yield Rung(state, steps, steps * particles * sampling.repeats, overlap, own)


def _errors(trend: Trend, temperatures: Floats, particles: int, *, time: float, pooled: bool) -> tuple[Floats, Floats]:
    """Standard errors of heat capacity and pressure from so long a time at each rung.

    pooled : from all rungs together; else from each alone
    Energies are taken as Gaussian. One part of the pressure follows the energy, the rest does not depend on it.
    """
    heat_capacities = trend.heat_capacity(temperatures)
    of_energy = np.array([trend.waiting(name, temperatures) for name in ORDERS]) / time
    of_pressure = trend.waiting("pressure", temperatures) / time
    spread, share = trend.spread(temperatures)
    spread = spread / particles
    if not pooled:
        return heat_capacities * np.sqrt(2.0 * of_energy[1]), np.sqrt(spread * of_pressure)
    energies = shape(trend.energy(temperatures), heat_capacities, temperatures=temperatures, particles=particles)
    capacity, _, _ = pooled_variances(energies, energies, times=of_energy)
    _, following, beside = pooled_variances(energies, energies, times=of_pressure[None])
    return heat_capacities * np.sqrt(capacity), np.sqrt(spread * (share * following + (1.0 - share) * beside))


def _gaps(rungs: Sequence[Rung], border: Border) -> Iterator[str]:
    for rung, warmer in pairwise(rungs):
        if rung.overlap is not None and rung.overlap < _LEAST_OVERLAP:
            yield (
                f"The rungs at {border.state(rung.state)} and {border.text('temperature', warmer.state.temperature)} "
                "hardly overlap; the curve between them will be refused. Set a rung between them."
            )


def _seconds(study: Study, found: Mapping[float, Trend], workers: int) -> float:
    """Wall time: repeats shared among the workers, none shorter than the longest of them."""
    sampling = study.sampling
    steps = sampling.settling + sampling.steps
    each = [steps * found[state.density].seconds_per_step(state.particles) for state in study.states]
    return max(max(each), sum(each) * sampling.repeats / workers)
