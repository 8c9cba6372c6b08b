"""A published equation of state as a reference: values with their uncertainty, inside its range only."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt

import reference.coexistence as equilibrium
from reference.errors import AboveCritical, OutOfRange, UnknownProperty
from reference.helmholtz import Array, Equation
from reference.properties import ABSOLUTE, DIRECT, PROPERTIES, Bulk, propagate
from reference.source import Accuracy, DescribedFluid, Source
from reference.virial import equation_second_virial

__all__ = ["Reference", "ReferenceValue"]


_POINTS = 32  # of a quadrature over densities


@dataclass(frozen=True)
class ReferenceValue:
    """A property at a state, reduced units; `uncertainty` is one standard uncertainty, half the 95 % figure."""

    value: float
    uncertainty: float
    accuracy_note: str


@dataclass(frozen=True, eq=False)
class Reference:
    """An equation of state with its source, the fluid it describes, its range and its accuracy (reduced units).

    temperature_range : lowest and highest temperature the source covers
    density_maximum, pressure_maximum : what the source covers; None where it states no such bound
    accuracy : for each of the five direct properties
    """

    name: str
    title: str
    source: Source
    fluid: DescribedFluid
    equation: Equation
    critical_temperature: float
    critical_density: float
    temperature_range: tuple[float, float]
    density_maximum: float | None
    pressure_maximum: float | None
    accuracy: Mapping[str, Accuracy]

    def covers(self, temperature: float, density: float) -> str:
        """Empty where the equation holds, else the reason in words: out of range, or mechanically unstable."""
        for word, number in (("temperature", temperature), ("density", density)):
            if not (math.isfinite(number) and number > 0.0):
                return f"{word} must be a positive number, found {number!r}"
        if reason := self._beyond(temperature):
            return reason
        if self.density_maximum is not None and density > self.density_maximum:
            return f"{self.name} holds up to density {self.density_maximum:g}, found {density:g}"
        with np.errstate(over="ignore", invalid="ignore"):
            pressure = density * temperature * (1.0 + float(self.derivatives(temperature, density)[0, 1]))
        if self.pressure_maximum is not None and not pressure <= self.pressure_maximum:
            return (
                f"{self.name} holds up to pressure {self.pressure_maximum:g}, and temperature {temperature:g} at "
                f"density {density:g} lies above it"
            )
        if self._unstable(temperature, density):
            return (
                f"a homogeneous fluid is unstable at temperature {temperature:g} and density {density:g}: "
                "it separates into liquid and vapour"
            )
        return ""

    def value(
        self, property_name: str, *, temperature: float, density: float, ideal_heat_capacity: float = 1.5
    ) -> ReferenceValue:
        """One property at a state, for particles of mass 1 and a constant c_v of the ideal gas (k_B per particle).

        Uncertainties of derived properties follow from those of the five direct ones, taken as independent.
        Raises UnknownProperty for a name that is none of `properties.PROPERTIES`, OutOfRange where `covers` objects.
        """
        if property_name not in PROPERTIES:
            raise UnknownProperty(f"{self.name} does not give {property_name!r}; it gives {', '.join(PROPERTIES)}")
        if reason := self.covers(temperature, density):
            raise OutOfRange(reason)
        if not (math.isfinite(ideal_heat_capacity) and ideal_heat_capacity > 0.0):
            raise OutOfRange(f"ideal_heat_capacity must be a positive number, found {ideal_heat_capacity!r}")
        bulk = Bulk.of(
            self.derivatives(temperature, density),
            temperature=temperature,
            density=density,
            ideal_heat_capacity=ideal_heat_capacity,
        )
        residuals = bulk.residuals
        uncertainties = {
            name: 0.5 * self.accuracy[name].half_width(residuals[name], density=density) for name in DIRECT
        }
        if property_name in ABSOLUTE:
            uncertainties["residual_helmholtz_energy"] = self._along_isotherm(temperature, density)
        return ReferenceValue(
            value=float(complex(getattr(bulk, property_name)).real),
            uncertainty=propagate(property_name, bulk, uncertainties),
            accuracy_note=self._accuracy_note(property_name),
        )

    def derivatives(self, temperature: npt.ArrayLike, density: npt.ArrayLike) -> Array:
        """(3, 3, ...), A_mn for m + n <= 2 and NaN beyond, over the broadcast shape of both; no range is checked."""
        return self.equation.derivatives(temperature, density)

    def second_virial(self, temperature: float) -> float:
        """B2 of the equation, sigma^3; raises OutOfRange outside the temperature range."""
        self._check_temperature(temperature)
        return equation_second_virial(self.equation, temperature=temperature)

    def coexistence(self, temperature: float) -> equilibrium.Coexistence:
        """Liquid and vapour in equilibrium.

        Raises AboveCritical from the critical temperature upwards, OutOfRange outside the temperature range.
        """
        self._check_temperature(temperature)
        self._check_subcritical(temperature)
        return equilibrium.coexistence(self.equation, temperature)

    def spinodals(self, temperature: float) -> tuple[float, float]:
        """Vapour and liquid density between which a homogeneous fluid is unstable; raises as `coexistence` does."""
        self._check_temperature(temperature)
        self._check_subcritical(temperature)
        return equilibrium.spinodals(self.equation, temperature)

    def phase(self, temperature: float, density: float) -> Literal["fluid", "two-phase"]:
        """Whether a state lies between the coexisting vapour and liquid; freezing is not looked at.

        Raises OutOfRange outside the temperature range.
        """
        try:
            pair = self.coexistence(temperature)
        except AboveCritical:
            return "fluid"
        return "two-phase" if pair.vapour < density < pair.liquid else "fluid"

    def same_model(self, truncation: str, cutoff: float) -> bool:
        """Whether a sampled fluid of this potential, cut that way, is the one the equation describes."""
        return self.fluid.same_model(truncation, cutoff)

    def _along_isotherm(self, temperature: float, density: float) -> float:
        """Uncertainty of the residual Helmholtz energy: that of the pressure's integral from the ideal gas.

        a_res is the integral of (P - rho T)/rho^2; pressures are taken to be off to the same side all along.
        """
        points, weights = np.polynomial.legendre.leggauss(_POINTS)
        densities = 0.5 * density * (points + 1.0)
        pressures = densities * temperature * np.asarray(self.derivatives(temperature, densities)[0, 1], dtype=float)
        widths = [
            self.accuracy["pressure"].half_width(float(pressure), density=float(rho))
            for pressure, rho in zip(pressures, densities, strict=True)
        ]
        return float(0.25 * density * np.sum(weights * np.array(widths) / densities**2))

    def _accuracy_note(self, property_name: str) -> str:
        if property_name in self.accuracy:
            return self.accuracy[property_name].origin
        if property_name in ABSOLUTE:
            return "propagated from the accuracy of the pressure along the isotherm, taken as off to one side all along"
        return "propagated from the accuracies of " + ", ".join(DIRECT) + ", taken as independent"

    def _unstable(self, temperature: float, density: float) -> bool:
        if temperature >= self.critical_temperature:
            return False
        try:
            vapour, liquid = equilibrium.spinodals(self.equation, temperature)
        except AboveCritical:
            return False
        return vapour < density < liquid

    def _check_subcritical(self, temperature: float) -> None:
        if temperature >= self.critical_temperature:
            raise AboveCritical(
                f"no liquid and vapour coexist at temperature {temperature:g}: "
                f"{self.name} has its critical point at {self.critical_temperature:g}"
            )

    def _check_temperature(self, temperature: float) -> None:
        if reason := self._beyond(temperature):
            raise OutOfRange(reason)

    def _beyond(self, temperature: float) -> str:
        lowest, highest = self.temperature_range
        if lowest <= temperature <= highest:
            return ""
        return f"{self.name} holds from temperature {lowest:g} to {highest:g}, found {temperature:g}"
