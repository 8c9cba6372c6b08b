"""Second virial coefficient: of a pair potential, and of an equation of state in the limit of zero density."""

from __future__ import annotations

import math
from collections.abc import Callable
from itertools import pairwise

import numpy as np
from scipy.integrate import quad

from reference.errors import NotConverged, OutOfRange
from reference.helmholtz import Equation

__all__ = ["equation_second_virial", "pair_second_virial"]

_STEP = 1e-30


def pair_second_virial(pair_energy: Callable[[float], float], *, temperature: float, cutoff: float = math.inf) -> float:
    """B2 = -2 pi int (exp(-u/T) - 1) r^2 dr from 0 to `cutoff`, sigma^3, to 1e-10 relative or 1e-11 absolute.

    pair_energy : u(r) in epsilon, r in sigma; +inf is allowed inside a hard core, zero is assumed beyond `cutoff`
    Raises OutOfRange for a temperature or cutoff that is not positive, NotConverged where the quadrature misses that.
    """
    if not (temperature > 0.0 and cutoff > 0.0):
        raise OutOfRange(f"temperature and cutoff must be positive, found {temperature!r} and {cutoff!r}")

    def integrand(r: float) -> float:
        return -2.0 * math.pi * float(np.expm1(-float(pair_energy(r)) / temperature)) * r * r

    edges = [0.0, *(edge for edge in (0.5, 0.9, 1.0, 1.2, 1.5, 2.5, 5.0) if edge < cutoff), cutoff]
    total = error = 0.0
    with np.errstate(over="ignore", invalid="ignore"):
        for start, end in pairwise(edges):
            part, part_error, *_ = quad(integrand, start, end, epsabs=1e-13, epsrel=1e-12, limit=400, full_output=1)
            total, error = total + part, error + part_error
    if not (math.isfinite(total) and error <= max(1e-11, 1e-10 * abs(total))):
        raise NotConverged(
            f"second virial coefficient at temperature {temperature} is uncertain by {error:.1e}; "
            "the pair energy must be bounded from below, smooth up to its cutoff and fall faster than r^-3"
        )
    return total


def equation_second_virial(equation: Equation, *, temperature: float) -> float:
    """B2 of an equation of state, sigma^3: the slope of A00 at zero density, exact by a complex step in the density."""
    return float(np.imag(equation.derivatives(temperature, 1j * _STEP)[0, 0])) / _STEP
