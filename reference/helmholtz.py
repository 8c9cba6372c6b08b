"""Residual Helmholtz energy of a fluid as a sum of polynomial, exponential and Gaussian terms.

With tau = Tc/T and delta = rho/rhoc every term is a function of tau times a function of delta, so all derivatives
are products of logarithmic derivatives: A_mn = tau^m delta^n d^(m+n) (A_res/NT) / d tau^m d delta^n.
Form: R. Span, Multiparameter Equations of State, Springer (2000), from memory.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt

__all__ = ["Array", "Equation", "HelmholtzEquation", "log_powers", "outer_sum"]

Array = npt.NDArray[Any]  # float64, or complex128 where a complex step passes through


class Equation(Protocol):
    """Anything that gives the residual Helmholtz derivatives of a fluid."""

    def __hash__(self) -> int: ...

    def derivatives(self, temperature: npt.ArrayLike, density: npt.ArrayLike) -> Array:
        """(3, 3, ...), A_mn for m + n <= 2 and NaN beyond, over the broadcast shape of both arguments (reduced)."""
        ...


def log_powers(value: Array, slope: Array, curvature: Array) -> tuple[Array, Array, Array]:
    """f, x f' and x^2 f'' of f(x), from f, slope s = d ln f / d ln x and curvature = d s / d ln x."""
    return value, slope * value, (slope * (slope - 1.0) + curvature) * value


def outer_sum(thermal: Sequence[Array], dense: Sequence[Array]) -> Array:
    """(3, 3, ...), sum over the last axis (the terms) of thermal[m] * dense[n] for m + n <= 2, NaN beyond."""
    shape = np.broadcast_shapes(thermal[0].shape, dense[0].shape)[:-1]
    result = np.full((3, 3, *shape), np.nan, dtype=np.result_type(thermal[0], dense[0]))
    for m in range(3):
        for n in range(3 - m):
            result[m, n] = (thermal[m] * dense[n]).sum(axis=-1)
    return result


@dataclass(frozen=True, eq=False)
class HelmholtzEquation:
    """Coefficients of one equation; the reducing point is in units epsilon/k_B and sigma^-3.

    polynomial : (n, t, d) of n tau^t delta^d
    exponential : (n, t, d, l), the same times exp(-delta^l)
    gaussian : (n, t, d, eta, beta, gamma, epsilon), the same as polynomial times
               exp(-eta (delta - epsilon)^2 - beta (tau - gamma)^2)
    """

    reducing_temperature: float
    reducing_density: float
    polynomial: tuple[tuple[float, ...], ...]
    exponential: tuple[tuple[float, ...], ...]
    gaussian: tuple[tuple[float, ...], ...]

    @cached_property
    def _columns(self) -> Array:
        """(8, terms): n, t, d, l, eta, beta, gamma, epsilon, zero where a term has none."""
        rows = [(*term, 0.0, 0.0, 0.0, 0.0, 0.0) for term in self.polynomial]
        rows += [(*term, 0.0, 0.0, 0.0, 0.0) for term in self.exponential]
        rows += [(*term[:3], 0.0, *term[3:]) for term in self.gaussian]
        return np.array(rows).T

    def derivatives(self, temperature: npt.ArrayLike, density: npt.ArrayLike) -> Array:
        """(3, 3, ...), A_mn for m + n <= 2 and NaN beyond, over the broadcast shape of both arguments (reduced)."""
        n, t, d, power, eta, beta, gamma, epsilon = self._columns
        tau = (self.reducing_temperature / np.asarray(temperature))[..., None]
        delta = (np.asarray(density) / self.reducing_density)[..., None]
        damping = np.where(power > 0.0, delta**power, 0.0)
        thermal = log_powers(
            n * tau**t * np.exp(-beta * (tau - gamma) ** 2),
            t - 2.0 * beta * tau * (tau - gamma),
            -2.0 * beta * tau * (2.0 * tau - gamma),
        )
        dense = log_powers(
            delta**d * np.exp(-damping - eta * (delta - epsilon) ** 2),
            d - power * damping - 2.0 * eta * delta * (delta - epsilon),
            -(power**2) * damping - 2.0 * eta * delta * (2.0 * delta - epsilon),
        )
        return outer_sum(thermal, dense)
