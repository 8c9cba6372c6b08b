"""Equation of state of the Lennard-Jones fluid truncated and shifted at 2.5 sigma, Thol et al. (2015)."""

from dataclasses import replace

from reference.equation_of_state import Reference
from reference.equations import thol_2016
from reference.helmholtz import HelmholtzEquation
from reference.source import Accuracy, DescribedFluid, Source

__all__ = ["REFERENCE"]

_EQUATION = HelmholtzEquation(
    reducing_temperature=1.086,
    reducing_density=0.319,
    polynomial=(
        (0.015606084, 1.0, 4.0),
        (1.7917527, 0.304, 1.0),
        (-1.9613228, 0.583, 1.0),
        (1.3045604, 0.662, 2.0),
        (-1.8117673, 0.87, 2.0),
        (0.15483997, 0.87, 3.0),
    ),
    exponential=(
        (-0.47510982, 1.286, 1.0, 1.0),
        (-0.58422807, 1.96, 1.0, 2.0),
        (-0.50607364, 2.4, 3.0, 2.0),
        (0.11639644, 1.7, 2.0, 1.0),
        (-0.20092412, 3.0, 2.0, 2.0),
        (-0.094885204, 1.25, 5.0, 1.0),
    ),
    gaussian=(
        (0.0094333106, 3.6, 1.0, 4.7, 20.0, 1.0, 0.55),
        (0.30444628, 2.08, 1.0, 1.92, 0.77, 0.5, 0.7),
        (-0.0010820946, 5.24, 2.0, 2.7, 0.5, 0.8, 2.0),
        (-0.099693391, 0.96, 3.0, 1.49, 0.8, 1.5, 1.14),
        (0.0091193522, 1.36, 3.0, 0.65, 0.4, 0.7, 1.2),
        (0.12970543, 1.655, 2.0, 1.73, 0.43, 1.6, 1.31),
        (0.02303603, 0.9, 1.0, 3.7, 8.0, 1.3, 1.14),
        (-0.082671073, 0.86, 2.0, 1.9, 3.3, 0.6, 0.53),
        (-2.2497821, 3.95, 3.0, 13.2, 114.0, 1.3, 0.96),
    ),
)

_BORROWED = (
    "borrowed from the equation of the same authors and form for the full potential (2016), since no published "
    "simulation of the shifted fluid was compared here; there: "
)

_SAMPLED = Accuracy(
    0.03,
    2,
    0.006,
    "from the deviation of the equation from our own sampling (500 particles, 300 000 steps of 0.004 at density 0.8): "
    "-0.016(4) at temperature 1.0 and -0.005(5) at 1.5, doubled",
)

REFERENCE = Reference(
    name="thol-2015",
    title="Lennard-Jones fluid, truncated and shifted at 2.5 sigma, Thol et al. (2015)",
    source=Source(
        authors="M. Thol, G. Rutkai, R. Span, J. Vrabec, R. Lustig",
        journal="Int. J. Thermophys. 36, 25",
        year=2015,
        how="coefficients read in a public copy; range (0.6 to 10 critical temperatures, up to 70 critical pressures) "
        "from memory and rounded inwards",
    ),
    fluid=DescribedFluid("lennard-jones", "shifted", 2.5),
    equation=_EQUATION,
    critical_temperature=1.086,
    critical_density=0.319,
    temperature_range=(0.66, 10.0),
    density_maximum=None,
    pressure_maximum=7.0,
    accuracy={
        **{name: replace(item, origin=_BORROWED + item.origin) for name, item in thol_2016.ACCURACY.items()},
        "pressure": _SAMPLED,
    },
)
