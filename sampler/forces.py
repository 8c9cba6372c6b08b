"""Forces and pair sums: each particle against whole groups, four lanes at a time."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt
from numba.extending import overload

from sampler.compiled import kernel, piece
from sampler.fluid import Fluid
from sampler.groups import BLOCK, FAR, LANES, group, narrow, scatter
from sampler.vector import both, count, later_lanes, load, select, smaller, splat, square_root, store, total

__all__ = ["ForceShifted", "Truncated", "evaluate", "fold_images", "pair_forces", "pair_function", "place_images"]


class Truncated(NamedTuple):
    """The pair force cut at a distance; the truncations whose force is that of the bare potential."""

    cutoff: float


class ForceShifted(NamedTuple):
    """The pair force with its value at the cutoff taken off."""

    cutoff: float
    slope: float


PairFunction = Truncated | ForceShifted


def pair_function(fluid: Fluid) -> PairFunction:
    """What the kernels need of a fluid."""
    if fluid.truncation == "force-shifted":
        return ForceShifted(float(fluid.cutoff), fluid.slope_at_cutoff)
    return Truncated(float(fluid.cutoff))


def _force(pair, square, inverse, inverse6):  # type: ignore[no-untyped-def]
    """-u'(r)/r from r^2, r^-2 and r^-6; zero where r^-2 is. Chosen by the type of `pair` when compiled."""
    raise TypeError("compiled code only")


@overload(_force, jit_options={"forceinline": True})
def _force_by_type(pair, square, inverse, inverse6):  # type: ignore[no-untyped-def]
    if pair.instance_class is Truncated:
        return lambda pair, square, inverse, inverse6: (splat(48.0) * inverse6 - splat(24.0)) * inverse6 * inverse
    return lambda pair, square, inverse, inverse6: (
        (splat(48.0) * inverse6 - splat(24.0)) * inverse6 * inverse + splat(pair.slope) * square_root(inverse)
    )


def _distance(pair, square, inverse):  # type: ignore[no-untyped-def]
    """r where the potential needs the sum of distances, else zero. Chosen like `_force`."""
    raise TypeError("compiled code only")


@overload(_distance, jit_options={"forceinline": True})
def _distance_by_type(pair, square, inverse):  # type: ignore[no-untyped-def]
    if pair.instance_class is Truncated:
        return lambda pair, square, inverse: splat(0.0)
    return lambda pair, square, inverse: square * square_root(inverse)


@piece
def _meet(pair, position, force, x, y, z, other, mask, limit):  # type: ignore[no-untyped-def]
    """One particle with those lanes of a group that are in the mask and within the cutoff; the group is pushed back."""
    dx, dy, dz = x - load(position, other), y - load(position, other + 4), z - load(position, other + 8)
    square = dx * dx + dy * dy + dz * dz
    inside = both(smaller(square, limit), mask)
    inverse = select(inside, splat(1.0) / square, splat(0.0))
    inverse6 = inverse * inverse * inverse
    strength = _force(pair, square, inverse, inverse6)
    fx, fy, fz = strength * dx, strength * dy, strength * dz
    store(force, other, load(force, other) - fx)
    store(force, other + 4, load(force, other + 4) - fy)
    store(force, other + 8, load(force, other + 8) - fz)
    return fx, fy, fz, inverse6, count(inside), _distance(pair, square, inverse)


@kernel
def pair_forces(pair, position, force, n_groups, near, sums):  # type: ignore[no-untyped-def]
    """Forces on groups and images, overwritten; with `sums` also S12, S6, pairs and sum of distances, (4,).

    position, force : slot layout, images included
    sums : None leaves them out, and the work for them
    """
    for at in range(0, force.size, LANES):
        store(force, at, splat(0.0))
    limit, zero, everyone = splat(pair.cutoff * pair.cutoff), splat(0.0), later_lanes(-1)
    s12, s6, pairs, distances = zero, zero, zero, zero
    for slot in range(LANES * n_groups):
        lane = slot % LANES
        own = BLOCK * (slot // LANES)
        at = own + lane
        if position[at] == FAR:
            continue
        x, y, z = splat(position[at]), splat(position[at + 4]), splat(position[at + 8])
        px, py, pz, i6, met, length = _meet(pair, position, force, x, y, z, own, later_lanes(lane), limit)
        if sums is not None:
            s12, s6, pairs, distances = s12 + i6 * i6, s6 + i6, pairs + met, distances + length
        for k in range(near.start[slot], near.start[slot + 1]):
            other = np.int64(near.offsets[k])
            fx, fy, fz, i6, met, length = _meet(pair, position, force, x, y, z, other, everyone, limit)
            px, py, pz = px + fx, py + fy, pz + fz
            if sums is not None:
                s12, s6, pairs, distances = s12 + i6 * i6, s6 + i6, pairs + met, distances + length
        force[at] += total(px)
        force[at + 4] += total(py)
        force[at + 8] += total(pz)
    if sums is not None:
        sums[0], sums[1], sums[2], sums[3] = total(s12), total(s6), total(pairs), total(distances)


@kernel
def place_images(position, n_groups, groups):  # type: ignore[no-untyped-def]
    """Copy the groups to their periodic images."""
    for k in range(groups.image_source.size):
        source, image = BLOCK * groups.image_source[k], BLOCK * (n_groups + k)
        for c in range(3):
            store(position, image + 4 * c, load(position, source + 4 * c) + splat(groups.image_shift[k, c]))


@kernel
def fold_images(force, n_groups, groups):  # type: ignore[no-untyped-def]
    """Add the forces on images to the groups they stand for."""
    for k in range(groups.image_source.size):
        source, image = BLOCK * groups.image_source[k], BLOCK * (n_groups + k)
        for c in range(3):
            store(force, source + 4 * c, load(force, source + 4 * c) + load(force, image + 4 * c))


@kernel
def _evaluate(pair, where, box, reach):  # type: ignore[no-untyped-def]
    groups = group(where, box, reach)
    n_groups = groups.labels.size // LANES
    position = scatter(where, groups, FAR)
    place_images(position, n_groups, groups)
    near = narrow(position, groups, reach)
    force = np.empty_like(position)
    sums = np.empty(4)
    pair_forces(pair, position, force, n_groups, near, sums)
    fold_images(force, n_groups, groups)
    out = np.empty_like(where)
    for slot in range(groups.labels.size):
        if groups.labels[slot] >= 0:
            for c in range(3):
                out[groups.labels[slot], c] = force[BLOCK * (slot // LANES) + LANES * c + slot % LANES]
    return out, sums


def evaluate(
    fluid: Fluid, positions: npt.NDArray[np.float64], *, box: float
) -> tuple[npt.NDArray[np.float64], npt.NDArray[np.float64]]:
    """Forces (n, 3), epsilon/sigma, and the bare sums (4,) that `Fluid.totals` reads, of one configuration.

    positions : (n, 3), sigma, anywhere; box : edge of the periodic cube
    Raises BadRequest if the cutoff is beyond half the box.
    """
    fluid.check_box(box)
    where = np.mod(positions, box)
    where[where >= box] = 0.0
    forces, sums = _evaluate(pair_function(fluid), where, box, fluid.cutoff)
    return forces, sums
