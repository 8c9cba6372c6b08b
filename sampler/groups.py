"""Spatial groups of eight particles and the lists of which groups may touch.

Particles are sorted into square columns and along z inside a column, then cut into groups of eight lanes; the last
group of a column is filled up with padding. Positions are also held as whole numbers, the box edge being the range of
the integer, so that a difference wraps to the nearest image by itself: `fine` (int64) and `coarse` (int32).
Every pair is met once. Two lists: `wide`, by group and bounding boxes, rarely made; `near`, by particle and true
distances, cut out of the wide one often.

Slot layout: coordinate c of lane l in group g stands at [24 g + 8 c + l].
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from sampler.compiled import kernel, piece
from sampler.vector import LANES, any_of, load, low_bits, real, smaller, splat, store, upper_half

__all__ = [
    "BLOCK",
    "COARSE",
    "FINE",
    "LANES",
    "Groups",
    "Near",
    "fix",
    "gather",
    "group",
    "limits",
    "narrow",
    "room",
    "scatter",
]

BLOCK = 3 * LANES  # numbers in a group: three coordinates of eight lanes
FINE, COARSE = 2.0**64, 2.0**32  # of a whole box edge
LINE = 64  # bytes
_MARGIN = 1e-4  # sigma; more than coarse distances can be off


class Groups(NamedTuple):
    """Groups and their wide list.

    labels : (8 n_groups,), particle in each slot, -1 for padding
    start, partners : group g may touch itself and the groups partners[start[g]:start[g + 1]], all behind it
    """

    labels: npt.NDArray[np.int64]
    start: npt.NDArray[np.int64]
    partners: npt.NDArray[np.int32]


class Near(NamedTuple):
    """Offsets in the slot layout of the groups that slot i meets beside its own, offsets[start[i]:start[i + 1]]."""

    start: npt.NDArray[np.int64]
    offsets: npt.NDArray[np.int32]


@kernel
def _sort(where, box, n_columns, n_bins):  # type: ignore[no-untyped-def]
    """Slots in spatial order: labels, first group of each column, and particles before each bin of each column."""
    n = where.shape[0]
    n_keys = n_columns * n_columns * n_bins
    key = np.empty(n, np.int64)
    first = np.zeros(n_keys + 1, np.int64)
    for i in range(n):
        cx = min(n_columns - 1, int(where[i, 0] / box * n_columns))
        cy = min(n_columns - 1, int(where[i, 1] / box * n_columns))
        cz = min(n_bins - 1, int(where[i, 2] / box * n_bins))
        key[i] = (cx * n_columns + cy) * n_bins + cz
        first[key[i] + 1] += 1
    for k in range(n_keys):
        first[k + 1] += first[k]
    column = np.zeros(n_columns * n_columns + 1, np.int64)
    for c in range(n_columns * n_columns):
        size = first[(c + 1) * n_bins] - first[c * n_bins]
        column[c + 1] = column[c] + (size + LANES - 1) // LANES
    labels = np.empty(LANES * column[-1], np.int64)
    for slot in range(labels.size):
        labels[slot] = -1
    taken = np.zeros(n_keys, np.int64)
    for i in range(n):
        c = key[i] // n_bins
        rank = first[key[i]] - first[c * n_bins] + taken[key[i]]
        taken[key[i]] += 1
        labels[LANES * column[c] + rank] = i
    return labels, column, first


@kernel
def _bounds(where, labels):  # type: ignore[no-untyped-def]
    """Bounding boxes of groups, (n_groups, 6): centre, then half the edges."""
    bounds = np.empty((labels.size // LANES, 6))
    for g in range(bounds.shape[0]):
        for c in range(3):
            low, high = np.inf, -np.inf
            for lane in range(LANES):
                label = labels[LANES * g + lane]
                if label >= 0:
                    low = min(low, where[label, c])
                    high = max(high, where[label, c])
            bounds[g, c], bounds[g, 3 + c] = 0.5 * (low + high), 0.5 * (high - low)
    return bounds


@piece
def _gap(bounds, a, b, c, box):  # type: ignore[no-untyped-def]
    """Distance along coordinate c between bounding boxes, nearest images."""
    apart = abs(bounds[a, c] - bounds[b, c])
    return max(0.0, min(apart, box - apart) - bounds[a, 3 + c] - bounds[b, 3 + c])


@kernel
def _columns_within(n_columns, edge, reach):  # type: ignore[no-untyped-def]
    """Offsets, (n, 2) from 0 to n_columns - 1, of the columns that come within reach of a column."""
    offsets = np.empty((n_columns * n_columns, 2), np.int64)
    count = 0
    for x in range(n_columns):
        for y in range(n_columns):
            dx, dy = max(0, min(x, n_columns - x) - 1), max(0, min(y, n_columns - y) - 1)
            offsets[count, 0], offsets[count, 1] = x, y
            count += 1 if edge * edge * (dx * dx + dy * dy) <= reach * reach else 0
    return offsets[:count]


@piece
def _window(bounds, g, first, column, other, n_bins, box, reach):  # type: ignore[no-untyped-def]
    """Groups of a column that may come within reach of group g along z: two ranges, as z is periodic."""
    begin, end, base = column[other], column[other + 1], other * n_bins
    low = math.floor((bounds[g, 2] - bounds[g, 5] - reach) / box * n_bins)
    high = math.floor((bounds[g, 2] + bounds[g, 5] + reach) / box * n_bins)
    if high - low + 1 >= n_bins:
        return (begin, end), (end, end)
    low, high = low % n_bins, high % n_bins
    from_low = begin + (first[base + low] - first[base]) // LANES
    past_high = begin + (first[base + high + 1] - first[base] + LANES - 1) // LANES
    if low <= high:
        return (from_low, past_high), (end, end)
    return (begin, past_high), (max(past_high, from_low), end)


@kernel
def _partners(bounds, column, first, n_columns, n_bins, box, reach):  # type: ignore[no-untyped-def]
    """The wide list of every group: groups behind it whose bounding boxes come within reach."""
    square = reach * reach
    offsets = _columns_within(n_columns, box / n_columns, reach)
    start = np.zeros(column[-1] + 1, np.int64)
    partners = np.empty(64 * column[-1] + 64, np.int32)
    count = 0
    for home in range(n_columns * n_columns):
        for g in range(column[home], column[home + 1]):
            for k in range(offsets.shape[0]):
                x, y = home // n_columns + offsets[k, 0], home % n_columns + offsets[k, 1]
                other = (x % n_columns) * n_columns + y % n_columns
                if other < home:
                    continue
                if count + column[other + 1] - column[other] > partners.size:
                    larger = np.empty(2 * partners.size + column[-1], np.int32)
                    for done in range(count):
                        larger[done] = partners[done]
                    partners = larger
                for low, high in _window(bounds, g, first, column, other, n_bins, box, reach):
                    for b in range(max(g + 1, low), high):
                        dx, dy, dz = _gap(bounds, g, b, 0, box), _gap(bounds, g, b, 1, box), _gap(bounds, g, b, 2, box)
                        partners[count] = b
                        count += 1 if dx * dx + dy * dy + dz * dz <= square else 0
            start[g + 1] = count
    return start, partners


@kernel
def group(where, box, reach):  # type: ignore[no-untyped-def]
    """Sort particles into groups and list which groups may come within reach.

    where : (n, 3), positions inside [0, box)
    """
    column_edge = (LANES * box**3 / where.shape[0]) ** (1.0 / 3.0)
    n_columns = max(1, int(box / column_edge + 0.5))
    n_bins = 8 * n_columns
    labels, column, first = _sort(where, box, n_columns, n_bins)
    start, partners = _partners(_bounds(where, labels), column, first, n_columns, n_bins, box, reach)
    return Groups(labels, start, partners)


@piece
def room(size, kind):  # type: ignore[no-untyped-def]
    """An empty array that starts on a cache line, so that no row of lanes straddles two."""
    out = np.empty(size + LINE, kind)
    first = (-out.ctypes.data % LINE) // out.itemsize
    return out[first : first + size]


@kernel
def scatter(values, labels):  # type: ignore[no-untyped-def]
    """(n, 3) values by label into the slot layout; padding slots get zeros."""
    out = room(3 * labels.size, np.float64)
    for slot in range(labels.size):
        at = BLOCK * (slot // LANES) + slot % LANES
        for c in range(3):
            out[at + LANES * c] = values[labels[slot], c] if labels[slot] >= 0 else 0.0
    return out


@kernel
def gather(values, labels, out):  # type: ignore[no-untyped-def]
    """Slot layout back to (n, 3) by label."""
    for slot in range(labels.size):
        if labels[slot] >= 0:
            for c in range(3):
                out[labels[slot], c] = values[BLOCK * (slot // LANES) + LANES * c + slot % LANES]


@kernel
def limits(labels, square, out):  # type: ignore[no-untyped-def]
    """What the squared distance to a slot must stay below, beside its x: `square`; to padding, never fulfilled."""
    for slot in range(labels.size):
        out[BLOCK * (slot // LANES) + slot % LANES] = square if labels[slot] >= 0 else -1.0
    return out


@kernel
def fix(position, box, fine, coarse):  # type: ignore[no-untyped-def]
    """Positions within two box edges of the origin as whole numbers of box/2^64 and box/2^32; `fine` may be None."""
    scale = splat(2.0**50 / box)
    for at in range(0, position.size, LANES):
        wrapped = low_bits(scale * load(position, at))
        if fine is not None:
            store(fine, at, wrapped)
        store(coarse, at, upper_half(wrapped))


@kernel
def narrow(coarse, groups, box, reach, near):  # type: ignore[no-untyped-def]
    """Cut the wide list down to the groups with a particle within reach of each particle; `near` is overwritten."""
    ticks = (reach + _MARGIN) * COARSE / box
    limit = limits(groups.labels, ticks * ticks, room(coarse.size, np.float32))
    count = 0
    for slot in range(groups.labels.size):
        g = slot // LANES
        if groups.labels[slot] >= 0:
            at = BLOCK * g + slot % LANES
            x, y, z = splat(coarse[at]), splat(coarse[at + LANES]), splat(coarse[at + 2 * LANES])
            for k in range(groups.start[g], groups.start[g + 1]):
                other = np.uint64(BLOCK * groups.partners[np.uint64(k)])
                dx = real(x - load(coarse, other))
                dy = real(y - load(coarse, other + LANES))
                dz = real(z - load(coarse, other + 2 * LANES))
                near.offsets[np.uint64(count)] = other
                square = dx * dx + dy * dy + dz * dz
                count += 1 if any_of(smaller(square, load(limit, other))) else 0
        near.start[slot + 1] = count
    near.offsets[count] = 0
