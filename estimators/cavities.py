"""Test particles put into the free space of frames, and what they weigh there."""

from __future__ import annotations

import math
import os
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from estimators.compiled import kernel
from estimators.frames import total
from sampler.fluid import Fluid, State

__all__ = ["STRATA", "Cavities", "Tally"]

Floats = npt.NDArray[np.float64]
Counts = npt.NDArray[np.int64]

CELL = 0.3  # sigma, edge of a cell at most
STRATA = 20
FAR = 1.1  # sigma; cells whose centres are farther than this from all particles are not told apart
OVERLAP = 25.0  # T; what a pair that is a cell's end costs at least,
BINDING = 15.0  # beside these epsilon, which the other neighbours of a test particle hardly ever give back


@dataclass(frozen=True, eq=False)
class Tally:
    """What the test particles met, by frame and stratum, (m, STRATA) each.

    share : of all cells
    weight, square : mean of exp(-dU/T), and of its square
    """

    share: Floats
    weight: Floats
    square: Floats

    @property
    def mean_weights(self) -> Floats:
        """Mean of exp(-dU/T) over the whole cube of each frame, (m,)."""
        return np.asarray(np.einsum("fs,fs->f", self.share, self.weight), dtype=float)


@dataclass(frozen=True)
class Cavities:
    """Free space in frames of one state, found by dividing the cube into cells.

    Cells that lie within a particle are left out: exp(-dU/T) is nothing there. The others form strata by the squared
    distance of their centre to the nearest particle, which tells roughly what a test particle weighs there; each
    stratum is given test particles of its own, uniformly over its cells. The mean over the cube, the sum over strata of
    share times mean, is free of bias however many each is given.
    Free space found first by P. G. Mezei, Mol. Phys. 40, 901 (1980), there for moves that insert; from memory.
    """

    fluid: Fluid
    state: State

    @cached_property
    def cells(self) -> int:
        """Along an edge of the cube."""
        return math.ceil(self.state.box / CELL)

    @cached_property
    def nearest(self) -> float:
        """Squared distance to a particle below which a cell's centre tells that all of the cell is within it."""
        r = np.linspace(0.3, 1.0, 701)
        within = self.fluid.pair_energy(r) > OVERLAP * self.state.temperature + BINDING
        diagonal = 0.5 * math.sqrt(3.0) * self.state.box / self.cells
        return max(float(np.max(r[within], initial=0.0)) - diagonal, 0.0) ** 2

    def insert(self, frames: Floats, trials: Counts, *, key: int) -> Tally:
        """Put trials[s], at least one, test particles into stratum s of each frame, where it has any cells.

        frames : (m, particles, 3); trials : (STRATA,)
        key : of the random numbers of the first frame; those of frame f have key + f
        On all cores; the result does not depend on how many there are.
        """
        sums = np.zeros((3, len(frames), STRATA))
        workers = os.cpu_count() or 1
        firsts = np.arange(workers) * len(frames) // workers
        pieces = zip(firsts, np.array_split(frames, firsts[1:]), np.array_split(sums, firsts[1:], axis=1), strict=True)

        def fill(piece: tuple[int, Floats, Floats]) -> None:
            first, some, into = piece
            start = np.uint64((key + int(first)) % 2**64)
            _insert(some, self.state.box, self.cells, self.nearest, FAR**2, trials, *self._pair, start, into)

        with ThreadPoolExecutor(workers) as threads:
            list(threads.map(fill, pieces))
        return Tally(*sums)

    @property
    def _pair(self) -> tuple[float, Floats]:
        """Squared cutoff, and -1/T times what the bare sums weigh in U_dyn."""
        return self.fluid.cutoff**2, -self.fluid.sampled_weights / self.state.temperature


@kernel
def _insert(frames, box, cells, nearest, far, trials, reach, weights, key, sums):  # type: ignore[no-untyped-def]
    """Adds up what the test particles of each frame meet, a frame after another."""
    m, n, _ = frames.shape
    number = trials.size
    where, parts = np.empty((3, n)), np.empty(n)
    squares, order = np.empty(cells**3, np.float32), np.empty(cells**3, np.int32)
    starts = np.empty(number + 2, np.int64)
    edge = box / cells
    for f in range(m):
        for i in range(n):
            for k in range(3):
                where[k, i] = frames[f, i, k] - box * np.floor(frames[f, i, k] / box)
        _measure(where, edge, cells, far, squares)
        _sort(squares, nearest, far, starts, order)
        state = _mixed(key + np.uint64(f))
        for s in range(number):
            free = starts[s + 1] - starts[s]
            sums[0, f, s] = free / squares.size
            for _ in range(trials[s] if free else 0):
                state, place = _next(state)
                cell = order[starts[s] + np.int64(place * free)]
                state, a = _next(state)
                state, b = _next(state)
                state, c = _next(state)
                x, y, z = cell // (cells * cells) + a, cell // cells % cells + b, cell % cells + c
                factor = np.exp(
                    _exponent(where[0], where[1], where[2], x * edge, y * edge, z * edge, box, reach, weights, parts)
                )
                sums[1, f, s] += factor / trials[s]
                sums[2, f, s] += factor * factor / trials[s]


