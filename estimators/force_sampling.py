"""g(r) of stored frames from the forces on their particles, at exact distances: no bin has a width in it.

The gradient of a pair density is the mean force of its pairs over T: with n = 4 pi N (N - 1) / V, averaged over
directions, n r^2 g'(r) = sum over ordered pairs of < (F_j - F_i).r_ij / (2 T r_ij) delta(r - r_ij) >, exactly, in a
periodic cube up to half its edge and for any number of particles. Summed outwards from the core, where g = 0,
    n g(r) = < sum f H(r - s) / s^2 >,  f = (F_j - F_i).r_ij / (2 T s),  s = r_ij
(D. Borgis, R. Assaraf, B. Rotenberg, R. Vuilleumier, Mol. Phys. 111, 3486 (2013); from memory). Summed in from a far
point g needs its value there; the mean of g over a shell a < s < b, which is counted, will do, wherever r lies:
    n g(r) = < sum [3 + f (s - a^3/s^2)] / (b^3 - a^3) - sum f H(s - r) / s^2 >,  sums over pairs in the shell, s > r
    in the last one (partial integration of the mean).
The estimators differ by quantities of mean zero only, so that their combination of least variance is free of bias.
A wide shell counts many pairs, a narrow one has little noise of forces.
"""

from __future__ import annotations

import math
import os
from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from estimators.compiled import kernel
from estimators.estimate import Chain, mean
from sampler.fluid import State
from sampler.series import Series

__all__ = ["Forced", "force_sampling"]

Floats = npt.NDArray[np.float64]
Forces = Callable[[Floats], Floats]

HALF_WIDTHS = (0.05, 0.15, 0.45)  # sigma, of shells around r; another one is the ball of all distances
FEWEST_PAIRS = 200  # seen in all, for an estimator to have a share
FEWEST_FRAMES = 40  # ten for each coefficient of a combination
MOST_PAIRS = 4e8  # of all frames together: about a second
BLOCK = 512  # pairs of one particle that are looked at once


@dataclass(frozen=True, eq=False)
class Forced:
    """Pair distribution at exact distances.

    r : (n,), sigma
    g : (n,), normalised as that of counted pairs: N - 1 neighbours in the box
    standard_error : (n,), of g
    """

    r: Floats
    g: Floats
    standard_error: Floats


