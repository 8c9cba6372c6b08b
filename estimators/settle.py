"""When a series has settled: how much of its start to cut, and whether several series tell the same story."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import numpy.typing as npt
from scipy import special, stats

from estimators.errors import BadSeries

__all__ = ["rank_normalised_split_rhat", "settled_start"]

Floats = npt.NDArray[np.float64]

BLOCKS = 50  # long enough each to see slow transients, and the steps in which the cut is placed


def settled_start(values: Floats) -> int:
    """Number of samples to leave out at the start, from the series itself; at most half of it.

    values : (n,), one observable in time
    The cut that makes the standard error of the remaining mean smallest, from about 50 block means: a transient left in
    widens their scatter, a cut too late wastes samples. About n // 2 says that half was not enough; a settled series
    gives 0 in most cases. Fewer than eight samples are not cut. Raises BadSeries if an entry is not finite.
    Marginal standard error rule: K. P. White, Simulation 69, 323 (1997).
    """
    if not np.all(np.isfinite(values)):
        raise BadSeries("a series holds entries that are not finite numbers; leave those samples out or repair them")
    grain = max(len(values) // BLOCKS, 1)
    means = values[: len(values) // grain * grain].reshape(-1, grain).mean(axis=1)
    if len(means) < 8:
        return 0
    backward = means[::-1] - means[-1]
    left = np.arange(1, len(means) + 1)
    squares = np.cumsum(backward**2) - np.cumsum(backward) ** 2 / left
    squared_errors = (squares / left**2)[::-1][: len(means) // 2 + 1]
    return int(np.argmin(squared_errors)) * grain


def rank_normalised_split_rhat(chains: Sequence[Floats]) -> float:
    """How much wider the pooled series spread than each alone, 1 when they agree; above 1.01 they do not.

    chains : one or more, each (n_r,) with at least four samples; may differ in length
    The larger of R-hat on rank-normalised values (location) and on their folded distances from the median (scale), each
    series split into halves: A. Vehtari, A. Gelman, D. Simpson, B. Carpenter, P.-C. Buerkner, Bayesian Anal. 16, 667
    (2021). Raises BadSeries when a series is too short or holds entries that are not finite.
    """
    halves = []
    for chain in chains:
        half = len(chain) // 2
        if half < 2:
            raise BadSeries(f"a series needs at least 4 samples to be split in halves, found {len(chain)}")
        halves += [chain[:half], chain[-half:]]
    pooled = np.concatenate(halves) if halves else np.empty(0)
    if not len(pooled) or not np.all(np.isfinite(pooled)):
        raise BadSeries("series to compare must hold finite numbers only, and be at least one")
    ends = np.cumsum([len(half) for half in halves])[:-1]
    folded = np.abs(pooled - np.median(pooled))
    return max(_spread_ratio(np.split(_normal_scores(values), ends)) for values in (pooled, folded))


def _normal_scores(values: Floats) -> Floats:
    ranks = stats.rankdata(values)
    return np.asarray(special.ndtri((ranks - 0.375) / (len(values) + 0.25)), dtype=float)


def _spread_ratio(chains: Sequence[Floats]) -> float:
    length = float(np.mean([len(chain) for chain in chains]))
    within = float(np.mean([np.var(chain, ddof=1) for chain in chains]))
    between = float(np.var([np.mean(chain) for chain in chains], ddof=1))
    if within == 0.0:
        return 1.0 if between == 0.0 else math.inf
    return math.sqrt((length - 1.0) / length + between / within)
