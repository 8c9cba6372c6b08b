"""Schemes composed from the substeps A (drift), B (kick) and O (exact velocity relaxation), and the heat ledger.

baoab : B. Leimkuhler, C. Matthews, J. Chem. Phys. 138, 174102 (2013)
obabo : thermostat half step before and after velocity Verlet (G. Bussi, M. Parrinello, Phys. Rev. E 75, 056707 (2007))
velocity-verlet : W. C. Swope, H. C. Andersen, P. H. Berens, K. R. Wilson, J. Chem. Phys. 76, 637 (1982); no O, no bath
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from sampler.compiled import kernel
from sampler.forces import fold_images, pair_forces, place_images
from sampler.groups import BLOCK, FAR, LANES, group, narrow, scatter
from sampler.noise import normals
from sampler.protocol import SUBSTEPS, Scheme
from sampler.vector import larger, largest, load, splat, store, total

__all__ = ["COLUMNS", "DIVERGED", "DONE", "STOPPED", "Steps", "propagate", "substeps"]

COLUMNS = ("s12", "s6", "pairs", "distances", "kinetic", "ledger")  # what is recorded of a sample
DONE, STOPPED, DIVERGED = 0, 1, 2
_A, _B, _O = 0, 1, 2


class Steps(NamedTuple):
    """One step as a kernel reads it: letters as numbers, the part of the time step each takes, and the bath."""

    letters: npt.NDArray[np.int64]
    durations: npt.NDArray[np.float64]
    friction: float
    temperature: float


def substeps(scheme: Scheme, *, time_step: float, friction: float, temperature: float) -> Steps:
    """The scheme's substeps: a letter that stands n times takes time_step/n each time."""
    letters = SUBSTEPS[scheme]
    durations = np.array([time_step / letters.count(letter) for letter in letters])
    return Steps(np.array(["ABO".index(letter) for letter in letters]), durations, friction, temperature)


@kernel
def _drift(position, velocity, duration):  # type: ignore[no-untyped-def]
    factor = splat(duration)
    for at in range(0, velocity.size, 4):
        store(position, at, load(position, at) + factor * load(velocity, at))


@kernel
def _kick(velocity, force, duration):  # type: ignore[no-untyped-def]
    factor = splat(duration)
    for at in range(0, velocity.size, 4):
        store(velocity, at, load(velocity, at) + factor * load(force, at))


