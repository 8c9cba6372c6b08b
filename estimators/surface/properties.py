"""Properties as functions of the residual Helmholtz derivatives of a state, reduced units, particles of mass 1."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from estimators.derived import RULES, Rule, enthalpy

__all__ = ["ABSOLUTE", "DIRECT", "Formula", "Linear", "derived_properties", "linear"]

Floats = npt.NDArray[np.float64]
Formula = Callable[[Any], Any]  # of the six A_mn in the order of `kernel.ORDERS`, complex or not

DIRECT = (
    "residual_energy",
    "residual_heat_capacity",
    "pressure",
    "compressibility_factor",
    "thermal_pressure",
    "bulk_modulus",
)
ABSOLUTE = ("residual_helmholtz_energy", "residual_entropy", "residual_chemical_potential")
"""Those that derivatives alone do not tell: they need a path from the ideal gas."""


@dataclass(frozen=True, eq=False)
class Linear:
    """constant + slopes . (alpha, A10, A01, A20, A11, A02)"""

    constant: float
    slopes: Floats

    def __call__(self, derivatives: Any) -> Any:
        """derivatives : (6,)"""
        return self.constant + self.slopes @ derivatives


def linear(name: str, *, temperature: float, density: float) -> Linear:
    """A property of DIRECT or ABSOLUTE at a state; KeyError for any other."""
    t, kinetic = temperature, density * temperature
    constant, *slopes = {
        "residual_energy": (0.0, 0.0, t, 0.0, 0.0, 0.0, 0.0),
        "residual_heat_capacity": (0.0, 0.0, 0.0, 0.0, -1.0, 0.0, 0.0),
        "pressure": (kinetic, 0.0, 0.0, kinetic, 0.0, 0.0, 0.0),
        "compressibility_factor": (1.0, 0.0, 0.0, 1.0, 0.0, 0.0, 0.0),
        "thermal_pressure": (density, 0.0, 0.0, density, 0.0, -density, 0.0),
        "bulk_modulus": (kinetic, 0.0, 0.0, 2.0 * kinetic, 0.0, 0.0, kinetic),
        "residual_helmholtz_energy": (0.0, t, 0.0, 0.0, 0.0, 0.0, 0.0),
        "residual_entropy": (0.0, -1.0, 1.0, 0.0, 0.0, 0.0, 0.0),
        "residual_chemical_potential": (0.0, t, 0.0, t, 0.0, 0.0, 0.0),
    }[name]
    return Linear(constant, np.array(slopes))


def derived_properties(
    *, temperature: float, density: float, ideal_heat_capacity: float | None
) -> Mapping[str, tuple[Formula, tuple[str, ...]]]:
    """Formulas by name, each with those of its parts that it divides by, which must be clearly above zero.

    ideal_heat_capacity : c_v of the ideal gas, k_B; without it only what needs none
    """
    parts: dict[str, Formula] = {name: linear(name, temperature=temperature, density=density) for name in DIRECT}
    rules = dict(RULES)
    found: dict[str, tuple[Formula, tuple[str, ...]]] = {}
    if ideal_heat_capacity is not None:
        residual, rules["enthalpy"] = parts["residual_heat_capacity"], enthalpy(ideal_heat_capacity)
        parts["heat_capacity"] = lambda a: ideal_heat_capacity + residual(a)
        found["heat_capacity"] = (parts["heat_capacity"], ())

    def follows(rule: Rule) -> Formula:
        own = [parts[name] for name in rule.parts]
        return lambda a: rule.formula(temperature, density, *(part(a) for part in own))

    return found | {
        name: (follows(rule), rule.divisors) for name, rule in rules.items() if parts.keys() >= set(rule.parts)
    }
