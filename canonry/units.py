"""Reduced and SI values of everything a table can hold.

Reduced units: energy epsilon, length sigma, mass m, k_B = 1. The constants are those of CODATA as SciPy ships them.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal

__all__ = ["PROPERTIES", "UNITS", "Kind", "Scale", "Unit", "unit_label"]

Kind = Literal["reduced", "SI"]


@dataclass(frozen=True)
class Unit:
    """Labels of one quantity, and its reduced unit as epsilon^energy sigma^length m^mass k_B^boltzmann N_A^avogadro.

    prefix : SI base units in one of the SI unit's label, for example 1e6 for MPa
    """

    reduced: str
    SI: str
    energy: float = 0.0
    length: float = 0.0
    mass: float = 0.0
    boltzmann: float = 0.0
    avogadro: float = 0.0
    prefix: float = 1.0


_MOLAR_ENERGY = Unit("epsilon", "kJ/mol", energy=1, avogadro=1, prefix=1e3)
_HEAT_CAPACITY = Unit("k_B", "J/(mol K)", boltzmann=1, avogadro=1)
_PRESSURE = Unit("epsilon/sigma^3", "MPa", energy=1, length=-3, prefix=1e6)
_NUMBER = Unit("1", "1")

PROPERTIES = {
    "residual_energy": _MOLAR_ENERGY,
    "residual_heat_capacity": _HEAT_CAPACITY,
    "heat_capacity": _HEAT_CAPACITY,
    "isobaric_heat_capacity": _HEAT_CAPACITY,
    "pressure": _PRESSURE,
    "compressibility_factor": _NUMBER,
    "thermal_pressure": Unit("k_B/sigma^3", "MPa/K", length=-3, boltzmann=1, prefix=1e6),
    "bulk_modulus": _PRESSURE,
    "thermal_expansion": Unit("k_B/epsilon", "1/K", energy=-1, boltzmann=1),
    "sound_speed": Unit("(epsilon/m)^(1/2)", "m/s", energy=0.5, mass=-0.5),
    "joule_thomson": Unit("sigma^3/k_B", "K/MPa", length=3, boltzmann=-1, prefix=1e-6),
    "grueneisen": _NUMBER,
    "enthalpy": _MOLAR_ENERGY,
    "residual_chemical_potential": _MOLAR_ENERGY,
    "residual_helmholtz_energy": _MOLAR_ENERGY,
    "residual_entropy": _HEAT_CAPACITY,
    "residual_helmholtz_change": _HEAT_CAPACITY,
    "residual_entropy_change": _HEAT_CAPACITY,
}

UNITS = PROPERTIES | {
    "temperature": Unit("epsilon/k_B", "K", energy=1, boltzmann=-1),
    "density": Unit("sigma^-3", "kg/m3", length=-3, mass=1),
    "length": Unit("sigma", "nm", length=1, prefix=1e-9),
    "volume": Unit("sigma^3", "nm3", length=3, prefix=1e-27),
    "time": Unit("sigma (m/epsilon)^(1/2)", "ps", energy=-0.5, length=1, mass=0.5, prefix=1e-12),
    "friction": Unit("(epsilon/m)^(1/2)/sigma", "1/ps", energy=0.5, length=-1, mass=-0.5, prefix=1e12),
}


def unit_label(quantity: str, kind: Kind) -> str:
    """Unit of a property, or of temperature, density (in SI: of mass), length, time, friction; KeyError otherwise."""
    return UNITS[quantity].SI if kind == "SI" else UNITS[quantity].reduced


@dataclass(frozen=True)
class Scale:
    """SI size of the reduced units: epsilon (J), sigma (m), mass of a particle (kg); ValueError unless positive."""

    epsilon: float
    sigma: float
    mass: float

    def __post_init__(self) -> None:
        for name in ("epsilon", "sigma", "mass"):
            value = getattr(self, name)
            if not (math.isfinite(value) and value > 0.0):
                raise ValueError(f"{name} must be a positive number, found {value!r}")

    def factor(self, quantity: str) -> float:
        """What one reduced unit of a quantity amounts to in the unit `unit_label(quantity, "SI")`."""
        from scipy.constants import Avogadro, Boltzmann

        unit = UNITS[quantity]
        reduced = self.epsilon**unit.energy * self.sigma**unit.length * self.mass**unit.mass
        return float(reduced * Boltzmann**unit.boltzmann * Avogadro**unit.avogadro / unit.prefix)
