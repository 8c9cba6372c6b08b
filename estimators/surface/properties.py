"""Properties as functions of the residual Helmholtz derivatives of a state, reduced units, particles of mass 1."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

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
    t, rho = temperature, density
    c_v_residual, pressure, gamma, modulus, energy = (
        linear(name, temperature=t, density=rho)
        for name in ("residual_heat_capacity", "pressure", "thermal_pressure", "bulk_modulus", "residual_energy")
    )
    expansion: tuple[Formula, tuple[str, ...]] = (lambda a: gamma(a) / modulus(a), ("bulk_modulus",))
    if ideal_heat_capacity is None:
        return {"thermal_expansion": expansion}
    ideal = ideal_heat_capacity

    def c_v(a: Any) -> Any:
        return ideal + c_v_residual(a)

    def c_p(a: Any) -> Any:
        return c_v(a) + t * gamma(a) ** 2 / (rho * modulus(a))

    both = ("heat_capacity", "bulk_modulus")
    return {
        "heat_capacity": (c_v, ()),
        "isobaric_heat_capacity": (c_p, ("bulk_modulus",)),
        "thermal_expansion": expansion,
        "sound_speed": (lambda a: (c_p(a) / c_v(a) * modulus(a) / rho) ** 0.5, both),
        "joule_thomson": (lambda a: (t * gamma(a) / modulus(a) - 1.0) / (rho * c_p(a)), both),
        "grueneisen": (lambda a: gamma(a) / (rho * c_v(a)), ("heat_capacity",)),
        "enthalpy": (lambda a: ideal * t + energy(a) + pressure(a) / rho, ()),
    }
