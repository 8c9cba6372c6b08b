"""Spatial groups of four particles, their periodic images, and the lists of which groups may touch.

Particles are sorted into square columns and along z inside a column, then cut into groups of four lanes; the last
group of a column is filled up with padding far outside. Every pair is met once: a group meets the groups behind it
and the images shifted by a positive lattice vector (first non-zero component positive). Two lists: `wide`, by group
and bounding boxes, rarely made; `near`, by particle and true distances, cut out of the wide one often.

Slot layout: coordinate c of lane l in group g stands at [12 g + 4 c + l].
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from sampler.compiled import kernel, piece
from sampler.vector import any_of, load, smaller, splat

__all__ = ["Groups", "Near", "group", "narrow", "scatter"]

LANES = 4
BLOCK = 12  # numbers in a group: three coordinates of four lanes
FAR = 1.0e8  # where padding sits; its distance to anything is beyond every cutoff


class Groups(NamedTuple):
    """Groups and their wide list.

    labels : (4 n_groups,), particle in each slot, -1 for padding
    image_source, image_shift : (n_images,), (n_images, 3), groups repeated by periodicity, counted on from n_groups
    start, partners : group g may touch the groups partners[start[g]:start[g + 1]]
    """

    labels: npt.NDArray[np.int64]
    image_source: npt.NDArray[np.int64]
    image_shift: npt.NDArray[np.float64]
    start: npt.NDArray[np.int64]
    partners: npt.NDArray[np.int32]


class Near(NamedTuple):
    """Offsets in the slot layout of the groups that slot i meets, offsets[start[i]:start[i + 1]], but its own."""

    start: npt.NDArray[np.int64]
    offsets: npt.NDArray[np.int32]


@kernel
def _sort(where, box, n_columns, n_bins):  # type: ignore[no-untyped-def]
    """Slots in spatial order: labels of slots and the first group of each column."""
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
    return labels, column


@kernel
def _bounds(where, labels):  # type: ignore[no-untyped-def]
    """Bounding boxes of groups, (n_groups, 6): lower then upper corner."""
    bounds = np.empty((labels.size // LANES, 6))
    for g in range(bounds.shape[0]):
        for c in range(3):
            low, high = np.inf, -np.inf
            for lane in range(LANES):
                label = labels[LANES * g + lane]
                if label >= 0:
                    low = min(low, where[label, c])
                    high = max(high, where[label, c])
            bounds[g, c], bounds[g, 3 + c] = low, high
    return bounds


@piece
def _is_image_needed(bounds, g, shift, box, reach):  # type: ignore[no-untyped-def]
    """Whether group g shifted by a lattice vector comes within reach of the box."""
    near = True
    for c in range(3):
        move = shift[c] * box
        near = near and bounds[g, c] + move <= box + reach and bounds[g, 3 + c] + move >= -reach
    return near


@kernel
def _images(bounds, column, n_columns, margin, box, reach):  # type: ignore[no-untyped-def]
    """Images in the order of the extended columns, and the first image of each extended column.

    Extended columns run over 0 .. n_columns + margin in x and -margin .. n_columns + margin in y.
    """
    width = n_columns + 2 * margin
    first = np.zeros((n_columns + margin) * width + 1, np.int64)
    source = np.empty(0, np.int64)
    shifts = np.empty((0, 3))
    shift = np.zeros(3)
    for filling in range(2):
        count = 0
        for ex in range(n_columns + margin):
            for ey in range(-margin, n_columns + margin):
                shift[0] = 1.0 if ex >= n_columns else 0.0
                shift[1] = -1.0 if ey < 0 else (1.0 if ey >= n_columns else 0.0)
                home = (ex - int(shift[0]) * n_columns) * n_columns + ey - int(shift[1]) * n_columns
                for sz in range(-1, 2):
                    shift[2] = sz
                    leading = shift[0] if shift[0] != 0.0 else (shift[1] if shift[1] != 0.0 else shift[2])
                    if leading <= 0.0:
                        continue
                    for g in range(column[home], column[home + 1]):
                        if _is_image_needed(bounds, g, shift, box, reach):
                            if filling == 1:
                                source[count] = g
                                for c in range(3):
                                    shifts[count, c] = shift[c] * box
                            count += 1
                first[ex * width + ey + margin + 1] = count
        if filling == 0:
            source = np.empty(count, np.int64)
            shifts = np.empty((count, 3))
    return source, shifts, first


@piece
def _gap(bounds, a, b):  # type: ignore[no-untyped-def]
    """Squared distance of two bounding boxes."""
    distance = 0.0
    for c in range(3):
        d = max(0.0, max(bounds[a, c] - bounds[b, 3 + c], bounds[b, c] - bounds[a, 3 + c]))
        distance += d * d
    return distance


@kernel
def _columns_bounds(bounds, column, first_image, n_groups, n_columns, margin):  # type: ignore[no-untyped-def]
    """Bounding boxes of extended columns; an empty column's is inside out and touches nothing."""
    width = n_columns + 2 * margin
    out = np.empty((first_image.size - 1, 6))
    for e in range(out.shape[0]):
        for c in range(3):
            out[e, c], out[e, 3 + c] = np.inf, -np.inf
        ex, ey = e // width, e % width - margin
        low, high = 0, 0
        if ex < n_columns and 0 <= ey < n_columns:
            low, high = column[ex * n_columns + ey], column[ex * n_columns + ey + 1]
        for _ in range(2):
            for g in range(low, high):
                for c in range(3):
                    out[e, c] = min(out[e, c], bounds[g, c])
                    out[e, 3 + c] = max(out[e, 3 + c], bounds[g, 3 + c])
            low, high = n_groups + first_image[e], n_groups + first_image[e + 1]
    return out


