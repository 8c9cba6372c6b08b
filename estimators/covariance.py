"""Covariance of observables recorded together, and of the errors of estimates."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

import numpy as np
import numpy.typing as npt

from estimators.estimate import Chain, Estimate, State, centred
from estimators.gamma import coarsened

__all__ = ["covariance", "covariance_matrix"]

Floats = npt.NDArray[np.float64]

FEWEST_BLOCKS = 16


def covariance(first: Mapping[Chain, Floats], second: Mapping[Chain, Floats]) -> Estimate:
    """Covariance of two observables recorded on the same samples, free of the bias that their sample means cause.

    first, second : chain -> (n_chain,), equal chains and lengths
    Deviations from sample means lack the covariance of these means, 2 tau / samples of the whole; the Gamma method
    knows it and it is added back. Raises BadSeries as `mean` does.
    """
    _, a = centred(first)
    _, b = centred(second)
    samples = sum(map(len, a.values()))
    products = {chain: a[chain] * b[chain] for chain in a}
    biased = sum(float(np.sum(values)) for values in products.values()) / samples
    influence = {chain: (values - biased) / samples for chain, values in products.items()}
    shared, underlying = _covariance_of_means(a, b, samples)
    return Estimate(biased + shared, influence, "fluctuation", underlying)


def _covariance_of_means(
    a: Mapping[Chain, Floats], b: Mapping[Chain, Floats], samples: int
) -> tuple[float, dict[State, float]]:
    """Covariance of the means of deviations a and b, and the effective samples of each state behind these means.

    By polarisation of the variances of sum and difference, each observable in its own standard deviation.
    """
    widths = [math.sqrt(sum(float(np.sum(v**2)) for v in each.values()) / samples) for each in (a, b)]
    if min(widths) == 0.0:
        return 0.0, {}
    both = [
        Estimate(0.0, {chain: a[chain] / widths[0] + sign * b[chain] / widths[1] for chain in a})
        for sign in (1.0, -1.0)
    ]
    underlying: dict[State, float] = {}
    for each in both:
        for state, scatter in each.scatters.items():
            if scatter.variance > 0.0:
                underlying[state] = min(scatter.steady_samples, underlying.get(state, math.inf))
    first, second = (each.variance for each in both)
    if not math.isfinite(first + second):
        return 0.0, underlying
    return 0.25 * (first - second) * widths[0] * widths[1] / samples**2, underlying


def covariance_matrix(estimates: Sequence[Estimate]) -> Floats:
    """Covariance of the errors of several estimates, (n, n), positive semidefinite.

    Diagonal: squared standard errors. Correlations: from block sums over blocks twice the longest window (but at
    least 16 blocks a chain), as the Gamma method alone need not give a positive matrix. What no sample carries is
    independent of everything else.
    """
    errors = np.array([estimate.standard_error for estimate in estimates])
    chains = sorted({chain for estimate in estimates for chain in estimate.influence})
    rows: list[Floats] = [np.zeros((len(estimates), 0))]
    for chain in chains:
        carriers = [estimate for estimate in estimates if chain in estimate.influence]
        lengths = [len(estimate.influence[chain]) for estimate in carriers]
        blocks = min(
            max(length // (2 * estimate.scatters[chain[:3]].window + 1), min(FEWEST_BLOCKS, length))
            for estimate, length in zip(carriers, lengths, strict=True)
        )
        zero = np.zeros(blocks)
        rows.append(
            np.array([coarsened(e.influence[chain], blocks) if chain in e.influence else zero for e in estimates])
        )
    sums = np.concatenate(rows, axis=1)
    norms = np.sqrt(np.sum(sums**2, axis=1))
    unit = sums / np.where(norms > 0.0, norms, 1.0)[:, None]
    correlations = unit @ unit.T
    carried = np.sqrt([_carried(estimate) for estimate in estimates])
    correlations *= np.outer(carried, carried)
    np.fill_diagonal(correlations, 1.0)
    return np.asarray(errors[:, None] * correlations * errors, dtype=float)


def _carried(estimate: Estimate) -> float:
    """Share of the variance that samples carry."""
    return 1.0 - estimate.unsampled / estimate.variance if estimate.unsampled else 1.0
