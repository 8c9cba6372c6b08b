"""Regression of derivatives of a smooth Helmholtz energy on what was measured of them, errors correlated.

Weights are those of the best linear unbiased prediction with a trend of unknown coefficients (universal kriging: N.
Cressie, Statistics for Spatial Data, Wiley (1993), section 3.4; from memory); the smoothness comes from the restricted
likelihood of the data and a broad prior. What stays unknown of it goes into the error: predictions are averaged over
six nodes that have the mean and the covariance of its distribution.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
from scipy import linalg, optimize

from estimators.errors import NotSolved
from estimators.surface.kernel import Coordinates, Smoothness, covariances, trends

__all__ = ["Data", "Prediction", "Regression", "regression"]

Floats = npt.NDArray[np.float64]

JITTER = 1e-10  # of the variance of each observation, against rounding
CENTRE, SPREAD = np.log([1.0, 0.8, 0.8]), np.array([2.0, 0.5, 0.5])
"""Prior of the logarithms of scatter and lengths: normal, by mean and standard deviation."""
STARTS = (np.array([0.0, 0.0, 0.0]), np.array([-2.0, -0.7, -0.7]))  # from the centre
REACH = 6.0  # standard deviations of the prior
STEP = 0.05  # for second derivatives of the cost
LEAST_CURVATURE = 0.5  # the prior alone has 1/4 and more
DETERMINED = 1e-12  # of the largest eigenvalue


@dataclass(frozen=True, eq=False)
class Data:
    """What was measured: linear in the A_mn of rho^2 h.

    points : (P, 2), tau and rho
    rows : (n, 6 P), of which combination each entry is a measurement
    values : (n,), without what is known exactly
    noise : (n, n), covariance of their errors
    """

    points: Floats
    rows: Floats
    values: Floats
    noise: Floats

    @cached_property
    def scales(self) -> Floats:
        """(n,), standard errors."""
        return np.sqrt(np.diag(self.noise))

    @cached_property
    def coordinates(self) -> Coordinates:
        return Coordinates.over(self.points)

    @cached_property
    def trend(self) -> Floats:
        """(n, trends), in units of the standard errors."""
        return self.scaled_rows @ trends(self.points, self.coordinates)

    @cached_property
    def scaled_rows(self) -> Floats:
        return self.rows / self.scales[:, None]

    @cached_property
    def scaled_values(self) -> Floats:
        return self.values / self.scales

    @cached_property
    def correlations(self) -> Floats:
        """(n, n), of the errors."""
        return self.noise / np.outer(self.scales, self.scales)


@dataclass(frozen=True, eq=False)
class Prediction:
    """A_mn of rho^2 h at one point.

    weights : (6, n), times the values that were measured
    covariance : (6, 6), of all the errors of the prediction
    """

    values: Floats
    weights: Floats
    covariance: Floats


class _Solved:
    """The equations at one smoothness, in units of the standard errors."""

    def __init__(self, data: Data, smoothness: Smoothness) -> None:
        """Raises LinAlgError where the covariance is not positive."""
        self.data, self.smoothness = data, smoothness
        self.prior = data.scaled_rows @ self._covariances(data.points, data.points) @ data.scaled_rows.T
        whole = self.prior + data.correlations
        whole[np.diag_indices_from(whole)] *= 1.0 + JITTER
        self.root = linalg.cholesky(whole, lower=True)
        self.q, self.r = np.linalg.qr(self._whitened(data.trend))
        self.values = self._whitened(data.scaled_values)
        self.left = self._without_trend(self.values)

    def _covariances(self, first: Floats, second: Floats) -> Floats:
        return covariances(first, second, self.data.coordinates, self.smoothness)

    def _whitened(self, values: Floats) -> Floats:
        return np.asarray(linalg.solve_triangular(self.root, values, lower=True, check_finite=False))

    def _without_trend(self, values: Floats) -> Floats:
        return values - self.q @ (self.q.T @ values)

    @property
    def cost(self) -> float:
        """Negative logarithm of the restricted likelihood, but for a constant."""
        logs = np.sum(np.log(np.diag(self.root))) + np.sum(np.log(np.abs(np.diag(self.r))))
        return float(0.5 * self.left @ self.left + logs)

    @cached_property
    def _coefficients(self) -> tuple[Floats, Floats]:
        """Of the covariances with the measurements, (n,), and of the trend."""
        scattered = linalg.solve_triangular(self.root, self.left, lower=True, trans="T")
        return scattered, linalg.solve_triangular(self.r, self.q.T @ self.values)

    def expected(self, points: Floats) -> Floats:
        """Values at points (Q, 2): (Q, 6)."""
        scattered, trend = self._coefficients
        found = self._covariances(points, self.data.points) @ (self.data.scaled_rows.T @ scattered)
        found += trends(points, self.data.coordinates) @ trend
        return np.asarray(found.reshape(-1, 6))

    def predict(self, point: Floats) -> Prediction:
        """At tau and rho (2,)."""
        data, there = self.data, point[None]
        shared, own = self._covariances(there, data.points) @ data.scaled_rows.T, self._covariances(there, there)
        half = self._whitened(shared.T)
        trend = linalg.solve_triangular(self.r, trends(there, data.coordinates).T, trans="T") - self.q.T @ half
        weights = linalg.solve_triangular(self.root, half + self.q @ trend, lower=True, trans="T").T
        missed = own - weights @ shared.T - shared @ weights.T + weights @ self.prior @ weights.T
        covariance = missed + weights @ data.correlations @ weights.T
        return Prediction(weights @ data.scaled_values, weights / data.scales, covariance)

    def left_out(self, entries: npt.NDArray[np.int_]) -> tuple[Floats, Floats]:
        """Deviations of these entries from what all others predict, (k,), and their covariance (k, k), noise included.

        Both follow from the block of these entries of the inverse covariance (O. Dubrule, Math. Geol. 15, 687 (1983)).
        """
        unit = np.zeros((len(self.root), len(entries)))
        unit[entries, np.arange(len(entries))] = 1.0
        columns = self._without_trend(self._whitened(unit))
        eigenvalues, vectors = np.linalg.eigh(columns.T @ columns)
        inverse = vectors / np.maximum(eigenvalues, DETERMINED * eigenvalues[-1]) @ vectors.T
        scales = self.data.scales[entries]
        return scales * (inverse @ (columns.T @ self.left)), scales[:, None] * inverse * scales


@dataclass(frozen=True, eq=False)
class Regression:
    """Predictions averaged over what the smoothness may be; build it with `regression`.

    smoothness : the likeliest
    """

    data: Data
    smoothness: Smoothness
    _nodes: list[tuple[float, _Solved]]

    def predict(self, point: Floats) -> Prediction:
        """At tau and rho (2,)."""
        shares, found = [share for share, _ in self._nodes], [node.predict(point) for _, node in self._nodes]
        weights = np.tensordot(shares, [each.weights for each in found], axes=1)
        values, covariance = _averaged(shares, [(each.values, each.covariance) for each in found])
        return Prediction(values, weights, covariance)

    def expected(self, points: Floats) -> Floats:
        """A_mn of rho^2 h at points (Q, 2) of tau and rho, without errors: (Q, 6)."""
        return np.asarray(sum(share * node.expected(points) for share, node in self._nodes))

    def left_out(self, entries: npt.NDArray[np.int_]) -> tuple[Floats, Floats]:
        """Deviations of these entries of the data from what the others predict, and their covariance, all errors in."""
        return _averaged([share for share, _ in self._nodes], [node.left_out(entries) for _, node in self._nodes])


def _averaged(shares: list[float], found: list[tuple[Floats, Floats]]) -> tuple[Floats, Floats]:
    """Mean and covariance of a mixture of distributions with these means and covariances."""
    mean = np.tensordot(shares, [each for each, _ in found], axes=1)
    spread = [covariance + np.outer(each - mean, each - mean) for each, covariance in found]
    return np.asarray(mean), np.asarray(np.tensordot(shares, spread, axes=1))


def regression(data: Data) -> Regression:
    """Finds the smoothness and solves. Raises NotSolved if there is none for which the equations can be solved."""

    def solved(logs: Floats) -> _Solved:
        return _Solved(data, Smoothness(*map(float, np.exp(logs))))

    def cost(logs: Floats) -> float:
        deviations = (logs - CENTRE) / SPREAD
        try:
            return solved(logs).cost + 0.5 * float(deviations @ deviations)
        except linalg.LinAlgError:
            return 1e6 * (1.0 + float(deviations @ deviations))

    reach = REACH * SPREAD
    bounds = [(float(low), float(high)) for low, high in zip(CENTRE - reach, CENTRE + reach, strict=True)]
    tries = [
        optimize.minimize(cost, CENTRE + start, method="L-BFGS-B", bounds=bounds, options={"ftol": 1e-4})
        for start in STARTS
    ]
    best = min(tries, key=lambda each: float(each.fun))
    nodes = [(math.exp(best.fun - cost(logs)), logs) for logs in _nodes(cost, best.x)]
    try:
        whole = sum(share for share, _ in nodes)
        kept = [(share / whole, solved(logs)) for share, logs in nodes if share > 1e-6 * whole]
    except (linalg.LinAlgError, ZeroDivisionError) as error:
        raise NotSolved("no smooth surface goes through the rungs; their error bars may be far too small") from error
    return Regression(data, Smoothness(*map(float, np.exp(best.x))), kept)


def _nodes(cost: Callable[[Floats], float], best: Floats) -> list[Floats]:
    """Either side of the minimum along each principal axis, sqrt(3) standard deviations away."""
    size = len(best)
    steps = STEP * np.eye(size)
    hessian = np.empty((size, size))
    for i in range(size):
        for j in range(i + 1):
            corners = [(s, t, cost(best + s * steps[i] + t * steps[j])) for s in (1.0, -1.0) for t in (1.0, -1.0)]
            hessian[i, j] = hessian[j, i] = sum(s * t * value for s, t, value in corners) / (4.0 * STEP**2)
    curvatures, axes = np.linalg.eigh(hessian)
    arms = math.sqrt(size) * axes / np.sqrt(np.maximum(curvatures, LEAST_CURVATURE))
    return [best + sign * arm for arm in arms.T for sign in (1.0, -1.0)]
