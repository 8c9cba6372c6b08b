"""The mixture of several canonical ensembles that their pooled samples are drawn from.

In ensemble k a sample has the reduced potential u_k = s_k . x, with d features x of the sample and d slopes s_k of the
ensemble: at one density the energy and 1/T. Of ensembles with N_k samples each, a sample has the density
D = sum_k N_k exp(f_k - u_k), and p_k = N_k exp(f_k - u_k) / D is the share of it that ensemble k claims. The f_k (the
Helmholtz energy over T, up to one constant) are those for which every ensemble claims as many samples as it has:
M. R. Shirts and J. D. Chodera, J. Chem. Phys. 129, 124105 (2008); of two ensembles: C. H. Bennett, J. Comput. Phys. 22,
245 (1976).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.optimize import brentq
from scipy.special import expit

__all__ = ["Mixture", "bennett", "polished"]

Floats = npt.NDArray[np.float64]

CHUNK = 2**14  # samples worked on at once: the matrices of a chunk stay in cache
STEPS = 30
SOLVED = 1e-9  # last Newton step; what remains after it is of the order of its square
FAR = 50.0  # exp(-FAR) is nothing


@dataclass(frozen=True)
class Mixture:
    """Ensembles of slopes (K, d) with `counts` (K,) samples and free energies (K,), the first one 0.

    response : (K, K), inverse of diag(counts) - sum p p^T with the first row and column zero: how far the free energies
    move when claims do
    overlap : (K, K), sum p_i p_j / N_i: chance that a sample of i might as well be one of j; rows sum to 1
    """

    slopes: Floats
    counts: Floats
    free_energies: Floats
    response: Floats
    overlap: Floats

    def claims(self, features: Floats) -> tuple[Floats, Floats]:
        """Shares p, (K, n), and log D, (n,), of samples with the features (d, n)."""
        return _claims(self.slopes, np.log(self.counts) + self.free_energies, features)


def _claims(slopes: Floats, offsets: Floats, features: Floats) -> tuple[Floats, Floats]:
    exponents = offsets[:, None] - slopes @ features
    top = np.max(exponents, axis=0)
    exponents -= top
    shares = np.exp(exponents, out=exponents)
    total = np.sum(shares, axis=0)
    shares /= total
    return shares, top + np.log(total)


def polished(slopes: Floats, counts: Floats, start: Floats, features: Sequence[Floats]) -> Mixture | None:
    """The mixture whose free energies solve the equations on all samples, by Newton steps from a good start.

    start : (K,), free energies, good to about 1
    features : each (d, n), all samples of all ensembles
    None when the steps do not die out.
    """
    free_energies = start - start[0]
    for _ in range(STEPS):
        claimed, products = _claim_sums(slopes, np.log(counts) + free_energies, features)
        step = np.zeros(len(counts))
        try:
            step[1:] = np.linalg.solve((np.diag(claimed) - products)[1:, 1:], (counts - claimed)[1:])
        except np.linalg.LinAlgError:
            break
        if not np.all(np.isfinite(step)):
            break
        largest = float(np.max(np.abs(step), initial=0.0))
        free_energies = free_energies + step / max(largest, 1.0)
        if largest < SOLVED:
            response = np.zeros_like(products)
            response[1:, 1:] = np.linalg.inv((np.diag(counts) - products)[1:, 1:])
            return Mixture(slopes, counts, free_energies, response, products / counts[:, None])
    return None


def _claim_sums(slopes: Floats, offsets: Floats, features: Sequence[Floats]) -> tuple[Floats, Floats]:
    """Sums over all samples of p, (K,), and of p p^T, (K, K)."""
    claimed, products = np.zeros(len(slopes)), np.zeros((len(slopes), len(slopes)))
    for series in features:
        for start in range(0, series.shape[1], CHUNK):
            shares, _ = _claims(slopes, offsets, series[:, start : start + CHUNK])
            claimed += np.sum(shares, axis=1)
            products += shares @ shares.T
    return claimed, products


def bennett(first: Floats, second: Floats) -> tuple[float, Floats, Floats]:
    """Free energy of a second ensemble less that of a first, and how evenly both claim each sample.

    first, second : (n,), (m,), the second's reduced potential less the first's, of samples of the first and the second
    Returns the difference and 4 p_1 p_2 of the samples of the first (n,) and of the second (m,): 1 where both claim a
    sample alike, 0 where only one does.
    """
    works = np.concatenate([first, second]) + np.log(len(first) / len(second))
    unclaimed = lambda difference: float(np.sum(expit(difference - works))) - len(second)  # noqa: E731
    difference = brentq(unclaimed, np.min(works) - FAR, np.max(works) + FAR, xtol=1e-6)
    shares = expit(difference - works)
    evenness = 4.0 * shares * (1.0 - shares)
    return float(difference), evenness[: len(first)], evenness[len(first) :]
