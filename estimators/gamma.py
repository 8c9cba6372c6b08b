"""Autocorrelation of influence series: the variance of their sum, pooled over the repeats of one state.

Gamma method with automatic window: U. Wolff, Comput. Phys. Commun. 156, 143 (2004); erratum 176, 383 (2007).
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy import fft, special

from estimators.errors import BadSeries

__all__ = ["Scatter", "autocovariances", "block_scatter", "coarsened", "scatter"]

Floats = npt.NDArray[np.float64]

WINDOW_FACTOR = 2.0  # S, assumed ratio of the exponential to the integrated autocorrelation time
STEADY_WINDOW = 2.0  # autocorrelation times; 86 % of an exponential lies within, at half the noise of the full window
FIRST_LAGS = 128
BLOCKS = 32


@dataclass(frozen=True)
class Scatter:
    """How far the sum of one state's influences is from its expectation.

    variance : of the sum
    relative_error : standard error of `variance`, as a fraction of it
    skewness : of the sum: third cumulant over variance^(3/2)
    tau : integrated autocorrelation time in samples, 1/2 without correlation
    steady_tau : the same from a window of 2 tau and an exponential beyond: less noisy, blind to slower modes
    window : largest lag that was summed
    samples : over all repeats
    longest : samples of the longest repeat
    """

    variance: float
    relative_error: float
    skewness: float
    tau: float
    steady_tau: float
    window: int
    samples: int
    longest: int

    @property
    def effective_samples(self) -> float:
        """Independent samples that would scatter as much: samples / (2 tau)."""
        return self.samples / (2.0 * self.tau)

    @property
    def steady_samples(self) -> float:
        """The same from `steady_tau`: the better measure of whether a series is long enough."""
        return self.samples / (2.0 * self.steady_tau)


def autocovariances(repeats: Sequence[Floats], n_lags: int) -> Floats:
    """Mean lagged products over all repeats at lags 0 ... n_lags - 1, (n_lags,); nothing is subtracted.

    repeats : each (n_r,), may differ in length; lag t is divided by the number of its pairs, sum of max(n_r - t, 0)
    Computed by FFT over stretches of a few times n_lags, so that short windows cost no transform of the whole series.
    """
    products = np.zeros(n_lags)
    pairs = np.zeros(n_lags)
    lags = np.arange(n_lags)
    for values in repeats:
        products += _lagged_products(values, n_lags)
        pairs += np.maximum(len(values) - lags, 0)
    return products / np.maximum(pairs, 1.0)


def _lagged_products(values: Floats, n_lags: int) -> Floats:
    """Sums over i of values[i] values[i + t], (n_lags,)."""
    size = fft.next_fast_len(min(8 * n_lags, len(values) + n_lags), real=True)
    stretch = size - n_lags + 1
    n_stretches = -(-len(values) // stretch)
    padded = np.zeros(n_stretches * stretch + n_lags - 1)
    padded[: len(values)] = values
    heads = padded[: n_stretches * stretch].reshape(n_stretches, stretch)
    whole = np.lib.stride_tricks.sliding_window_view(padded, size)[::stretch]
    power = np.einsum("sf,sf->f", np.conj(fft.rfft(heads, size)), fft.rfft(whole, size))
    return np.asarray(fft.irfft(power, size)[:n_lags], dtype=float)


def scatter(repeats: Sequence[Floats], *, window: int | None = None) -> Scatter:
    """Scatter of the sum of all entries of one state's influence series, by the Gamma method.

    repeats : each (n_r,), independent of one another; the mean over all repeats is removed
    window : largest lag summed; chosen from the data (S = 2) if None
    A state with fewer than four samples has infinite variance; one whose influences are all equal has none.
    Raises BadSeries if an entry is not finite.
    """
    samples, longest = sum(map(len, repeats)), max(map(len, repeats), default=0)
    if samples < 4:
        tau = 0.5 * max(samples, 1)
        return Scatter(math.inf, math.inf, 0.0, tau, tau, 0, samples, longest)
    centre = sum(float(np.sum(values)) for values in repeats) / samples
    if not math.isfinite(centre):
        raise BadSeries("a series holds entries that are not finite numbers; leave those samples out or repair them")
    centred = [values - centre for values in repeats]
    if sum(float(values @ values) for values in centred) <= samples * (1e-14 * centre) ** 2:
        return Scatter(0.0, 0.0, 0.0, 0.5, 0.5, 0, samples, longest)
    covariances, window = _up_to_window(centred, window, longest // 2 + 1)
    gamma0 = float(covariances[0])
    total = gamma0 + 2.0 * float(np.sum(covariances[1 : window + 1]))
    if total <= 0.0:
        total, window = gamma0, 0
    total *= 1.0 + (2 * window + 1) / samples
    return Scatter(
        variance=samples * total,
        relative_error=2.0 * math.sqrt((window + 0.5) / samples),
        skewness=_skewness(centred, 2 * window + 1),
        tau=0.5 * total / (gamma0 * (1.0 + 1.0 / samples)),
        steady_tau=_steady_tau(covariances[: window + 1] / gamma0, samples),
        window=window,
        samples=samples,
        longest=longest,
    )


def _skewness(centred: Sequence[Floats], length: int) -> float:
    """Of the sum of all entries, from sums over blocks that are nearly independent of one another."""
    sums = _block_sums(centred, length)
    squares = sums * sums
    whole = float(np.sum(squares))
    return float(np.sum(squares * sums)) / whole**1.5 if whole > 0.0 else 0.0


def _steady_tau(correlations: Floats, samples: int) -> float:
    """Autocorrelation time from the first window W >= 2 tau(W); without one in reach from all lags.

    An exponential's share below W is tau(W) = tau (1 - exp(-(W + 1/2) / tau)): Lambert's function gives tau.
    """
    lags = np.arange(len(correlations))
    taus = np.cumsum(correlations) - 0.5
    window = int(np.argmax(np.append(lags[1:] >= STEADY_WINDOW * taus[1:], True))) + 1
    if window == len(correlations):
        return max(float(taus[-1]), 0.5)
    within = max(float(taus[window]) * (1.0 + (2 * window + 1) / samples), 0.25)
    reach = (window + 0.5) / within
    return max(within / (1.0 + float(np.real(special.lambertw(-reach * math.exp(-reach)))) / reach), 0.5)


def _up_to_window(centred: Sequence[Floats], window: int | None, most_lags: int) -> tuple[Floats, int]:
    """Autocovariances far enough to hold the window, and the window."""
    if window is not None:
        return autocovariances(centred, window + 1), window
    n_lags = min(FIRST_LAGS, most_lags)
    while True:
        covariances = autocovariances(centred, n_lags)
        found = _automatic_window(covariances, sum(map(len, centred)))
        if found is not None or n_lags == most_lags:
            return covariances, n_lags - 1 if found is None else found
        n_lags = min(8 * n_lags, most_lags)


def _automatic_window(covariances: Floats, samples: int) -> int | None:
    """First lag at which truncation error and noise balance, if it lies within the lags given."""
    if covariances[0] <= 0.0:
        return 0
    lags = np.arange(1, len(covariances))
    twice_tau = 1.0 + 2.0 * np.cumsum(covariances[1:]) / covariances[0]
    with np.errstate(divide="ignore", invalid="ignore"):
        decay = np.where(twice_tau > 1.0, WINDOW_FACTOR / np.log((twice_tau + 1.0) / (twice_tau - 1.0)), 1e-12)
    balance = np.exp(-lags / decay) - decay / np.sqrt(lags * samples)
    beyond = np.flatnonzero(balance < 0.0)
    return int(lags[beyond[0]]) if len(beyond) else None


def block_scatter(repeats: Sequence[Floats], *, blocks: int = BLOCKS) -> tuple[float, float]:
    """Variance of the sum from block sums, and its standard error as a fraction of it: a cross-check on `scatter`.

    repeats : each (n_r,); cut into about `blocks` equal blocks in all, remainders shorter than one are left out
    Returns (nan, inf) if fewer than four blocks fit.
    """
    samples = sum(map(len, repeats))
    length = max(min(samples // blocks, max(map(len, repeats), default=0)), 1)
    sums = _block_sums(repeats, length)
    if len(sums) < 4:
        return math.nan, math.inf
    return samples / length * float(np.var(sums, ddof=1)), math.sqrt(2.0 / (len(sums) - 1))


def _block_sums(repeats: Sequence[Floats], length: int) -> Floats:
    whole = (values[: len(values) // length * length].reshape(-1, length) for values in repeats)
    return np.concatenate([np.einsum("bi->b", blocks) for blocks in whole])


def coarsened(values: Floats, length: int) -> Floats:
    """Sums over `length` consecutive blocks, as equal as they can be, (length,)."""
    if len(values) == length:
        return values
    starts = np.arange(length) * len(values) // length
    return np.asarray(np.add.reduceat(values, starts), dtype=float)