@kernel
def _measure(where, edge, cells, far, squares):  # type: ignore[no-untyped-def]
    """Squared distance of the centre of each cell to the nearest particle, `far` if none is nearer."""
    for cell in range(squares.size):
        squares[cell] = far
    per = 1.0 / edge
    radius = np.sqrt(far) * per
    span = int(radius) + 2
    wrapped = np.empty(cells + 2 * span, np.int64)
    for c in range(wrapped.size):
        wrapped[c] = (c - span + cells * span) % cells
    for i in range(where.shape[1]):
        x, y, z = where[0, i] * per - 0.5, where[1, i] * per - 0.5, where[2, i] * per - 0.5
        for cx in range(int(np.ceil(x - radius)), int(np.floor(x + radius)) + 1):
            square_x = (cx - x) * (cx - x)
            depth = np.sqrt(max(radius * radius - square_x, 0.0))
            for cy in range(int(np.ceil(y - depth)), int(np.floor(y + depth)) + 1):
                square_y = square_x + (cy - y) * (cy - y)
                height = np.sqrt(max(radius * radius - square_y, 0.0))
                row = (wrapped[cx + span] * cells + wrapped[cy + span]) * cells
                for cz in range(int(np.ceil(z - height)), int(np.floor(z + height)) + 1):
                    square = np.float32((square_y + (cz - z) * (cz - z)) * edge * edge)
                    place = row + wrapped[cz + span]
                    squares[place] = min(squares[place], square)


@kernel
def _sort(squares, nearest, far, starts, order):  # type: ignore[no-untyped-def]
    """Cells by stratum: those of stratum s are order[starts[s] : starts[s + 1]]; those within a particle are none."""
    last = starts.size - 3
    per = last / (far - nearest)
    for s in range(starts.size):
        starts[s] = 0
    for square in squares:
        if square >= nearest:
            starts[min(int((square - nearest) * per), last) + 2] += 1
    for s in range(2, starts.size):
        starts[s] += starts[s - 1]
    for cell in range(squares.size):
        if squares[cell] >= nearest:
            s = min(int((squares[cell] - nearest) * per), last) + 1
            order[starts[s]] = cell
            starts[s] += 1


@kernel
def _exponent(xs, ys, zs, x, y, z, box, reach, weights, parts):  # type: ignore[no-untyped-def]
    """-dU/T of a test particle, from nearest images inside the cutoff; loops free of branches."""
    half, a, b, c, d = 0.5 * box, weights[0], weights[1], weights[2], weights[3]
    for j in range(xs.size):
        square = _square(xs[j] - x, ys[j] - y, zs[j] - z, half)
        inverse = 1.0 / (square * square * square + 1e-30)
        parts[j] = (a * inverse + b) * inverse + c if square < reach else 0.0
    if d != 0.0:
        for j in range(xs.size):
            square = _square(xs[j] - x, ys[j] - y, zs[j] - z, half)
            parts[j] += d * np.sqrt(square) if square < reach else 0.0
    return total(parts)


@kernel
def _square(x, y, z, half):  # type: ignore[no-untyped-def]
    """Squared distance of the nearest image, from differences along each edge and half the edge."""
    x, y, z = half - abs(abs(x) - half), half - abs(abs(y) - half), half - abs(abs(z) - half)
    return x * x + y * y + z * z


@kernel
def _mixed(value):  # type: ignore[no-untyped-def]
    """A scrambled 64-bit number: G. L. Steele, D. Lea, C. H. Flood, Proc. OOPSLA 2014, 453; constants from memory."""
    value = (value ^ (value >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    value = (value ^ (value >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return value ^ (value >> np.uint64(31))


@kernel
def _next(state):  # type: ignore[no-untyped-def]
    """The next state of the generator, and a number in [0, 1)."""
    state += np.uint64(0x9E3779B97F4A7C15)
    return state, (_mixed(state) >> np.uint64(11)) * 2.0**-53
