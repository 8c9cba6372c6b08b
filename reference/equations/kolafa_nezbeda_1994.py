"""Equation of state of the full Lennard-Jones fluid, Kolafa and Nezbeda (1994).

A hard-sphere fluid of diameter d(T) plus a damped correction of the second virial coefficient plus a double series:
A_res/(N T) = A_hs(eta)/(N T) + rho exp(-gamma rho^2) dB2(T) + sum C_ij T^(i/2 - 1) rho^j, eta = pi rho d^3/6.
"""

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from reference.equation_of_state import Reference
from reference.helmholtz import Array, log_powers, outer_sum
from reference.source import DescribedFluid, Source, beside_simulation, beside_slopes

__all__ = ["REFERENCE", "PerturbedVirialEquation"]


@dataclass(frozen=True, eq=False)
class PerturbedVirialEquation:
    """Coefficients of the hard-sphere diameter, the virial correction and the series.

    diameter : (i, C) of sum C T^(i/2); diameter_log : the coefficient of ln T beside it
    virial : (i, C) of dB2 = sum C T^(i/2), damped by exp(-gamma rho^2) with gamma = `damping`
    series : (i, j, C) of sum C T^(i/2) rho^j, A_res/N
    """

    diameter: tuple[tuple[int, float], ...]
    diameter_log: float
    virial: tuple[tuple[int, float], ...]
    damping: float
    series: tuple[tuple[int, int, float], ...]

    def derivatives(self, temperature: npt.ArrayLike, density: npt.ArrayLike) -> Array:
        """(3, 3, ...), A_mn for m + n <= 2 and NaN beyond, over the broadcast shape of both arguments (reduced)."""
        temperature, density = np.asarray(temperature), np.asarray(density)
        return self._hard_spheres(temperature, density) + self._perturbation(temperature, density)

    @cached_property
    def _columns(self) -> tuple[Array, Array, Array, Array]:
        """Coefficient, power of T, power of rho and gamma of every term but the hard spheres, each (terms,)."""
        rows = [(c, 0.5 * i, 1.0, self.damping) for i, c in self.virial]
        rows += [(c, 0.5 * i - 1.0, float(j), 0.0) for i, j, c in self.series]
        coefficient, thermal, dense, damping = np.array(rows).T
        return coefficient, thermal, dense, damping

    def _perturbation(self, temperature: Array, density: Array) -> Array:
        coefficient, power, j, damping = self._columns
        t, rho = temperature[..., None], density[..., None]
        zero = np.zeros_like(power)
        exponent = damping * rho**2
        thermal = log_powers(coefficient * t**power, -power, zero)
        dense = log_powers(rho**j * np.exp(-exponent), j - 2.0 * exponent, -4.0 * exponent)
        return outer_sum(thermal, dense)

    def _hard_spheres(self, temperature: Array, density: Array) -> Array:
        d, d1, d2 = self._diameter(temperature)
        slope = 3.0 * d1 / d  # d ln eta / d ln(1/T)
        curvature = 3.0 * (d2 / d - (d1 / d) ** 2)
        eta = math.pi / 6.0 * density * d**3
        void = 1.0 - eta
        f = 5.0 / 3.0 * np.log1p(-eta) + eta * (34.0 - 33.0 * eta + 4.0 * eta**2) / (6.0 * void**2)
        f1 = eta * (12.0 - 6.0 * eta + eta**2 - 2.0 * eta**3) / (3.0 * void**3)  # eta df/d eta
        f2 = eta**2 * 5.0 * (6.0 - 2.0 * eta - eta**2) / (3.0 * void**4)  # eta^2 d2f/d eta2
        result = np.full((3, 3, *f.shape), np.nan, dtype=f.dtype)
        result[0, 0], result[0, 1], result[0, 2] = f, f1, f2
        result[1, 0] = f1 * slope
        result[1, 1] = (f1 + f2) * slope
        result[2, 0] = f2 * slope**2 + f1 * (slope**2 + curvature - slope)
        return result

    def _diameter(self, temperature: Array) -> tuple[Array, Array, Array]:
        """d and its first two derivatives with respect to ln(1/T)."""
        powers = [(0.5 * i, c * temperature ** (0.5 * i)) for i, c in self.diameter]
        d = sum((term for _, term in powers), self.diameter_log * np.log(temperature))
        d1 = sum((-p * term for p, term in powers), np.full_like(d, -self.diameter_log))
        d2 = sum((p * p * term for p, term in powers), np.zeros_like(d))
        return d, d1, d2


_EQUATION = PerturbedVirialEquation(
    diameter=(
        (-2, 0.011117524),
        (-1, -0.076383859),
        (0, 1.080142248),
        (1, 0.000693129),
    ),
    diameter_log=-0.063920968,
    virial=(
        (-7, -0.58544978),
        (-6, 0.43102052),
        (-5, 0.87361369),
        (-4, -4.13749995),
        (-3, 2.90616279),
        (-2, -7.02181962),
        (0, 0.02459877),
    ),
    damping=1.92907278,
    series=(
        (0, 2, 2.01546797),
        (0, 3, -28.17881636),
        (0, 4, 28.28313847),
        (0, 5, -10.42402873),
        (-1, 2, -19.58371655),
        (-1, 3, 75.62340289),
        (-1, 4, -120.70586598),
        (-1, 5, 93.92740328),
        (-1, 6, -27.37737354),
        (-2, 2, 29.3447052),
        (-2, 3, -112.3535693),
        (-2, 4, 170.6490898),
        (-2, 5, -123.06669187),
        (-2, 6, 34.42288969),
        (-4, 2, -13.37031968),
        (-4, 3, 65.3805957),
        (-4, 4, -115.09233113),
        (-4, 5, 88.91973082),
        (-4, 6, -25.6209989),
    ),
)

_ACCURACY = {
    "residual_energy": beside_simulation(0.012, 1, 0.001, covered=289),
    "pressure": beside_simulation(0.015, 2, 0.003, covered=299),
    "residual_heat_capacity": beside_slopes(
        0.02, 1, 0.02, covered="150 of 150 slopes along isochores, temperature 1.2 to 7.2"
    ),
    "thermal_pressure": beside_slopes(
        0.01, 2, 0.005, covered="144 of 150 slopes along isochores, temperature 1.2 to 7.2"
    ),
    "bulk_modulus": beside_slopes(0.05, 2, 0.01, covered="141 of 141 slopes along isotherms, temperature 1.6 to 7.2"),
}

REFERENCE = Reference(
    name="kolafa-nezbeda-1994",
    title="Lennard-Jones fluid, full potential, Kolafa and Nezbeda (1994)",
    source=Source(
        authors="J. Kolafa, I. Nezbeda",
        journal="Fluid Phase Equilib. 100, 1",
        year=1994,
        how="coefficients read in a public copy; range from memory; critical point computed from the equation",
    ),
    fluid=DescribedFluid("lennard-jones", "full"),
    equation=_EQUATION,
    critical_temperature=1.33965,
    critical_density=0.3108,
    temperature_range=(0.7, 10.0),
    density_maximum=1.2,
    pressure_maximum=None,
    accuracy=_ACCURACY,
)
