"""What the samples of a ladder will share and how far its estimates will scatter, before any are taken.

The energies of a rung are taken as Gaussian, centre N u and variance N T^2 c_v,res: fluids of some hundred particles
are near enough. Sums over the samples of all rungs are then integrals over one energy.
"""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt
from numpy.polynomial import hermite_e

__all__ = ["pooled_variances", "predicted_overlap", "shape"]

Floats = npt.NDArray[np.float64]

_SPREAD = 8.0  # standard deviations
_FINE = 24  # points a standard deviation


def shape(energies: Floats, heat_capacities: Floats, *, temperatures: Floats, particles: int) -> tuple[Floats, Floats]:
    """Centres and widths of the energies of states, each (K,).

    energies, heat_capacities, temperatures : (K,), residual, per particle
    """
    return particles * energies, np.sqrt(particles * np.maximum(heat_capacities, 1e-12)) * temperatures


def predicted_overlap(
    energies: Floats, heat_capacities: Floats, *, temperatures: Floats, particles: int
) -> list[float]:
    """Overlap of neighbouring rungs with equally many samples, (K - 1,), each between 0 and 1/2.

    energies, heat_capacities, temperatures : (K,), residual, per particle
    With p_i the densities of the energies and D their sum, the overlap of i and j is the integral of p_i p_j / D.
    """
    centres, widths = shape(energies, heat_capacities, temperatures=temperatures, particles=particles)
    grid = _grid(centres, widths)
    densities = _densities(grid, centres, widths)
    total = np.maximum(np.sum(densities, axis=0), 1e-300)
    return list(map(float, np.sum(densities[:-1] * densities[1:] / total, axis=1) * (grid[1] - grid[0])))


def pooled_variances(
    rungs: tuple[Floats, Floats], targets: tuple[Floats, Floats], *, times: Floats
) -> tuple[Floats, Floats, Floats]:
    """Variances at target states, reweighted from rungs sampled equally long, times that time, each (M,).

    rungs, targets : centres and widths of their energies, (K,) and (M,)
    times : (J, K), for how long an independent sample must be waited for at each rung (twice the autocorrelation time),
        for Hermite polynomials of the energy of order 1 to J and beyond
    Of the logarithm of the heat capacity; of the mean energy, in squares of its width; of the mean of what has unit
    variance and does not depend on the energy, with the times of order 1.
    To first order, free energies included: a mean whose deviation is h moves with a sample of energy E by
    (h + sum_k a_k p_k) / D, with D = sum p_k, a = M^-1 b, b_k = <p_k, h>, M = 1 - <p, p>, where <f, g> is the integral
    of f g / D (A. Kong, P. McCullagh, X.-L. Meng, D. Nicolae, Z. Tan, J. R. Stat. Soc. B 65, 585 (2003)). That function
    is expanded in Hermite polynomials at every rung, each of which forgets at its own pace.
    """
    grid = _grid(np.concatenate([rungs[0], targets[0]]), np.concatenate([rungs[1], targets[1]]))
    step = float(grid[1] - grid[0])
    densities, wanted = _densities(grid, *rungs), _densities(grid, *targets)
    total = np.maximum(np.sum(densities, axis=0), 1e-300)
    own = (densities / total) @ densities.T * step
    inverse = np.linalg.pinv(np.eye(len(own)) - own, rcond=1e-9, hermitian=True)
    scaled = (grid - rungs[0][:, None]) / rungs[1][:, None]

    def scatter(deviation: Floats) -> Floats:
        pull = (deviation / total) @ densities.T * step @ inverse
        influence = (deviation + pull @ densities) / total
        left = influence**2 @ densities.T * step - (influence @ densities.T * step) ** 2
        variance = np.zeros(len(left))
        for order, waiting in enumerate(times, start=1):
            polynomial = hermite_e.hermeval(scaled, np.eye(order + 1)[order]) / math.sqrt(math.factorial(order))
            share = (influence @ (densities * polynomial).T * step) ** 2
            variance += share @ waiting
            left -= share
        return np.asarray(variance + np.maximum(left, 0.0) @ times[-1])

    z = (grid - targets[0][:, None]) / targets[1][:, None]
    beside = (wanted / total) ** 2 @ densities.T * step @ times[0]
    return scatter(wanted * (z**2 - 1.0)), scatter(wanted * z), np.asarray(beside)


def _grid(centres: Floats, widths: Floats) -> Floats:
    low, high = np.min(centres - _SPREAD * widths), np.max(centres + _SPREAD * widths)
    return np.linspace(low, high, int((high - low) / np.min(widths) * _FINE) + 2)


def _densities(grid: Floats, centres: Floats, widths: Floats) -> Floats:
    """(K, points)"""
    scaled = np.exp(-0.5 * ((grid - centres[:, None]) / widths[:, None]) ** 2)
    return np.asarray(scaled / widths[:, None] / np.sqrt(2.0 * np.pi))
