"""Equation of state of the full Lennard-Jones fluid, Thol et al. (2016)."""

from reference.equation_of_state import Reference
from reference.helmholtz import HelmholtzEquation
from reference.source import DescribedFluid, Source, beside_simulation, beside_slopes

__all__ = ["ACCURACY", "REFERENCE"]

_EQUATION = HelmholtzEquation(
    reducing_temperature=1.32,
    reducing_density=0.31,
    polynomial=(
        (0.005208073, 1.0, 4.0),
        (2.186252, 0.32, 1.0),
        (-2.161016, 0.505, 1.0),
        (1.4527, 0.672, 2.0),
        (-2.041792, 0.843, 2.0),
        (0.18695286, 0.898, 3.0),
    ),
    exponential=(
        (-0.6208625, 1.205, 1.0, 1.0),
        (-0.568839, 1.786, 1.0, 2.0),
        (-0.80055922, 2.77, 3.0, 2.0),
        (0.10901431, 1.786, 2.0, 1.0),
        (-0.4974561, 2.59, 2.0, 2.0),
        (-0.090988445, 1.294, 5.0, 1.0),
    ),
    gaussian=(
        (-1.4667177, 2.83, 1.0, 2.067, 0.625, 0.71, 0.2053),
        (1.891469, 2.548, 1.0, 1.522, 0.638, 0.86, 0.409),
        (-0.1383701, 4.65, 2.0, 8.82, 3.91, 1.94, 0.6),
        (-0.3869645, 1.385, 3.0, 1.722, 0.156, 1.48, 1.203),
        (0.1265702, 1.46, 3.0, 0.679, 0.157, 1.49, 1.829),
        (0.605781, 1.351, 2.0, 1.883, 0.153, 1.945, 1.397),
        (1.179189, 0.66, 1.0, 3.925, 1.16, 3.02, 1.39),
        (-0.47732679, 1.496, 2.0, 2.461, 1.73, 1.11, 0.539),
        (-9.9218575, 1.83, 3.0, 28.2, 383.0, 1.17, 0.934),
        (-0.5747932, 1.616, 1.0, 0.753, 0.112, 1.33, 2.369),
        (0.003772923, 4.97, 1.0, 0.82, 0.119, 0.24, 2.43),
    ),
)

ACCURACY = {
    "residual_energy": beside_simulation(0.006, 1, 0.001, covered=285),
    "pressure": beside_simulation(0.005, 2, 0.003, covered=292),
    "residual_heat_capacity": beside_slopes(
        0.01, 1, 0.01, covered="150 of 150 slopes along isochores, temperature 1.2 to 7.2"
    ),
    "thermal_pressure": beside_slopes(
        0.005, 2, 0.003, covered="149 of 150 slopes along isochores, temperature 1.2 to 7.2"
    ),
    "bulk_modulus": beside_slopes(0.05, 2, 0.005, covered="136 of 141 slopes along isotherms, temperature 1.6 to 7.2"),
}

REFERENCE = Reference(
    name="thol-2016",
    title="Lennard-Jones fluid, full potential, Thol et al. (2016)",
    source=Source(
        authors="M. Thol, G. Rutkai, A. Koester, R. Lustig, R. Span, J. Vrabec",
        journal="J. Phys. Chem. Ref. Data 45, 023101",
        year=2016,
        how="coefficients and range read in a public copy",
    ),
    fluid=DescribedFluid("lennard-jones", "full"),
    equation=_EQUATION,
    critical_temperature=1.32,
    critical_density=0.31,
    temperature_range=(0.7, 9.0),
    density_maximum=None,
    pressure_maximum=65.0,
    accuracy=ACCURACY,
)
