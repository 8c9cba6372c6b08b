"""Where the Lennard-Jones fluid freezes.

Source: M. A. van der Hoef, J. Chem. Phys. 113, 8142 (2000), coefficients from memory; they give the liquid density
0.9239 and the solid density 1.0107 at T 1.0.
rho = beta^(-1/4) sum_i c_i beta^i with beta = 1/T.
"""

from __future__ import annotations

from reference.errors import OutOfRange

__all__ = ["TEMPERATURE_RANGE", "freezing_density", "melting_density"]

TEMPERATURE_RANGE = (0.7, 2.0)  # from the triple point to the end of the source's fit
_LIQUID = (0.9107, -0.25124, 0.85861, -1.08918, 0.63932, -0.14433)
_SOLID = (0.92302, -0.09218, 0.62381, -0.82672, 0.49124, -0.10847)


def freezing_density(temperature: float) -> float:
    """Density of the liquid in equilibrium with the solid, sigma^-3; raises OutOfRange outside TEMPERATURE_RANGE."""
    return _density(_LIQUID, temperature)


def melting_density(temperature: float) -> float:
    """Density of the solid in equilibrium with the liquid, sigma^-3; raises OutOfRange outside TEMPERATURE_RANGE."""
    return _density(_SOLID, temperature)


def _density(coefficients: tuple[float, ...], temperature: float) -> float:
    lowest, highest = TEMPERATURE_RANGE
    if not lowest <= temperature <= highest:
        raise OutOfRange(
            f"the freezing line is known from temperature {lowest:g} to {highest:g}, found {temperature:g}"
        )
    beta = 1.0 / temperature
    return float(beta**-0.25 * sum(c * beta**i for i, c in enumerate(coefficients)))
