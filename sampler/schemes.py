"""Schemes composed from the substeps A (drift), B (kick) and O (exact velocity relaxation), and the heat ledger.

baoab : B. Leimkuhler, C. Matthews, J. Chem. Phys. 138, 174102 (2013)
obabo : thermostat half step before and after velocity Verlet (G. Bussi, M. Parrinello, Phys. Rev. E 75, 056707 (2007))
metropolised : obabo whose part between the thermostat's is accepted with probability min(1, exp(-d(K + U_dyn)/T)),
    or undone with velocities turned round: no error of the time step (A. M. Horowitz, Phys. Lett. B 268, 247 (1991))
velocity-verlet : W. C. Swope, H. C. Andersen, P. H. Berens, K. R. Wilson, J. Chem. Phys. 76, 637 (1982); no O, no bath
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from sampler.compiled import kernel
from sampler.groups import BLOCK, LANES, gather
from sampler.noise import normals, uniform
from sampler.protocol import SUBSTEPS, Scheme
from sampler.slots import exact_forces, farthest, label_order, quick_forces, renewed, slots_of, wrap
from sampler.vector import load, splat, store, total

__all__ = ["DIVERGED", "DONE", "STOPPED", "Steps", "propagate", "substeps"]

DONE, STOPPED, DIVERGED = 0, 1, 2
_A, _B, _O = 0, 1, 2
_STRETCH = 256  # slots


class Steps(NamedTuple):
    """One step as a kernel reads it: letters as numbers, the part of the time step each takes, and the bath."""

    letters: npt.NDArray[np.int64]
    durations: npt.NDArray[np.float64]
    friction: float
    temperature: float
    tested: bool


def substeps(scheme: Scheme, *, time_step: float, friction: float, temperature: float) -> Steps:
    """The scheme's substeps: a letter that stands n times takes time_step/n each time."""
    letters = SUBSTEPS[scheme]
    durations = np.array([time_step / letters.count(letter) for letter in letters])
    numbers = np.array(["ABO".index(letter) for letter in letters])
    return Steps(numbers, durations, friction, temperature, scheme == "metropolised")


@kernel
def _drift(position, velocity, duration):  # type: ignore[no-untyped-def]
    factor = splat(duration)
    for at in range(0, velocity.size, LANES):
        store(position, at, load(position, at) + factor * load(velocity, at))


@kernel
def _kick(velocity, force, duration):  # type: ignore[no-untyped-def]
    factor = splat(duration)
    for at in range(0, velocity.size, LANES):
        store(velocity, at, load(velocity, at) + factor * load(force, at))


