"""What a study will cost and where it may go wrong, before anything is sampled."""

from __future__ import annotations

import os
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from canonry.border import Border
from canonry.pilot import Pilot, pilot
from canonry.proposal import Proposal, proposals
from canonry.risks import guide, risks
from canonry.study import Study

if TYPE_CHECKING:
    from reference import Reference
    from sampler.fluid import State

__all__ = ["Plan", "Rung", "plan", "predicted_overlap"]

Floats = npt.NDArray[np.float64]

_TRIAL = 2_000_000  # particle-steps: a fifth of a second, and as much to settle
_MOST_DENSITIES = 3  # tried
_SPREAD = 8.0  # standard deviations
_FINE = 24  # points a standard deviation
_LEAST_OVERLAP = 0.03  # below it too few samples connect two rungs for reweighting between them


@dataclass(frozen=True)
class Rung:
    """What one rung will take.

    steps : of each repeat, equilibration included
    particle_steps : of all repeats
    overlap : predicted, with the next warmer rung at this density; None for the warmest or where no reference speaks
    """

    state: State
    steps: int
    particle_steps: int
    overlap: float | None


@dataclass(frozen=True)
class Plan:
    """What a study will take.

    seconds : wall time of the sampling on this machine with this many workers
    guide : name of the reference behind the predicted overlaps and warnings
    bias : of the residual energy, as stated; None where no time step was asked for
    """

    rungs: tuple[Rung, ...]
    repeats: int
    workers: int
    seconds: float
    guide: str
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
    workers = min(workers or os.cpu_count() or 1, len(study.states) * study.sampling.repeats)
    spoken = guide(study.fluid)
    overlaps = {state: shared for states in study.isochores.values() for state, shared in _overlaps(states, spoken)}
    steps = study.sampling.settling + study.sampling.steps
    rungs = tuple(
        Rung(state, steps, steps * state.particles * study.sampling.repeats, overlaps[state]) for state in study.states
    )
    border = border or Border.of(study)
    pilots = _pilots(study, workers)
    return Plan(
        rungs,
        study.sampling.repeats,
        workers,
        seconds=_seconds(study, {state: each.seconds_per_step * steps for state, each in pilots.items()}, workers),
        guide=spoken.name,
        warnings=(*risks(study, border), *_gaps(rungs, border)),
        bias=bias,
        proposals=() if bias is None else proposals(study, bias=bias, workers=workers, directory=directory),
    )


def predicted_overlap(
    energies: Floats, heat_capacities: Floats, *, temperatures: Floats, particles: int
) -> list[float]:
    """Overlap of neighbouring rungs with equally many samples, (K - 1,), each between 0 and 1/2.

    energies, heat_capacities, temperatures : (K,), residual, per particle
    The energies of a rung are taken as Gaussian with variance N T^2 c_v,res. With p_i the densities and D their sum,
    the overlap of i and j is the integral of p_i p_j / D.
    """
    centres = particles * energies
    widths = np.sqrt(particles * np.maximum(heat_capacities, 1e-12)) * temperatures
    low, high = np.min(centres - _SPREAD * widths), np.max(centres + _SPREAD * widths)
    grid = np.linspace(low, high, int((high - low) / np.min(widths) * _FINE) + 2)
    densities = np.exp(-0.5 * ((grid - centres[:, None]) / widths[:, None]) ** 2) / widths[:, None]
    total = np.maximum(np.sum(densities, axis=0), 1e-300)
    shared = np.sum(densities[:-1] * densities[1:] / total, axis=1)
    return list(map(float, shared * (grid[1] - grid[0]) / np.sqrt(2.0 * np.pi)))


def _overlaps(states: Sequence[State], reference: Reference) -> Iterator[tuple[State, float | None]]:
    """Each state of one density with its overlap with the next, where the reference covers both."""
    known = [state for state in states if not reference.covers(state.temperature, state.density)]
    found: dict[State, float] = {}
    if len(known) > 1:
        values = [
            [reference.value(name, temperature=s.temperature, density=s.density).value for s in known]
            for name in ("residual_energy", "residual_heat_capacity")
        ]
        temperatures = np.array([state.temperature for state in known])
        shared = predicted_overlap(
            np.array(values[0]), np.array(values[1]), temperatures=temperatures, particles=known[0].particles
        )
        found = dict(zip(known, shared, strict=False))
    for state, warmer in zip(states, [*states[1:], None], strict=True):
        yield state, found.get(state) if warmer in known else None


def _gaps(rungs: Sequence[Rung], border: Border) -> Iterator[str]:
    for rung, warmer in pairwise(rungs):
        if rung.overlap is not None and rung.overlap < _LEAST_OVERLAP:
            yield (
                f"The rungs at {border.state(rung.state)} and {border.text('temperature', warmer.state.temperature)} "
                "hardly overlap; the curve between them will be refused. Set a rung between them."
            )


def _pilots(study: Study, workers: int) -> Mapping[State, Pilot]:
    """At the coldest and the warmest state of a few densities."""
    densities = sorted(study.isochores)
    chosen = np.linspace(0, len(densities) - 1, min(len(densities), _MOST_DENSITIES))
    isochores = [study.isochores[densities[round(k)]] for k in chosen]
    ends = [state for states in isochores for state in (states[0], states[-1])]
    return pilot(study, ends, particle_steps=_TRIAL, workers=workers)


def _seconds(study: Study, taken: Mapping[State, float], workers: int) -> float:
    """Wall time: repeats shared among the workers, none shorter than the longest of them.

    taken : seconds a repeat takes, at some of the states
    """
    tried = sorted({state.density for state in taken})
    costs = [np.mean([seconds for state, seconds in taken.items() if state.density == each]) for each in tried]
    each = [float(np.interp(state.density, tried, costs)) for state in study.states]
    return max(max(each), sum(each) * study.sampling.repeats / workers)
