"""Thermodynamic properties of a bulk fluid from the five that a fundamental equation gives directly."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

from reference.helmholtz import Array

__all__ = ["ABSOLUTE", "DERIVED", "DIRECT", "PROPERTIES", "Bulk", "propagate"]

DIRECT = ("residual_energy", "residual_heat_capacity", "pressure", "thermal_pressure", "bulk_modulus")
DERIVED = (
    "compressibility_factor",
    "heat_capacity",
    "isobaric_heat_capacity",
    "thermal_expansion",
    "sound_speed",
    "joule_thomson",
    "grueneisen",
    "enthalpy",
)
ABSOLUTE = ("residual_helmholtz_energy", "residual_entropy", "residual_chemical_potential")
"""Those that derivatives alone do not tell: counted from the ideal gas of the same temperature and density."""
PROPERTIES = DIRECT + DERIVED + ABSOLUTE
_STEP = 1e-30


@dataclass(frozen=True)
class Bulk:
    """A homogeneous state in reduced units; a value is complex only while a complex step passes through.

    ideal_heat_capacity : c_v of the ideal gas, k_B per particle, taken as constant
    """

    temperature: float
    density: float
    ideal_heat_capacity: float
    residual_energy: complex
    residual_heat_capacity: complex
    pressure: complex
    thermal_pressure: complex
    bulk_modulus: complex
    residual_helmholtz_energy: complex

    @classmethod
    def of(cls, a: Array, *, temperature: float, density: float, ideal_heat_capacity: float) -> Bulk:
        """From the residual Helmholtz derivatives A_mn, (3, 3)."""
        return cls(
            temperature,
            density,
            ideal_heat_capacity,
            residual_energy=temperature * float(a[1, 0]),
            residual_heat_capacity=-float(a[2, 0]),
            pressure=density * temperature * (1.0 + float(a[0, 1])),
            thermal_pressure=density * (1.0 + float(a[0, 1] - a[1, 1])),
            bulk_modulus=density * temperature * (1.0 + float(2.0 * a[0, 1] + a[0, 2])),
            residual_helmholtz_energy=temperature * float(a[0, 0]),
        )

    @property
    def compressibility_factor(self) -> complex:
        """P/(rho T)."""
        return self.pressure / (self.density * self.temperature)

    @property
    def heat_capacity(self) -> complex:
        """c_v with the ideal part, k_B."""
        return self.ideal_heat_capacity + self.residual_heat_capacity

    @property
    def isobaric_heat_capacity(self) -> complex:
        """c_p with the ideal part, k_B."""
        return self.heat_capacity + self.temperature * self.thermal_pressure**2 / (self.density * self.bulk_modulus)

    @property
    def thermal_expansion(self) -> complex:
        """Isobaric, k_B/epsilon."""
        return self.thermal_pressure / self.bulk_modulus

    @property
    def sound_speed(self) -> complex:
        """For particles of mass 1, sqrt(epsilon/m)."""
        ratio = self.isobaric_heat_capacity / self.heat_capacity
        return complex(ratio * self.bulk_modulus / self.density) ** 0.5

    @property
    def joule_thomson(self) -> complex:
        """dT/dP at constant enthalpy, sigma^3/k_B."""
        return (self.temperature * self.thermal_expansion - 1.0) / (self.density * self.isobaric_heat_capacity)

    @property
    def grueneisen(self) -> complex:
        """gamma_V/(rho c_v)."""
        return self.thermal_pressure / (self.density * self.heat_capacity)

    @property
    def enthalpy(self) -> complex:
        """Per particle with the ideal part, zero for the ideal gas at T 0, epsilon."""
        ideal = self.ideal_heat_capacity * self.temperature
        return ideal + self.residual_energy + self.pressure / self.density

    @property
    def residual_entropy(self) -> complex:
        """Per particle, k_B."""
        return (self.residual_energy - self.residual_helmholtz_energy) / self.temperature

    @property
    def residual_chemical_potential(self) -> complex:
        """Per particle, epsilon."""
        return self.residual_helmholtz_energy + self.pressure / self.density - self.temperature

    @property
    def residuals(self) -> dict[str, float]:
        """The five direct properties without their ideal-gas parts."""
        ideal = {
            "pressure": self.density * self.temperature,
            "thermal_pressure": self.density,
            "bulk_modulus": self.density * self.temperature,
        }
        return {name: getattr(self, name).real - ideal.get(name, 0.0) for name in DIRECT}


def propagate(name: str, bulk: Bulk, uncertainties: dict[str, float]) -> float:
    """Uncertainty of a property from those of what it is made of, taken as independent of each other."""
    variance = 0.0
    for part, uncertainty in uncertainties.items():
        stepped: dict[str, Any] = {part: complex(getattr(bulk, part), _STEP)}
        slope = complex(getattr(replace(bulk, **stepped), name)).imag / _STEP
        variance += (slope * uncertainty) ** 2
    return float(variance**0.5)
