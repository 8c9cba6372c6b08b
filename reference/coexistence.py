"""Where an equation of state has liquid and vapour in equilibrium, and where its fluid is mechanically unstable."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.optimize import brentq

from reference.errors import AboveCritical
from reference.helmholtz import Array, Equation

__all__ = ["Coexistence", "coexistence", "spinodals"]

_DENSEST = 1.2  # sigma^-3, denser than any liquid at its triple point
_GRID = np.linspace(2e-4, _DENSEST, 6000)
_PRECISION = 1e-14


@dataclass(frozen=True)
class Coexistence:
    """Liquid and vapour in equilibrium, reduced units; `liquid` and `vapour` are number densities."""

    temperature: float
    pressure: float
    liquid: float
    vapour: float


def _pressure(equation: Equation, temperature: float, density: float) -> float:
    return density * temperature * (1.0 + float(equation.derivatives(temperature, density)[0, 1]))


def _chemical_potential(equation: Equation, temperature: float, density: float) -> float:
    """mu/T up to a function of temperature."""
    a = equation.derivatives(temperature, density)
    return math.log(density) + float(a[0, 0] + a[0, 1])


def _stiffness(equation: Equation, temperature: float, density: Array | float) -> Array:
    """dP/d rho over T."""
    a = equation.derivatives(temperature, density)
    return np.asarray(1.0 + 2.0 * a[0, 1] + a[0, 2])


@lru_cache(maxsize=4096)
def spinodals(equation: Equation, temperature: float) -> tuple[float, float]:
    """Vapour and liquid density between which an equation is unstable; loops inside are none of a real fluid.

    Raises AboveCritical when dP/d rho is positive at every density.
    """
    unstable = np.flatnonzero(_stiffness(equation, temperature, _GRID) <= 0.0)
    if unstable.size == 0:
        raise AboveCritical(f"no liquid and vapour coexist at temperature {temperature}: the pressure has no loop")

    def stiffness(density: float) -> float:
        return float(_stiffness(equation, temperature, density))

    first, last = int(unstable[0]), int(unstable[-1])
    vapour = brentq(stiffness, _GRID[first - 1], _GRID[first], xtol=_PRECISION)
    liquid = brentq(stiffness, _GRID[last], _GRID[last + 1], xtol=_PRECISION)
    return float(vapour), float(liquid)


@lru_cache(maxsize=4096)
def coexistence(equation: Equation, temperature: float) -> Coexistence:
    """Equal pressure and chemical potential of both stable branches.

    The pressure is bracketed by the spinodals, between which mu_liquid - mu_vapour falls monotonically, and on each
    branch the density grows with it: three nested bracketed roots that cannot run to the trivial solution.
    Raises AboveCritical where the equation has no loop.
    """
    vapour_edge, liquid_edge = spinodals(equation, temperature)
    highest = _pressure(equation, temperature, vapour_edge)
    lowest = max(_pressure(equation, temperature, liquid_edge), 1e-12 * highest)

    def densities(log_pressure: float) -> tuple[float, float]:
        def excess(density: float) -> float:
            return _pressure(equation, temperature, density) - pressure

        pressure = min(max(math.exp(log_pressure), lowest), highest)
        vapour = brentq(excess, 0.0, vapour_edge, xtol=1e-16, rtol=_PRECISION)
        liquid = brentq(excess, liquid_edge, _DENSEST, xtol=1e-16, rtol=_PRECISION)
        return float(vapour), float(liquid)

    def imbalance(log_pressure: float) -> float:
        vapour, liquid = densities(log_pressure)
        return _chemical_potential(equation, temperature, liquid) - _chemical_potential(equation, temperature, vapour)

    log_pressure = float(brentq(imbalance, math.log(lowest), math.log(highest), xtol=1e-16, rtol=_PRECISION))
    vapour, liquid = densities(log_pressure)
    return Coexistence(temperature, math.exp(log_pressure), liquid=liquid, vapour=vapour)
