"""Covariances of the derivatives of a smooth residual Helmholtz energy, before anything was measured.

alpha = A_res/(N T) = rho B2 + rho^2 h(tau, rho), tau = 1/T, has the ideal gas and the second virial coefficient as
exact limits for any smooth h. Of h nothing is taken to be known but that it is a polynomial of second degree and a
Gaussian process, in x = tau/coldest and y = 2 rho/(rho + densest), which gives more room to dilute states, where h
changes faster. Its covariance is a product of one of x and one of y, each a sum of squared exponentials over three
octaves of length: a single one would be too sure that what is smooth on its length is smooth on all. Derivatives of
exp(-d^2/2) are Hermite polynomials, so all covariances are in closed form (C. E. Rasmussen, C. K. I. Williams,
Gaussian Processes for Machine Learning, MIT Press (2006), sections 2.7 and 9.4; from memory).

The octaves' shares, y and the prior of the lengths were chosen among six and six forms by how they interpolate noisy
data made from one Lennard-Jones equation of state, so agreement with that equation is no independent test of them.
Near a critical point (T 1.4, density 0.2 to 0.3) heat capacities in between were off by four to five error bars in
all.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["ORDERS", "Coordinates", "Smoothness", "covariances", "trends"]

Floats = npt.NDArray[np.float64]

ORDERS = ((0, 0), (1, 0), (0, 1), (2, 0), (1, 1), (0, 2))
"""(m, n) of A_mn = tau^m rho^n d^(m+n) alpha / d tau^m d rho^n, as they stand in every array of six."""
TRENDS = ORDERS  # powers of x and y that no prior holds back: second degree too
OCTAVES = {1.0: 1.0, 0.5: 0.1, 0.25: 0.01}  # share of the variance by length; not quite as rough as nature gets


@dataclass(frozen=True)
class Smoothness:
    """How h varies: standard deviation about its trend, and the longest lengths over which it does in x and y."""

    scatter: float
    thermal_length: float
    dense_length: float


@dataclass(frozen=True)
class Coordinates:
    """x = tau/coldest, counted from `middle`, and y = 2 rho/(rho + densest)."""

    coldest: float
    middle: float
    densest: float

    @classmethod
    def over(cls, points: Floats) -> Coordinates:
        """Suited to points (P, 2) of tau and rho."""
        tau, rho = points.T
        return cls(float(tau.max()), 0.5 * float(tau.min() / tau.max() + 1.0), float(rho.max()))

    def of(self, points: Floats) -> Floats:
        """(P, 2), x and y of points (P, 2) of tau and rho."""
        tau, rho = points.T
        return np.stack([tau / self.coldest - self.middle, 2.0 * rho / (rho + self.densest)], axis=1)

    def raised(self, points: Floats) -> Floats:
        """(P, 6, 6), from derivatives of h in x and y to the A_mn of rho^2 h, both in the order of ORDERS.

        points : (P, 2), tau and rho
        """
        tau, rho = points.T
        x = tau / self.coldest
        slope = 2.0 * rho * self.densest / (rho + self.densest) ** 2  # rho dy/d rho
        bend = -2.0 * rho / (rho + self.densest) * slope  # rho^2 d^2 y/d rho^2
        square = rho**2
        matrix = np.zeros((len(points), 6, 6))
        matrix[:, 0, 0] = square
        matrix[:, 1, 1] = square * x
        matrix[:, 2, 0], matrix[:, 2, 2] = 2.0 * square, square * slope
        matrix[:, 3, 3] = square * x**2
        matrix[:, 4, 1], matrix[:, 4, 4] = 2.0 * square * x, square * x * slope
        matrix[:, 5, 0], matrix[:, 5, 2] = 2.0 * square, square * (4.0 * slope + bend)
        matrix[:, 5, 5] = square * slope**2
        return matrix


def covariances(first: Floats, second: Floats, coordinates: Coordinates, smoothness: Smoothness) -> Floats:
    """(6 P, 6 Q), of the A_mn at points `first` (P, 2) with those at `second` (Q, 2), without the trend."""
    differences = coordinates.of(first)[:, None] - coordinates.of(second)
    thermal = _bells(differences[:, :, 0], smoothness.thermal_length)
    dense = _bells(differences[:, :, 1], smoothness.dense_length)
    found = np.empty((len(first), len(second), 6, 6))
    for row, (i, j) in enumerate(ORDERS):
        for column, (k, m) in enumerate(ORDERS):
            found[:, :, row, column] = (-1.0) ** (i + j) * thermal[i + k] * dense[j + m]
    right = np.swapaxes(coordinates.raised(second), 1, 2)
    raised = smoothness.scatter**2 * (coordinates.raised(first)[:, None] @ found @ right)
    return np.asarray(raised.transpose(0, 2, 1, 3).reshape(6 * len(first), 6 * len(second)))


def _bells(distance: Floats, longest: float) -> list[Floats]:
    """(-1)^n times the n-th derivative of the sum of exp(-d^2/2) over all octaves, n up to 4; 1 at no distance."""
    found = [np.zeros_like(distance) for _ in range(5)]
    for factor, share in OCTAVES.items():
        length = factor * longest
        d, square = distance / length, (distance / length) ** 2
        hermite = [np.ones_like(d), d, square - 1.0, d * (square - 3.0), square**2 - 6.0 * square + 3.0]
        bell = share / sum(OCTAVES.values()) * np.exp(-0.5 * square)
        for n, polynomial in enumerate(hermite):
            found[n] += polynomial * bell / length**n
    return found


def trends(points: Floats, coordinates: Coordinates) -> Floats:
    """(6 P, 6), the A_mn of rho^2 times each monomial in x and y, at points (P, 2)."""
    x, y = coordinates.of(points).T
    values = np.empty((len(points), 6, len(TRENDS)))
    for row, (i, j) in enumerate(ORDERS):
        for column, (p, q) in enumerate(TRENDS):
            values[:, row, column] = _power(x, p, i) * _power(y, q, j)
    return np.asarray((coordinates.raised(points) @ values).reshape(6 * len(points), len(TRENDS)))


def _power(value: Floats, power: int, derivative: int) -> Floats:
    """Derivative of value^power."""
    factor = float(np.prod(np.arange(power - derivative + 1, power + 1))) if derivative <= power else 0.0
    return np.asarray(factor * value ** max(power - derivative, 0))
