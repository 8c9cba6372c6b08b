"""Short runs of a study at chosen states, kept in memory: what they recorded, and what a step costs."""

from __future__ import annotations

import os
import time
from collections.abc import Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from canonry.study import Study

if TYPE_CHECKING:
    from sampler.fluid import State
    from sampler.protocol import Protocol
    from sampler.series import Series
    from sampler.store import Chain, Segment

__all__ = ["WIDEST", "Pilot", "pilot"]

WIDEST = 100  # steps from record to record, at most: short runs need samples


@dataclass(frozen=True, eq=False)
class Pilot:
    """A short run at one state.

    series : recorded after settling, without frames
    seconds_per_step : wall time of a step of one worker while all of them were busy
    """

    series: Series
    seconds_per_step: float


def pilot(
    study: Study, states: Sequence[State], *, particle_steps: int, workers: int | None = None
) -> Mapping[State, Pilot]:
    """A short run at each state as the study would sample it, by state; writes nothing.

    states : any, of the study or not
    particle_steps : sampled at each state, in whole record intervals, after as many to settle; what the energy says is
        not settled even then is left out of the series, half of it at most
    workers : threads, by default one for every core; the series do not depend on it. With fewer states than workers,
        some states are run more than once, so that a step is timed with all workers busy
    Seeded from the study's seed and the state, as the first repeat of a rung is; recorded as often, but at least every
    100 steps. Raises BadRequest if the cutoff is beyond half the box, DivergedRun where a run flies apart.
    """
    from sampler.ladder import chains

    workers = workers or os.cpu_count() or 1
    runs = [
        chain
        for state in dict.fromkeys(states)
        for chain in chains(Path(), study.fluid, [state], _short(study.sampling, state.particles, particle_steps))
    ]
    if not runs:
        return {}
    load = [runs[k % len(runs)] for k in range(len(runs), workers)]
    with ThreadPoolExecutor(workers) as threads:
        segments = list(threads.map(_timed, [*runs, *load]))
    return {
        chain.state: Pilot(_series(chain, segment), seconds / chain.protocol.steps)
        for chain, (segment, seconds) in zip(runs, segments, strict=False)
    }


def _short(protocol: Protocol, particles: int, particle_steps: int) -> Protocol:
    """The protocol cut down to two segments of equal length, one to settle and one to sample."""
    record_every = min(protocol.record_every, WIDEST)
    steps = record_every * max(1, round(particle_steps / (particles * record_every)))
    return replace(protocol, record_every=record_every, frame_every=steps, equilibration=steps, steps=steps, repeats=1)


def _timed(chain: Chain) -> tuple[Segment | None, float]:
    """The second of two segments, and its wall time, s."""
    from sampler.rung import advance

    stop = np.zeros(1, np.uint8)
    before = advance(chain, 0, None, stop)
    started = time.perf_counter()
    segment = advance(chain, 1, before, stop)
    return segment, time.perf_counter() - started


def _series(chain: Chain, segment: Segment | None) -> Series:
    from estimators.settle import settled_start
    from sampler.rung import assemble

    series = assemble(chain, [] if segment is None else [segment])
    series = replace(series, frames=series.frames[:0])
    return series.after(settled_start(series.column("sampled_energy")))
