"""One repeat of a rung: start, settle, advance a segment; and its series once segments are there."""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator

import numpy as np
import numpy.typing as npt

from sampler.errors import DamagedSegment, DivergedRun
from sampler.fluid import State
from sampler.noise import chain_key
from sampler.pairs import pair_function
from sampler.protocol import SUBSTEPS, Scheme
from sampler.schemes import DIVERGED, STOPPED, propagate, substeps
from sampler.series import Series
from sampler.slots import Skins
from sampler.start import first_positions, first_velocities
from sampler.store import COLUMNS, Chain, Segment, read

__all__ = ["advance", "assemble", "sampled_segments", "skins"]

Stop = npt.NDArray[np.uint8]
_DENSE = 0.4  # sigma^-3; skins of lists, sigma, measured best on either side
_SKINS = (Skins(0.3, 1.2), Skins(0.2, 1.0))


def advance(chain: Chain, index: int, before: Segment | None, stop: Stop) -> Segment | None:
    """Sample segment `index`; None if `stop`, (1,), was set from another thread before it was finished.

    before : the segment before it, None for the first
    Raises DivergedRun if the trajectory leaves the finite numbers.
    """
    protocol, state = chain.protocol, chain.state
    key = chain_key(protocol.seed, state.temperature, state.density, chain.repeat)
    first, last = chain.segments[index]
    if before is None:
        where, velocity, ledger = first_positions(chain.fluid, state, key), first_velocities(state, key), 0.0
    else:
        where, velocity, ledger = before.positions.copy(), before.velocities.copy(), before.ledger
    settling = last <= protocol.settling
    scheme: Scheme = "baoab" if settling else protocol.scheme
    if not protocol.bath and first == protocol.settling:
        velocity -= velocity.mean(axis=0)
    samples = np.empty(((last - first) // protocol.record_every, len(COLUMNS)))
    frames = np.empty((0 if settling else (last - first) // protocol.frame_every, state.particles, 3))
    heat = np.array([ledger, 0.0])
    outcome, step = propagate(
        pair_function(chain.fluid),
        chain.fluid.sampled_weights,
        where,
        velocity,
        state.box,
        skins(state),
        substeps(scheme, time_step=protocol.time_step, friction=protocol.friction, temperature=state.temperature),
        protocol.is_mixed,
        key,
        first,
        last - first,
        protocol.record_every,
        protocol.frame_every,
        samples,
        frames,
        heat,
        stop,
    )
    if outcome == STOPPED:
        return None
    if outcome == DIVERGED or not np.isfinite(samples).all():
        raise DivergedRun(
            f"the run at temperature {state.temperature:g}, density {state.density:g}, repeat {chain.repeat} flew "
            f"apart by step {step}; take a time_step smaller than {protocol.time_step:g}"
        )
    return Segment(first, last, samples, frames, where, velocity, float(heat[0]))


def skins(state: State) -> Skins:
    """Skins of the lists: wider in a dilute fluid, where lists are short and particles go far."""
    return _SKINS[state.density >= _DENSE]


def _kicks(chain: Chain) -> float:
    """Mean kinetic energy of the bath's random kicks between two samples, per unit of temperature."""
    protocol = chain.protocol
    updates = SUBSTEPS[protocol.scheme].count("O")
    kept = math.exp(-2.0 * protocol.friction * protocol.time_step / updates)
    return 1.5 * chain.state.particles * protocol.record_every * updates * (1.0 - kept)


def sampled_segments(chain: Chain) -> Iterator[Segment]:
    """The finished segments after settling, in order, up to the first that is missing or damaged."""
    for index, (first, _) in enumerate(chain.segments):
        if first < chain.protocol.settling:
            continue
        try:
            segment = read(chain.path(index), chain.identity)
        except DamagedSegment:
            return
        yield segment


def assemble(chain: Chain, segments: Iterable[Segment]) -> Series:
    """The series of one repeat from its segments after settling, as many steps as are asked for; possibly empty."""
    protocol = chain.protocol
    samples = np.empty((protocol.steps // protocol.record_every, len(COLUMNS)))
    frames = np.empty((protocol.steps // protocol.frame_every, chain.state.particles, 3))
    n_samples, n_frames = 0, 0
    for segment in segments:
        more, more_frames = segment.samples[: len(samples) - n_samples], segment.frames[: len(frames) - n_frames]
        samples[n_samples : n_samples + len(more)] = more
        frames[n_frames : n_frames + len(more_frames)] = more_frames
        n_samples, n_frames = n_samples + len(more), n_frames + len(more_frames)
    samples, frames = samples[:n_samples], frames[:n_frames]
    totals = chain.fluid.totals(samples, chain.state)
    kinetic = samples[:, COLUMNS.index("kinetic_x") : COLUMNS.index("kinetic_z") + 1]
    momentum = samples[:, COLUMNS.index("momentum_x") : COLUMNS.index("momentum_z") + 1]
    return Series(
        fluid=chain.fluid,
        state=chain.state,
        repeat=chain.repeat,
        bath=protocol.bath,
        interval=protocol.time_step * protocol.record_every,
        energy=totals.energy,
        sampled_energy=totals.sampled_energy,
        virial=totals.virial,
        hypervirial=totals.hypervirial,
        kinetic=kinetic.sum(axis=1),
        ledger=samples[:, COLUMNS.index("ledger")],
        frames=frames,
        frame_stride=protocol.frame_every // protocol.record_every,
        kinetic_parts=kinetic,
        momentum=momentum,
        force_square=samples[:, COLUMNS.index("force_square")],
        laplacian=samples[:, COLUMNS.index("laplacian")],
        kinetic_lag=0.25 * protocol.time_step**2 if protocol.scheme == "baoab" else 0.0,
        rejected=samples[:, COLUMNS.index("rejected")] / protocol.record_every
        if protocol.scheme == "metropolised"
        else None,
        bath_temperature=samples[:, COLUMNS.index("kicks")] / _kicks(chain) if protocol.bath else None,
    )
