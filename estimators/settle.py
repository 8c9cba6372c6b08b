"""When a series has settled: how much of its start to cut, and whether several series tell the same story."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence

import numpy as np
import numpy.typing as npt
from scipy import special, stats

from estimators.errors import BadSeries
from estimators.gamma import scatter

__all__ = ["rank_normalised_split_rhat", "repeats_disagree", "settled_start"]

Floats = npt.NDArray[np.float64]

FALSE_ALARMS = 0.001  # of each of the two comparisons of repeats
HEADS = (0.05, 0.1, 0.2, 0.4)
STRANGE = 2.5  # combined errors
BLOCKS = 50  # long enough each to see slow transients, and the steps in which the cut is placed


def settled_start(values: Floats) -> int:
    """Number of samples to leave out at the start, from the series itself; at most half of it.

    values : (n,), one observable in time
    A series whose first 5, 10, 20 and 40 % have the mean of its second half, within 2.5 combined errors, is settled
    and keeps everything: a cut chosen by the noise would favour quiet stretches, which makes variances and error bars
    too small. Otherwise the cut makes the standard error of the remaining mean smallest, from about 50 block means: a
    transient left in widens their scatter, a cut too late wastes samples. About n // 2 says that half was not enough.
    Fewer than eight samples are not cut. Raises BadSeries if an entry is not finite.
    Marginal standard error rule: K. P. White, Simulation 69, 323 (1997).
    """
    if not np.all(np.isfinite(values)):
        raise BadSeries("a series holds entries that are not finite numbers; leave those samples out or repair them")
    return 0 if _starts_as_it_goes_on(values) else _quietest_rest(values)


def _starts_as_it_goes_on(values: Floats) -> bool:
    rest = values[len(values) // 2 :]
    if len(rest) < 4:
        return True
    mean, spread = float(np.mean(rest)), float(np.var(rest))
    noise = scatter([rest]).variance / len(rest)  # of a sum, per sample
    for head in (values[: max(int(share * len(values)), 1)] for share in HEADS):
        error = math.sqrt(min(noise / len(head), spread) + noise / len(rest))
        if abs(float(np.mean(head)) - mean) > STRANGE * error:
            return False
    return True


def _quietest_rest(values: Floats) -> int:
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
    return max(_spread_ratio(scores) for scores in _scores(chains))


def repeats_disagree(repeats: Sequence[Floats]) -> bool:
    """Whether rank-normalised split R-hat is larger than the correlation of the samples explains.

    repeats : as for `rank_normalised_split_rhat`
    A fixed threshold either misses or cries wolf, depending on the length: under agreement the halves' means scatter by
    2 tau / n of the variance within, and the ratio of both follows Fisher's F, with tau and its degrees of freedom from
    the Gamma method on the same scores about each half's own mean. About one false alarm in 500 in all.
    """
    return any(_beyond_chance(scores) for scores in _scores(repeats))


def _beyond_chance(halves: Sequence[Floats]) -> bool:
    centred = [half - np.mean(half) for half in halves]
    noise = scatter([np.concatenate(pair) for pair in zip(centred[::2], centred[1::2], strict=True)])
    if noise.variance == 0.0:
        return _spread_ratio(halves) > 1.0
    own_means = 1.0 + (2 * noise.window + 1) * (len(halves) - 1) / noise.samples
    expected = own_means * 2.0 * noise.tau * float(np.mean([1.0 / len(half) for half in halves]))
    excess = _spread_ratio(halves) ** 2 - 1.0 + len(halves) / noise.samples
    return bool(excess > expected * special.fdtri(len(halves) - 1, 2.0 / noise.relative_error**2, 1.0 - FALSE_ALARMS))


def _scores(chains: Sequence[Floats]) -> Iterator[list[Floats]]:
    """Normal scores of the values' ranks and of the ranks of their distances from the median, as halves of chains."""
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
    for values in (pooled, np.abs(pooled - np.median(pooled))):
        yield np.split(_normal_scores(values), ends)


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