@kernel
def _relax(velocity, noise, duration, friction, temperature):  # type: ignore[no-untyped-def]
    """Exact Ornstein-Uhlenbeck update; returns the kinetic energy it took out."""
    kept = math.exp(-friction * duration)
    width = splat(math.sqrt((1.0 - kept * kept) * temperature))
    factor, heat = splat(kept), splat(0.0)
    components = (noise[0], noise[1], noise[2])
    for g in range(velocity.size // BLOCK):
        for c in range(3):
            at = BLOCK * g + LANES * c
            old = load(velocity, at)
            new = factor * old + width * load(components[c], LANES * g)
            store(velocity, at, new)
            heat = heat + (old * old - new * new)
    return 0.5 * total(heat)


@kernel
def _kinetic(velocity):  # type: ignore[no-untyped-def]
    double = splat(0.0)
    for at in range(0, velocity.size, 4):
        v = load(velocity, at)
        double = double + v * v
    return 0.5 * total(double)


@kernel
def _largest_move(position, since, n):  # type: ignore[no-untyped-def]
    """Largest squared displacement of a particle in the first n numbers of two slot layouts; not a number if any is."""
    most = splat(0.0)
    sound = splat(0.0)
    for base in range(0, n, BLOCK):
        dx = load(position, base) - load(since, base)
        dy = load(position, base + 4) - load(since, base + 4)
        dz = load(position, base + 8) - load(since, base + 8)
        square = dx * dx + dy * dy + dz * dz
        sound = sound + square
        most = larger(most, square)
    return largest(most) if total(sound) < np.inf else np.nan


@kernel
def _gather(values, groups, out):  # type: ignore[no-untyped-def]
    """Slot layout back to (n, 3) by label."""
    for slot in range(groups.labels.size):
        label = groups.labels[slot]
        if label >= 0:
            for c in range(3):
                out[label, c] = values[BLOCK * (slot // LANES) + LANES * c + slot % LANES]


@kernel
def _wrap(where, box):  # type: ignore[no-untyped-def]
    """Bring positions inside [0, box)."""
    for i in range(where.shape[0]):
        for c in range(3):
            inside = where[i, c] - box * math.floor(where[i, c] / box)
            where[i, c] = inside if 0.0 <= inside < box else 0.0


@kernel
def _regroup(where, velocity, box, reach):  # type: ignore[no-untyped-def]
    """Groups of wrapped label-ordered positions, and positions and velocities in their slots."""
    groups = group(where, box, reach)
    position = scatter(where, groups, FAR)
    speed = scatter(velocity, groups, 0.0)[: BLOCK * (groups.labels.size // LANES)]
    return groups, position, speed, np.empty((3, groups.labels.size)), np.empty_like(position)


@kernel
def _forces(pair, position, force, groups, near, sums):  # type: ignore[no-untyped-def]
    n_groups = groups.labels.size // LANES
    pair_forces(pair, position, force, n_groups, near, sums)
    fold_images(force, n_groups, groups)


@kernel
def propagate(  # type: ignore[no-untyped-def]
    pair, where, velocity, box, skins, scheme, key, first, n_steps, every, frame_every, samples, frames, ledger, stop
):
    """Advance a trajectory from step `first` by n_steps, in place; returns DONE, STOPPED or DIVERGED and the step.

    where, velocity : (n, 3), by label
    skins : (near, wide), lengths beyond the cutoff at which the two lists are cut
    every, frame_every : sample at steps that these divide
    samples : (n_steps // every, 6), COLUMNS
    frames : (n_steps // frame_every or 0, n, 3), wrapped positions
    ledger : (1,), heat that the bath has taken so far
    stop : (1,), uint8; set by another thread to leave early
    """
    near_skin, wide_skin = skins
    last_drift = 0
    for s in range(scheme.letters.size):
        last_drift = s if scheme.letters[s] == _A else last_drift
    sums = np.empty(4)
    n_samples, n_frames = 0, 0
    _wrap(where, box)
    groups, position, speed, noise, force = _regroup(where, velocity, box, pair.cutoff + wide_skin)
    place_images(position, groups.labels.size // LANES, groups)
    near = narrow(position, groups, pair.cutoff + near_skin)
    at_group, at_narrowing = position.copy(), position.copy()
    _forces(pair, position, force, groups, near, None)
    for step in range(first + 1, first + n_steps + 1):
        recorded = step % every == 0
        for s in range(scheme.letters.size):
            letter, duration = scheme.letters[s], scheme.durations[s]
            if letter == _B:
                _kick(speed, force, duration)
            elif letter == _O:
                normals(key[0], key[1], np.uint64(step), np.uint64(s), groups.labels, noise)
                ledger[0] += _relax(speed, noise, duration, scheme.friction, scheme.temperature)
            else:
                _drift(position, speed, duration)
                if s != last_drift:
                    continue
                moved = 2.0 * math.sqrt(_largest_move(position, at_narrowing, speed.size))
                if not moved <= box:
                    return DIVERGED, step
                outgrown = moved > near_skin
                if outgrown and near_skin + 2.0 * math.sqrt(_largest_move(position, at_group, speed.size)) > wide_skin:
                    _gather(position, groups, where)
                    _gather(speed, groups, velocity)
                    _wrap(where, box)
                    groups, position, speed, noise, force = _regroup(where, velocity, box, pair.cutoff + wide_skin)
                    at_group = position.copy()
                place_images(position, groups.labels.size // LANES, groups)
                if outgrown:
                    near = narrow(position, groups, pair.cutoff + near_skin)
                    at_narrowing = position.copy()
                if recorded:
                    _forces(pair, position, force, groups, near, sums)
                else:
                    _forces(pair, position, force, groups, near, None)
        if recorded:
            for c in range(4):
                samples[n_samples, c] = sums[c]
            samples[n_samples, 4] = _kinetic(speed)
            samples[n_samples, 5] = ledger[0]
            n_samples += 1
        if step % frame_every == 0 and n_frames < frames.shape[0]:
            _gather(position, groups, frames[n_frames])
            _wrap(frames[n_frames], box)
            n_frames += 1
        if stop[0] != 0:
            return STOPPED, step
    _gather(position, groups, where)
    _gather(speed, groups, velocity)
    _wrap(where, box)
    return DONE, first + n_steps
