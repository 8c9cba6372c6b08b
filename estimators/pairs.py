"""Pairs of particles in a periodic cube, counted by their nearest-image distance, and the bins they are counted in."""

from __future__ import annotations

import os
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from estimators.compiled import kernel
from sampler.fluid import Fluid, State

__all__ = ["Bins", "pair_counts"]

Floats = npt.NDArray[np.float64]
PairFunction = Callable[[Floats], Floats]

POINTS = 8  # Gauss-Legendre points in a bin
BLOCK = 512  # pairs of one particle that are binned at once
CLOSE = 2.0**-21  # relative error of a distance in single precision, at most: 8 roundings
GRAINS = 2.0  # absolute error of a distance between grid points, at most


@dataclass(frozen=True)
class Bins:
    """Equal bins from 0 to half the box, one edge at the cutoff; `inside` of them lie within the cutoff."""

    width: float
    number: int
    inside: int

    @staticmethod
    def of(fluid: Fluid, state: State, bin_width: float) -> Bins:
        reach = fluid.cutoff if fluid.has_pairs else 0.5 * state.box
        inside = round(reach / bin_width)
        width = reach / inside
        return Bins(width, int(0.5 * state.box / width * (1.0 + 1e-12)), inside)

    @cached_property
    def edges(self) -> Floats:
        return self.width * np.arange(self.number + 1, dtype=float)

    @cached_property
    def centres(self) -> Floats:
        return self.edges[:-1] + 0.5 * self.width

    def parted(self, parts: int) -> Bins:
        """Each of them cut into as many."""
        return Bins(self.width / parts, self.number * parts, self.inside * parts)

    @cached_property
    def nodes(self) -> tuple[Floats, Floats]:
        """Points of each bin, (n, POINTS), and their parts of its volume, rows of sum 1."""
        points, parts = np.polynomial.legendre.leggauss(POINTS)
        r = self.centres[:, None] + 0.5 * self.width * points
        parts = parts * r**2
        return r, parts / np.sum(parts, axis=1, keepdims=True)

    def means(self, function: PairFunction, energy: PairFunction, temperature: float) -> Floats:
        """Means of a pair function over each bin, weighted by r^2 exp(-u/T), (n,)."""
        r, parts = self.nodes
        energies = energy(r)
        parts = parts * np.exp((np.min(energies, axis=1, keepdims=True) - energies) / temperature)
        return np.asarray(np.sum(parts * function(r), axis=1) / np.sum(parts, axis=1), dtype=float)

    @cached_property
    def volumes(self) -> Floats:
        return np.asarray(4.0 / 3.0 * np.pi * np.diff(self.edges**3), dtype=float)


def pair_counts(frames: Floats, box: float, *, width: float, number: int) -> npt.NDArray[np.int32]:
    """Pairs in each of `number` equal bins from distance 0 on, (m, number); those farther apart are left out.

    frames : (m, particles, 3), positions, inside the cube of edge `box` or not
    Every pair counts where double precision puts it. On all cores; the counts do not depend on how many there are.
    """
    corner = int(np.sqrt(0.75) * box / width) + 2
    counts = np.zeros((len(frames), max(corner, number)), dtype=np.int32)
    workers = os.cpu_count() or 1
    stretches = zip(np.array_split(frames, workers), np.array_split(counts, workers), strict=True)
    with ThreadPoolExecutor(workers) as threads:
        list(threads.map(lambda stretch: _add_pairs(stretch[0], box, 1.0 / width, stretch[1]), stretches))
    return counts[:, :number]


@kernel
def _add_pairs(frames, box, per_width, counts):  # type: ignore[no-untyped-def]
    """Counts every pair of each frame once.

    Positions on a grid of 2^32 points along each edge: their differences wrap around as integers do.
    """
    m, n, _ = frames.shape
    where, grid = np.empty((3, n)), np.empty((3, n), np.int32)
    places = np.empty(BLOCK, np.int32)
    for f in range(m):
        for i in range(n):
            for k in range(3):
                where[k, i] = frames[f, i, k] - box * np.floor(frames[f, i, k] / box)
                grid[k, i] = np.int32(np.int64(where[k, i] * (2.0**32 / box)))
        x, y, z = where[0], where[1], where[2]
        gx, gy, gz = grid[0], grid[1], grid[2]
        pairs = counts[f]
        for i in range(n - 1):
            for first in range(i + 1, n, BLOCK):
                some = slice(first, min(first + BLOCK, n))
                found = places[: some.stop - first]
                if _is_close(gx[some], gy[some], gz[some], gx[i], gy[i], gz[i], box / 2.0**32 * per_width, found):
                    _place(x[some], y[some], z[some], x[i], y[i], z[i], box, per_width, found)
                for place in found.view(np.uint32):
                    pairs[place] += 1


@kernel
def _is_close(x, y, z, x0, y0, z0, per_width, places):  # type: ignore[no-untyped-def]
    """Whether a distance lies too close to an edge for single precision; else all bins are right.

    Slices that start at zero and no branches let the loop be vectorised.
    """
    low, high = np.float32(per_width * (1.0 - CLOSE)), np.float32(per_width * (1.0 + CLOSE))
    slack = np.float32(per_width * GRAINS)
    differing = np.int32(0)
    for j in range(x.size):
        dx = np.float32(np.int32(x[j] - x0))
        dy = np.float32(np.int32(y[j] - y0))
        dz = np.float32(np.int32(z[j] - z0))
        r = np.sqrt(dx * dx + dy * dy + dz * dz)
        place = np.int32(r * low - slack)
        places[j] = place
        differing = np.int32(differing | (np.int32(r * high + slack) ^ place))
    return differing != 0


@kernel
def _place(x, y, z, x0, y0, z0, box, per_width, places):  # type: ignore[no-untyped-def]
    """Bin of each distance."""
    half = 0.5 * box
    for j in range(x.size):
        dx = half - abs(abs(x[j] - x0) - half)
        dy = half - abs(abs(y[j] - y0) - half)
        dz = half - abs(abs(z[j] - z0) - half)
        places[j] = np.int32(np.sqrt(dx * dx + dy * dy + dz * dz) * per_width)