@kernel
def _partners(bounds, column, first_image, n_columns, margin, box, reach):  # type: ignore[no-untyped-def]
    """The wide list of every group: groups behind it and images whose bounding boxes come within reach."""
    n_groups = column[-1]
    width = n_columns + 2 * margin
    edges = _columns_bounds(bounds, column, first_image, n_groups, n_columns, margin)
    square = reach * reach
    per_length = n_columns / box
    start = np.zeros(n_groups + 1, np.int64)
    partners = np.empty(64 * n_groups + 64, np.int32)
    count = 0
    for home in range(n_columns * n_columns):
        for g in range(column[home], column[home + 1]):
            x_first = max(0, int(np.floor((bounds[g, 0] - reach) * per_length - 1e-9)))
            x_last = min(n_columns + margin - 1, int(np.floor((bounds[g, 3] + reach) * per_length + 1e-9)))
            y_first = max(-margin, int(np.floor((bounds[g, 1] - reach) * per_length - 1e-9)))
            y_last = min(n_columns + margin - 1, int(np.floor((bounds[g, 4] + reach) * per_length + 1e-9)))
            for ex in range(x_first, x_last + 1):
                for ey in range(y_first, y_last + 1):
                    e = ex * width + ey + margin
                    dx = max(0.0, max(edges[e, 0] - bounds[g, 3], bounds[g, 0] - edges[e, 3]))
                    dy = max(0.0, max(edges[e, 1] - bounds[g, 4], bounds[g, 1] - edges[e, 4]))
                    if dx * dx + dy * dy > square:
                        continue
                    low, high = 0, 0
                    if ex < n_columns and 0 <= ey < n_columns:
                        low = max(g + 1, column[ex * n_columns + ey])
                        high = column[ex * n_columns + ey + 1]
                    for _ in range(2):
                        if count + high - low > partners.size:
                            larger = np.empty(2 * partners.size + high - low, np.int32)
                            for k in range(count):
                                larger[k] = partners[k]
                            partners = larger
                        for b in range(low, high):
                            partners[count] = b
                            count += 1 if _gap(bounds, g, b) <= square else 0
                        low, high = n_groups + first_image[e], n_groups + first_image[e + 1]
            start[g + 1] = count
    return start, partners


@kernel
def group(where, box, reach):  # type: ignore[no-untyped-def]
    """Sort particles into groups and list which groups may come within reach (smaller than the box edge).

    where : (n, 3), positions inside [0, box)
    """
    column_edge = (LANES * box**3 / where.shape[0]) ** (1.0 / 3.0)
    n_columns = max(1, int(box / column_edge + 0.5))
    margin = min(n_columns, int(reach / box * n_columns) + 1)
    labels, column = _sort(where, box, n_columns, 8 * n_columns)
    real = _bounds(where, labels)
    source, shift, first_image = _images(real, column, n_columns, margin, box, reach)
    n_groups = real.shape[0]
    bounds = np.empty((n_groups + source.size, 6))
    for g in range(bounds.shape[0]):
        for c in range(6):
            bounds[g, c] = real[g, c] if g < n_groups else real[source[g - n_groups], c] + shift[g - n_groups, c % 3]
    start, partners = _partners(bounds, column, first_image, n_columns, margin, box, reach)
    return Groups(labels, source, shift, start, partners)


@kernel
def scatter(values, groups, padding):  # type: ignore[no-untyped-def]
    """(n, 3) values by label into the slot layout, with room for the images behind; padding slots get a number."""
    out = np.empty(BLOCK * (groups.labels.size // LANES + groups.image_source.size))
    for slot in range(groups.labels.size):
        label = groups.labels[slot]
        at = BLOCK * (slot // LANES) + slot % LANES
        for c in range(3):
            out[at + LANES * c] = values[label, c] if label >= 0 else padding
    return out


@kernel
def narrow(position, groups, reach):  # type: ignore[no-untyped-def]
    """Cut the wide list down to the groups with a particle within reach of each particle now."""
    square = splat(reach * reach)
    start = np.zeros(groups.labels.size + 1, np.int64)
    offsets = np.empty(LANES * groups.start[-1] + LANES, np.int32)
    count = 0
    for slot in range(groups.labels.size):
        g = slot // LANES
        if groups.labels[slot] >= 0:
            at = BLOCK * g + slot % LANES
            x, y, z = splat(position[at]), splat(position[at + 4]), splat(position[at + 8])
            for k in range(groups.start[g], groups.start[g + 1]):
                other = BLOCK * np.int64(groups.partners[k])
                dx, dy, dz = x - load(position, other), y - load(position, other + 4), z - load(position, other + 8)
                offsets[count] = other
                count += 1 if any_of(smaller(dx * dx + dy * dy + dz * dz, square)) else 0
        start[slot + 1] = count
    return Near(start, offsets)