def force_sampling(
    series: Sequence[Series], forces: Forces, *, width: float, number: int, core: bool = True
) -> Forced | None:
    """g in the middle of `number` bins from 0 on, all within half the box, from the repeats of one rung.

    forces : of one configuration, (N, 3) -> (N, 3), of the ensemble that was drawn; called from several threads
    core : whether particles cannot meet, so that g(0) = 0
    None without a bath, as the temperature of the positions is not set then, and for fewer than 40 frames. Where there
    are more frames than needed for pairs in plenty, they are taken at equal intervals.
    """
    state, frames = series[0].state, sum(len(each.frames) for each in series)
    if not series[0].bath or frames < FEWEST_FRAMES:
        return None
    pairs = 0.5 * state.particles * (state.particles - 1)
    stride = max(min(math.ceil(pairs * frames / MOST_PAIRS), frames // FEWEST_FRAMES), 1)
    thinned = {each.chain: each.frames[stride - 1 :: stride] for each in series}
    step = 0.5 * width
    sums = {chain: _cumulated(some, forces, state, step, 2 * number) for chain, some in thinned.items() if len(some)}
    seen = sum((np.sum(each[:, 0], axis=0) for each in sums.values()), np.zeros(2 * number + 1))
    per_pair = state.volume / (2.0 * np.pi * state.particles * (state.particles - 1))
    for each in sums.values():
        each *= per_pair * np.array([[3.0], [0.5 / state.temperature], [0.5 / state.temperature]])
    middles = range(1, 2 * number, 2)
    g, error = np.array([_combined(_estimators(sums, seen, middle, step, core)) for middle in middles]).T
    return Forced(step * np.array(middles, dtype=float), g, error)


def _cumulated(frames: Floats, forces: Forces, state: State, step: float, number: int) -> Floats:
    """Of each frame up to each multiple of the step: sums that `_add_pulls` makes, (m, 3, number + 1)."""
    sums = np.zeros((len(frames), 3, number + 1))

    def add(some: npt.NDArray[np.int_]) -> None:
        for frame in some:
            found = np.zeros((number + 1, 3))
            _add_pulls(frames[frame], forces(frames[frame]), state.box, 1.0 / step, found)
            sums[frame, :, 1:] = np.cumsum(found[:number], axis=0).T

    workers = os.cpu_count() or 1
    with ThreadPoolExecutor(workers) as threads:
        list(threads.map(add, np.array_split(np.arange(len(frames)), workers)))
    return sums


def _estimators(sums: Mapping[Chain, Floats], seen: Floats, at: int, step: float, core: bool) -> dict[Chain, Floats]:
    """What each frame says of g(at * step) by each estimator, (m, estimators), the first of which always holds.

    sums : of 3/n, f/(n s^2) and f s/n
    seen : pairs in all frames up to each multiple of the step; a variance from few of them is low where g seems low
    """
    number = len(seen) - 1
    reach = sorted({max(round(half / step), 1) for half in HALF_WIDTHS}, reverse=True)
    shells = [(max(at - each, 0), min(at + each, number)) for each in reach]
    shells = [(0, number), *(shell for shell in shells if seen[shell[1]] - seen[shell[0]] >= FEWEST_PAIRS)]
    if core and seen[at] < FEWEST_PAIRS:
        shells = []
    return {
        chain: np.stack(
            [each[:, 1, at]] * core + [_from_shell(each, at, start, end, step) for start, end in shells], axis=1
        )
        for chain, each in sums.items()
    }


def _from_shell(sums: Floats, at: int, start: int, end: int, step: float) -> Floats:
    inner, outer = (start * step) ** 3, (end * step) ** 3
    pairs, near, far = (sums[:, :, end] - sums[:, :, start]).T
    beyond = sums[:, 1, end] - sums[:, 1, at]
    return np.asarray((pairs + far - inner * near) / (outer - inner) - beyond, dtype=float)


def _combined(estimators: Mapping[Chain, Floats]) -> tuple[float, float]:
    """Value and standard error of the combination of least variance."""
    together = np.concatenate(list(estimators.values()))
    first, others = together[:, :1], together[:, 1:] - together[:, :1]
    others = others - np.mean(others, axis=0)
    size = np.sqrt(np.mean(others**2, axis=0))
    others /= np.where(size > 0.0, size, 1.0)
    shares = -np.linalg.lstsq(others, first[:, 0] - np.mean(first), rcond=1e-6)[0] / np.where(size > 0.0, size, 1.0)
    weights = np.append(1.0 - np.sum(shares), shares)
    estimate = mean({chain: each @ weights for chain, each in estimators.items()})
    fitted = np.sqrt(len(together) / (len(together) - len(shares)))
    return estimate.value, estimate.standard_error * fitted


@kernel
def _add_pulls(where, force, box, per_width, sums):  # type: ignore[no-untyped-def]
    """Adds 1, (F_j - F_i).r_ij / s^3 and (F_j - F_i).r_ij of every pair to its bin, (bins, 3), if too far to the last.

    Positions on a grid of 2^32 points along each edge: they and their differences wrap around as integers do.
    """
    n = where.shape[0]
    grid, pull = np.empty((3, n), np.int32), np.empty((3, n))
    for i in range(n):
        for k in range(3):
            grid[k, i] = np.int32(np.int64(where[i, k] * (2.0**32 / box)))
            pull[k, i] = force[i, k]
    x, y, z = grid[0], grid[1], grid[2]
    fx, fy, fz = pull[0], pull[1], pull[2]
    places, steep, flat = np.empty(BLOCK, np.int32), np.empty(BLOCK), np.empty(BLOCK)
    last = np.int32(len(sums) - 1)
    for i in range(n - 1):
        for first in range(i + 1, n, BLOCK):
            some = slice(first, min(first + BLOCK, n))
            found = places[: some.stop - first]
            _pull(
                (x[some], y[some], z[some], fx[some], fy[some], fz[some]),
                (x[i], y[i], z[i], fx[i], fy[i], fz[i]),
                box / 2.0**32, per_width, last, found, steep, flat,
            )  # fmt: skip
            for j in range(found.size):
                place = sums[found[j]]
                place[0] += 1.0
                place[1] += steep[j]
                place[2] += flat[j]


@kernel
def _pull(others, one, tick, per_width, last, places, steep, flat):  # type: ignore[no-untyped-def]
    """Bin of each pair and what it adds there; slices that start at zero and no branches let it be vectorised."""
    x, y, z, fx, fy, fz = others
    x0, y0, z0, fx0, fy0, fz0 = one
    for j in range(places.size):
        dx = tick * np.float64(np.int32(x[j] - x0))
        dy = tick * np.float64(np.int32(y[j] - y0))
        dz = tick * np.float64(np.int32(z[j] - z0))
        along = (fx[j] - fx0) * dx + (fy[j] - fy0) * dy + (fz[j] - fz0) * dz
        square = dx * dx + dy * dy + dz * dz
        r = np.sqrt(square)
        places[j] = min(np.int32(r * per_width), last)
        steep[j] = along / (square * r)
        flat[j] = along
