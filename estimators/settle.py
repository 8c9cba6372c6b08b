"""When a series has settled: how much of its start to cut, and whether several series tell the same story."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import numpy.typing as npt
from scipy import special, stats

from estimators.errors import BadSeries
from estimators.gamma import scatter

__all__ = ["rank_normalised_split_rhat", "settled_start"]

Floats = npt.NDArray[np.float64]

GRAIN = 4096  # block means that a long series is condensed to
CUTS = 40
SLACK = 1.05  # a cut must lower the standard error by more than this factor of noise to be worth its samples


def settled_start(values: Floats) -> int:
    """Number of samples to leave out at the start, from the series itself; at most half of it.

    values : (n,), one observable in time
    Among candidate cuts, finely spaced at the start, the mean of what remains has its smallest standard error
    (autocorrelation included): a transient left in adds variance and correlation, a cut too late wastes samples. Of all
    cuts within 5 % of that smallest error the earliest is taken. A result of n // 2 says that half was not enough.
    Raises BadSeries if an entry is not finite. The marginal standard error rule (K. P. White, Simulation 69, 323
    (1997)) with the error of correlated samples in place of that of independent ones.
    """
    grain = max(len(values) // GRAIN, 1)
    means = values[: len(values) // grain * grain].reshape(-1, grain).mean(axis=1)
    half = len(means) // 2
    if half < 4:
        return 0
    cuts = np.unique(
        np.concatenate([[0], np.geomspace(1, half, CUTS).astype(int), np.linspace(0, half, 21).astype(int)])
    )
    errors = np.array([math.sqrt(scatter([means[cut:]]).variance) / (len(means) - cut) for cut in cuts])
    first = int(np.flatnonzero(errors <= SLACK * errors.min())[0])
    return min(int(cuts[first]) * grain, len(values) // 2)


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