@kernel
def _relax(velocity, noise, duration, friction, temperature, ledger):  # type: ignore[no-untyped-def]
    """Exact Ornstein-Uhlenbeck update, booked in the ledger."""
    kept = math.exp(-friction * duration)
    width = splat(math.sqrt((1.0 - kept * kept) * temperature))
    factor, heat, kicks = splat(kept), splat(0.0), splat(0.0)
    components = (noise[0], noise[1], noise[2])
    for g in range(velocity.size // BLOCK):
        for c in range(3):
            at = BLOCK * g + LANES * c
            old = load(velocity, at)
            kick = width * load(components[c], LANES * g)
            new = factor * old + kick
            store(velocity, at, new)
            heat = heat + (old * old - new * new)
            kicks = kicks + kick * kick
    ledger[0] += 0.5 * total(heat)
    ledger[1] += 0.5 * total(kicks)


@kernel
def _motion(velocity, out):  # type: ignore[no-untyped-def]
    """Kinetic energies along x, y and z and the total momentum, (6,)."""
    for c in range(3):
        square, momentum = splat(0.0), splat(0.0)
        for at in range(LANES * c, velocity.size, BLOCK):
            v = load(velocity, at)
            square, momentum = square + v * v, momentum + v
        out[c], out[3 + c] = 0.5 * total(square), total(momentum)


@kernel
def _pass(slots, scheme, first, past, key, step, noise, ledger):  # type: ignore[no-untyped-def]
    """Substeps between which the forces stay, on a stretch of slots after another, each while it is in the cache.

    noise : (3, _STRETCH), for use here
    """
    labels = slots.groups.labels
    for begin in range(0, labels.size, _STRETCH):
        end = min(begin + _STRETCH, labels.size)
        position, speed = slots.position[3 * begin : 3 * end], slots.speed[3 * begin : 3 * end]
        for s in range(first, past):
            letter, duration = scheme.letters[s], scheme.durations[s]
            if letter == _A:
                _drift(position, speed, duration)
            elif letter == _B:
                _kick(speed, slots.force[3 * begin : 3 * end], duration)
            else:
                normals(key[0], key[1], np.uint64(step), np.uint64(s), labels[begin:end], noise)
                _relax(speed, noise, duration, scheme.friction, scheme.temperature, ledger)


@kernel
def _square(values):  # type: ignore[no-untyped-def]
    """Sum of squares."""
    found = splat(0.0)
    for at in range(0, values.size, LANES):
        v = load(values, at)
        found = found + v * v
    return total(found)


@kernel
def _weighed(sums, weights):  # type: ignore[no-untyped-def]
    return weights[0] * sums[0] + weights[1] * sums[1] + weights[2] * sums[2] + weights[3] * sums[3]


@kernel
def _undo(pair, where, velocity, box, skins, sums):  # type: ignore[no-untyped-def]
    """Slots of an earlier point of a trajectory, with forces and sums, and velocities turned round."""
    for i in range(velocity.shape[0]):
        for c in range(3):
            velocity[i, c] = -velocity[i, c]
    slots = slots_of(where, velocity, box, pair.cutoff, skins)
    exact_forces(pair, slots, box, sums)
    return slots


@kernel
def propagate(  # type: ignore[no-untyped-def]
    pair,
    weights,
    where,
    velocity,
    box,
    skins,
    scheme,
    short,
    key,
    first,
    n_steps,
    every,
    frame_every,
    samples,
    frames,
    ledger,
    stop,
):
    """Advance a trajectory from step `first` by n_steps, in place; returns DONE, STOPPED or DIVERGED and the step.

    weights : (4,), of the pair sums in U_dyn
    where, velocity : (n, 3), by label
    short : True for forces in float32 between samples
    every, frame_every : sample at steps that these divide
    samples : (n_steps // every, 15), COLUMNS
    frames : (n_steps // frame_every or 0, n, 3), wrapped positions
    ledger : (2,), kinetic energy that the bath has taken so far, and that its random kicks had since the last sample
    stop : (1,), uint8; set by another thread to leave early
    """
    forced = 0  # substeps up to the last drift, after which the forces are new
    for s in range(scheme.letters.size):
        forced = s + 1 if scheme.letters[s] == _A else forced
    sums, nothing, noise = np.empty(5), np.empty(0), np.empty((3, _STRETCH))
    n_samples, n_frames = 0, 0
    slots = slots_of(where, velocity, box, pair.cutoff, skins)
    exact_forces(pair, slots, box, sums)
    kept, kept_velocity, rejected = np.empty_like(where), np.empty_like(where), 0
    verlet = 1 if scheme.tested else 0  # substeps before the part that is tested
    for step in range(first + 1, first + n_steps + 1):
        recorded = step % every == 0
        _pass(slots, scheme, 0, verlet, key, step, noise, ledger)
        if scheme.tested:
            label_order(slots, kept, kept_velocity)
            before = 0.5 * _square(slots.speed) + _weighed(sums, weights)
        _pass(slots, scheme, verlet, forced, key, step, noise, ledger)
        moved = 2.0 * farthest(slots.position, slots.narrowed_at)
        if not moved <= box:
            return DIVERGED, step
        if moved > skins.near:
            slots = renewed(slots, where, velocity, box, pair.cutoff, skins)
        if short and not recorded:
            quick_forces(pair, slots, box)
        else:
            exact_forces(pair, slots, box, sums if recorded or scheme.tested else nothing)
        _pass(slots, scheme, forced, forced + verlet, key, step, noise, ledger)
        if scheme.tested:
            change = 0.5 * _square(slots.speed) + _weighed(sums, weights) - before
            if not uniform(key[0], key[1], np.uint64(step), np.uint64(forced)) < math.exp(-change / scheme.temperature):
                slots = _undo(pair, kept, kept_velocity, box, skins, sums)
                rejected += 1
        _pass(slots, scheme, forced + verlet, scheme.letters.size, key, step, noise, ledger)
        if recorded:
            for c in range(5):
                samples[n_samples, c] = sums[c]
            samples[n_samples, 5] = _square(slots.force)
            samples[n_samples, 6] = ledger[0]
            _motion(slots.speed, samples[n_samples, 7:])
            samples[n_samples, 13], samples[n_samples, 14] = rejected, ledger[1]
            rejected, ledger[1] = 0, 0.0
            n_samples += 1
        if step % frame_every == 0 and n_frames < frames.shape[0]:
            gather(slots.position, slots.groups.labels, frames[n_frames])
            wrap(frames[n_frames], box)
            n_frames += 1
        if stop[0] != 0:
            return STOPPED, step
    label_order(slots, where, velocity)
    wrap(where, box)
    return DONE, first + n_steps
