"""Particles in the order of their groups, with all that the kernels keep beside them: lists, whole-number positions.

A list holds as long as no particle is further than half its skin from where it was when the list was made. Lists are
made for where the particles will be a little later, so that they pass through that place instead of starting from it:
they then last almost twice as long.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from sampler.compiled import kernel
from sampler.forces import pair_forces, scaled
from sampler.groups import BLOCK, COARSE, FINE, LANES, Groups, Near, fix, gather, group, limits, narrow, room, scatter
from sampler.vector import larger, largest, load, splat, store, total

__all__ = ["Skins", "Slots", "exact_forces", "farthest", "label_order", "quick_forces", "renewed", "slots_of", "wrap"]

_LEAD = 0.45  # of a skin: how far the fastest particle is ahead when a list is made; below one half
_FORESIGHT = 0.07  # time ahead beyond which velocities say nothing in a dense fluid

Floats = npt.NDArray[np.float64]


class Skins(NamedTuple):
    """Lengths beyond the cutoff at which the two lists are cut; wide is at least twice near."""

    near: float
    wide: float


class Slots(NamedTuple):
    """Arrays in the slot layout of groups.py unless a shape is given.

    grouped_at, narrowed_at : where the wide and the near list were made for
    fine, coarse : positions as whole numbers
    limit, short_limit : squared cutoff, for forces in float64 and float32
    force : epsilon/sigma; raw, short_raw : as `pair_forces` leaves it
    """

    groups: Groups
    near: Near
    position: Floats
    speed: Floats
    grouped_at: Floats
    narrowed_at: Floats
    fine: npt.NDArray[np.int64]
    coarse: npt.NDArray[np.int32]
    limit: Floats
    short_limit: npt.NDArray[np.float32]
    force: Floats
    raw: Floats
    short_raw: npt.NDArray[np.float32]


@kernel
def wrap(where, box):  # type: ignore[no-untyped-def]
    """Bring positions inside [0, box)."""
    for i in range(where.shape[0]):
        for c in range(3):
            inside = where[i, c] - box * math.floor(where[i, c] / box)
            where[i, c] = inside if 0.0 <= inside < box else 0.0


@kernel
def farthest(one, other):  # type: ignore[no-untyped-def]
    """Largest distance of a particle between two slot layouts; not a number if any is."""
    most, sound = splat(0.0), splat(0.0)
    for at in range(0, one.size, BLOCK):
        dx = load(one, at) - load(other, at)
        dy = load(one, at + LANES) - load(other, at + LANES)
        dz = load(one, at + 2 * LANES) - load(other, at + 2 * LANES)
        square = dx * dx + dy * dy + dz * dz
        sound = sound + square
        most = larger(most, square)
    return math.sqrt(largest(most)) if total(sound) < np.inf else np.nan


@kernel
def _fastest(speed):  # type: ignore[no-untyped-def]
    """Largest speed of a particle, and never zero."""
    most = splat(1e-300)
    for at in range(0, speed.size, BLOCK):
        x, y, z = load(speed, at), load(speed, at + LANES), load(speed, at + 2 * LANES)
        most = larger(most, x * x + y * y + z * z)
    return math.sqrt(largest(most))


@kernel
def _ahead(position, speed, time, out):  # type: ignore[no-untyped-def]
    factor = splat(time)
    for at in range(0, speed.size, LANES):
        store(out, at, load(position, at) + factor * load(speed, at))


@kernel
def _aim(slots, skins):  # type: ignore[no-untyped-def]
    """Choose where the next near list is made for; returns whether the wide list covers it."""
    _ahead(slots.position, slots.speed, _LEAD * skins.near / _fastest(slots.speed), slots.narrowed_at)
    return skins.near + 2.0 * farthest(slots.narrowed_at, slots.grouped_at) <= skins.wide


@kernel
def _narrow(slots, box, reach):  # type: ignore[no-untyped-def]
    fix(slots.narrowed_at, box, None, slots.coarse)
    narrow(slots.coarse, slots.groups, box, reach, slots.near)


@kernel
def slots_of(where, velocity, box, cutoff, skins):  # type: ignore[no-untyped-def]
    """Slots and both lists of positions, wrapped in place, and velocities, (n, 3) by label."""
    wrap(where, box)
    fastest = 1e-300
    for i in range(where.shape[0]):
        fastest = max(fastest, velocity[i, 0] ** 2 + velocity[i, 1] ** 2 + velocity[i, 2] ** 2)
    time = min(_FORESIGHT, _LEAD * (skins.wide - skins.near) / math.sqrt(fastest))
    later = np.empty_like(where)
    for i in range(where.shape[0]):
        for c in range(3):
            later[i, c] = where[i, c] + time * velocity[i, c]
    wrap(later, box)
    groups = group(later, box, cutoff + skins.wide)
    n, labels = groups.labels.size, groups.labels
    square = cutoff * cutoff
    slots = Slots(
        groups,
        Near(np.zeros(n + 1, np.int64), np.empty(LANES * groups.start[-1] + 1, np.int32)),
        scatter(where, labels),
        scatter(velocity, labels),
        room(3 * n, np.float64),
        room(3 * n, np.float64),
        room(3 * n, np.int64),
        room(3 * n, np.int32),
        limits(labels, square, room(3 * n, np.float64)),
        limits(labels, square, room(3 * n, np.float32)),
        room(3 * n, np.float64),
        room(3 * n, np.float64),
        room(3 * n, np.float32),
    )
    _ahead(slots.position, slots.speed, time, slots.grouped_at)
    _aim(slots, skins)
    _narrow(slots, box, cutoff + skins.near)
    return slots


@kernel
def label_order(slots, where, velocity):  # type: ignore[no-untyped-def]
    """Positions and velocities back to (n, 3) by label."""
    gather(slots.position, slots.groups.labels, where)
    gather(slots.speed, slots.groups.labels, velocity)


@kernel
def renewed(slots, where, velocity, box, cutoff, skins):  # type: ignore[no-untyped-def]
    """Slots with a fresh near list and, where the wide one no longer covers it, fresh groups.

    where, velocity : (n, 3), for use here
    """
    if _aim(slots, skins):
        _narrow(slots, box, cutoff + skins.near)
        return slots
    label_order(slots, where, velocity)
    return slots_of(where, velocity, box, cutoff, skins)


@kernel
def exact_forces(pair, slots, box, sums):  # type: ignore[no-untyped-def]
    """Forces in float64; with room in `sums` the pair sums too."""
    fix(slots.position, box, slots.fine, slots.coarse)
    pair_forces(pair, slots.fine, slots.limit, box / FINE, slots.groups.labels, slots.near, slots.raw, sums)
    scaled(slots.raw, box / FINE, slots.force)


@kernel
def quick_forces(pair, slots, box):  # type: ignore[no-untyped-def]
    """Forces in float32 from positions of 32 bits."""
    fix(slots.position, box, None, slots.coarse)
    tick = box / COARSE
    pair_forces(pair, slots.coarse, slots.short_limit, tick, slots.groups.labels, slots.near, slots.short_raw, None)
    scaled(slots.short_raw, tick, slots.force)
