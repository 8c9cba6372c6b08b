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

__all__ = ["ENOUGH", "WIDEST", "Pilot", "pilot"]

ENOUGH = 200  # effective samples of the energy: its autocorrelation time is then known to about a sixth
WIDEST = 100  # steps from record to record, at most: short runs need samples
_SETTLING = 5  # a stretch is as many times as long as what is left to settle


@dataclass(frozen=True, eq=False)
class Pilot:
    """A short run at one state.

    series : recorded after settling, without frames
    seconds_per_step : wall time of a step of one worker while all of them were busy
    """

    series: Series
    seconds_per_step: float


def pilot(
    study: Study,
    states: Sequence[State],
    *,
    particle_steps: int,
    most: int | None = None,
    workers: int | None = None,
) -> Mapping[State, Pilot]:
    """A short run at each state as the study would sample it, by state; writes nothing.

    states : any, of the study or not
    particle_steps : sampled at each state, in whole multiples of five record intervals, after a fifth of that to
        settle; what the energy says is not settled even then is left out of the series, half of it at most
    most : particle-steps up to which a run goes on, by as much again each time, as long as its energy has fewer than
        200 effective samples; by default none goes on
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
    stretches = max((most or 0) // particle_steps, 1)
    load = [runs[k % len(runs)] for k in range(len(runs), workers)]
    with ThreadPoolExecutor(workers) as threads:
        made = list(threads.map(lambda chain: _run(chain, stretches), [*runs, *load]))
    return {chain.state: each for chain, each in zip(runs, made, strict=False)}


def _short(protocol: Protocol, particles: int, particle_steps: int) -> Protocol:
    """The protocol cut down to one stretch, after a fifth of it to settle."""
    record_every = min(protocol.record_every, WIDEST)
    settling = record_every * max(1, round(particle_steps / (particles * record_every * _SETTLING)))
    return replace(
        protocol,
        record_every=record_every,
        frame_every=settling,
        equilibration=settling,
        steps=_SETTLING * settling,
        repeats=1,
    )


def _run(chain: Chain, stretches: int) -> Pilot:
    """Settled, then sampled a stretch at a time until there are enough independent samples, or so many stretches.

    A step is timed in the first stretch: later others may be idle.
    """
    from estimators.gamma import scatter
    from sampler.rung import advance

    protocol = chain.protocol
    settled = advance(chain, 0, None, np.zeros(1, np.uint8))
    started = time.perf_counter()
    sampled = _advanced(chain, settled)
    seconds = (time.perf_counter() - started) / protocol.steps
    series = _series(chain, sampled)
    for number in range(1, stretches):
        if scatter([series.column("sampled_energy")]).steady_samples >= ENOUGH:
            break
        further = replace(protocol, equilibration=protocol.settling + number * protocol.steps)
        sampled += _advanced(replace(chain, protocol=further), sampled[-1])
        longer = replace(protocol, steps=(number + 1) * protocol.steps)
        series = _series(replace(chain, protocol=longer), sampled)
    return Pilot(series, seconds)


def _advanced(chain: Chain, last: Segment | None) -> list[Segment]:
    """The segments of a chain after its settling.

    last : what was sampled before
    """
    from sampler.rung import advance

    stop = np.zeros(1, np.uint8)
    made: list[Segment] = []
    for index, (first, _) in enumerate(chain.segments):
        if first >= chain.protocol.settling:
            last = advance(chain, index, last, stop)
            made += [] if last is None else [last]
    return made


def _series(chain: Chain, segments: Sequence[Segment]) -> Series:
    from estimators.settle import settled_start
    from sampler.rung import assemble

    series = assemble(chain, segments)
    series = replace(series, frames=series.frames[:0])
    return series.after(settled_start(series.column("sampled_energy")))
