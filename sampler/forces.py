"""Forces and pair sums: each particle against whole groups, eight lanes at a time."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from sampler.compiled import kernel, piece
from sampler.fluid import Fluid
from sampler.groups import BLOCK, FINE, LANES, Near, fix, gather, group, limits, narrow, scatter
from sampler.pairs import curvature, pair_function, strength, terms
from sampler.vector import both, broad, later_lanes, load, real, select, smaller, splat, store, total

__all__ = ["evaluate", "evaluate_with_laplacian", "pair_forces", "scaled"]

Floats = npt.NDArray[np.float64]


@piece
def _apart(ticks, limit, scale, x, y, z, other):  # type: ignore[no-untyped-def]
    """A particle and a group: differences in ticks, squared distances, and which lanes are inside the cutoff."""
    dx = real(x - load(ticks, other))
    dy = real(y - load(ticks, other + LANES))
    dz = real(z - load(ticks, other + 2 * LANES))
    square = scale * (dx * dx + dy * dy + dz * dz)
    return dx, dy, dz, square, smaller(square, load(limit, other))


@piece
def _push(pair, force, zero, other, dx, dy, dz, square, inside):  # type: ignore[no-untyped-def]
    """The force of a group on a particle, lane by lane; the group is pushed back."""
    pull = select(inside, strength(pair, square), zero)
    fx, fy, fz = pull * dx, pull * dy, pull * dz
    store(force, other, load(force, other) - fx)
    store(force, other + LANES, load(force, other + LANES) - fy)
    store(force, other + 2 * LANES, load(force, other + 2 * LANES) - fz)
    return fx, fy, fz


@kernel
def pair_forces(pair, ticks, limit, tick, labels, near, force, sums):  # type: ignore[no-untyped-def]
    """Forces of all pairs in the precision of `force`, overwritten; with room in `sums` also the pair sums.

    ticks : slot layout, whole numbers of `tick` (sigma); limit : as `limits` gives it
    force : slot layout, in epsilon/sigma per tick
    sums : (5,), of the first two `terms`, of pairs inside the cutoff, of the third, and the sum over particles of the
        Laplacian of U; None or empty to leave them out
    """
    number = force.dtype.type
    zero, one = splat(number(0.0)), splat(number(1.0))
    for at in range(0, force.size, LANES):
        store(force, at, zero)
    scale = tick * tick
    first, second, third, pairs, bend = zero, zero, zero, zero, zero
    for slot in range(labels.size):
        if labels[slot] < 0:
            continue
        lane = slot % LANES
        other = BLOCK * (slot // LANES)
        at = other + lane
        x, y, z = splat(ticks[at]), splat(ticks[at + LANES]), splat(ticks[at + 2 * LANES])
        px, py, pz = zero, zero, zero
        dx, dy, dz, square, inside = _apart(ticks, limit, scale, x, y, z, other)
        inside = both(inside, later_lanes(lane))
        for k in range(near.start[slot], near.start[slot + 1] + 1):
            coming = int(near.offsets[np.uint64(k)])
            next_dx, next_dy, next_dz, next_square, next_inside = _apart(ticks, limit, scale, x, y, z, coming)
            fx, fy, fz = _push(pair, force, zero, other, dx, dy, dz, square, inside)
            px, py, pz = px + fx, py + fy, pz + fz
            if sums is not None and sums.size > 0:
                a, b, c = terms(pair, square)
                first, second = first + select(inside, a, zero), second + select(inside, b, zero)
                third, pairs = third + select(inside, c, zero), pairs + select(inside, one, zero)
                bend = bend + select(inside, curvature(pair, square), zero)
            other, inside = coming, next_inside
            dx, dy, dz, square = next_dx, next_dy, next_dz, next_square
        force[at] += total(px)
        force[at + LANES] += total(py)
        force[at + 2 * LANES] += total(pz)
    if sums is not None and sums.size > 0:
        sums[0], sums[1], sums[2], sums[3] = total(first), total(second), total(pairs), total(third)
        sums[4] = 2.0 * total(bend)


@kernel
def scaled(values, factor, out):  # type: ignore[no-untyped-def]
    """Values times a factor, as float64."""
    by = splat(factor)
    for at in range(0, values.size, LANES):
        store(out, at, by * broad(load(values, at)))


@kernel
def _evaluate(pair, where, box):  # type: ignore[no-untyped-def]
    groups = group(where, box, pair.cutoff)
    size, labels = groups.labels.size, groups.labels
    fine, coarse = np.empty(3 * size, np.int64), np.empty(3 * size, np.int32)
    fix(scatter(where, labels), box, fine, coarse)
    near = Near(np.zeros(size + 1, np.int64), np.empty(LANES * groups.start[-1] + 1, np.int32))
    narrow(coarse, groups, box, pair.cutoff, near)
    limit = limits(labels, pair.cutoff * pair.cutoff, np.empty(3 * size))
    force, sums, out = np.empty(3 * size), np.empty(5), np.empty_like(where)
    pair_forces(pair, fine, limit, box / FINE, labels, near, force, sums)
    scaled(force, box / FINE, force)
    gather(force, labels, out)
    return out, sums


def evaluate(fluid: Fluid, positions: Floats, *, box: float) -> tuple[Floats, Floats]:
    """Forces (n, 3), epsilon/sigma, and the bare sums (4,) that `Fluid.totals` reads, of one configuration.

    positions : (n, 3), sigma, anywhere; box : edge of the periodic cube
    Raises BadRequest if the cutoff is beyond half the box.
    """
    forces, sums = evaluate_with_laplacian(fluid, positions, box=box)
    return forces, sums[:4]


def evaluate_with_laplacian(fluid: Fluid, positions: Floats, *, box: float) -> tuple[Floats, Floats]:
    """The same with a fifth number: the sum over particles of the Laplacian of U, epsilon/sigma^2.

    What the jump of the force at the cutoff adds to it is left out.
    """
    fluid.check_box(box)
    where = np.mod(positions, box)
    where[where >= box] = 0.0
    forces, sums = _evaluate(pair_function(fluid), where, box)
    return forces, sums
