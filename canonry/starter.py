"""The commented study file that a new study starts from."""

from __future__ import annotations

from dataclasses import dataclass

from canonry.errors import UserError
from canonry.quantities import from_text
from canonry.units import Scale

__all__ = ["FLUIDS", "PublishedFluid", "starter_text"]


@dataclass(frozen=True)
class PublishedFluid:
    """Lennard-Jones parameters of a real fluid; `source` was recalled from memory, not read.

    epsilon_over_k : K
    sigma : angstrom
    mass : u
    ideal_heat_capacity : c_v of the ideal gas, k_B: translation 3/2, rotation of a linear molecule 1, of another 3/2
    """

    epsilon_over_k: float
    sigma: float
    mass: float
    ideal_heat_capacity: float
    fitted_to: str
    source: str


_2001 = ("vapour-liquid equilibrium", "J. Vrabec, J. Stoll, H. Hasse, J. Phys. Chem. B 105, 12126 (2001)")
_1954 = (
    "second virial coefficient",
    "J. O. Hirschfelder, C. F. Curtiss, R. B. Bird, Molecular Theory of Gases and Liquids (1954), Table I-A",
)

FLUIDS = {
    "argon": PublishedFluid(116.79, 3.3952, 39.948, 1.5, *_2001),
    "krypton": PublishedFluid(162.58, 3.6274, 83.798, 1.5, *_2001),
    "xenon": PublishedFluid(227.55, 3.9011, 131.293, 1.5, *_2001),
    "methane": PublishedFluid(148.55, 3.7281, 16.043, 3.0, *_2001),
    "nitrogen": PublishedFluid(95.05, 3.698, 28.0134, 2.5, *_1954),
}

_TEMPERATURES = (0.95, 1.05, 1.2, 1.35)  # epsilon/k_B
_DENSITY = 0.78  # sigma^-3: one liquid phase at all of these temperatures

_TEXT = """\
# A number without a unit is in reduced units: energy epsilon, length sigma, mass m, k_B = 1.
title = "{title}"

[fluid]
potential = "lennard-jones"
{parameters}
# cutoff = 3.0               # by default 3 sigma from density 0.5 on, 5 sigma below
truncation = "corrected"     # corrected (long-range part added), plain, shifted, force-shifted
ideal_heat_capacity = {ideal}    # c_v of the ideal gas, k_B per particle; "unknown" leaves it out of the results

[state]
# A value or a list; every density is sampled at every temperature.
density = {density}
temperatures = [{temperatures}]
# Instead of a list, evenly spaced in 1/T: temperatures = {{ from = {first}, to = {last}, rungs = 6 }}
# As few as overlap so, chosen by short runs: temperatures = {{ from = {first}, to = {last}, overlap = 0.1 }}
# Instead of both, single states: points = [[{first}, {density}]]
particles = 500

[sampling]
seed = 1
repeats = 1                  # independent repetitions of every rung
time_step = 0.005{time}
# friction = 2.0             # of the bath; by default 2 from density 0.5 on, 1 below
precision = "mixed"          # forces between records in single precision under baoab and obabo; or double throughout
scheme = "baoab"             # baoab, obabo, metropolised (no error of the time step), or velocity-verlet (after
                             # equilibration no bath: constant energy)
equilibration = 20000        # steps before the first that counts
steps = 200000               # per repeat, after equilibration; more can be asked for later
record_every = 10            # steps
frame_every = 500            # steps between stored positions

# [until]                    # go on where a standard error is larger than this, up to steps_at_most
# heat_capacity = "1 %"
# pressure = 0.01

[compare]
against = ["thol-2016"]      # `canonry reference` lists what there is
# tolerance = {{ heat_capacity = "2 %" }}   # a difference that does not matter
"""


def starter_text(fluid_name: str | None = None) -> str:
    """A study file to edit: a liquid isochore of a fluid of FLUIDS, in SI, or without a name in reduced units.

    Raises UserError for a name that is not in FLUIDS.
    """
    if fluid_name is None:
        return _text(
            title="Isochore of a Lennard-Jones liquid",
            parameters="# With epsilon, sigma and mass any value may carry a unit:\n"
            '# epsilon = "119.8 K"\n# sigma = "3.405 angstrom"\n# mass = "39.948 u"',
            ideal=1.5,
            density=str(_DENSITY),
            temperatures=[str(temperature) for temperature in _TEMPERATURES],
        )
    if fluid_name not in FLUIDS:
        raise UserError(f"--fluid {fluid_name}: not known; what is accepted is {', '.join(FLUIDS)}")
    fluid = FLUIDS[fluid_name]
    parameters = {
        "epsilon": f"{fluid.epsilon_over_k} K",
        "sigma": f"{fluid.sigma} angstrom",
        "mass": f"{fluid.mass} u",
    }
    scale = Scale(**{name: from_text(text, name, None) for name, text in parameters.items()})
    return _text(
        title=f"Isochore of liquid {fluid_name}",
        parameters=f"# {fluid.source},\n# fitted to the {fluid.fitted_to}.\n"
        + "\n".join(f'{name} = "{text}"' for name, text in parameters.items()),
        ideal=fluid.ideal_heat_capacity,
        density=f'"{_DENSITY * scale.factor("density"):.0f} kg/m3"',
        temperatures=[f'"{temperature * scale.factor("temperature"):.0f} K"' for temperature in _TEMPERATURES],
        time=f"            # {0.005e3 * scale.factor('time'):.3g} fs",
    )


def _text(*, title: str, parameters: str, ideal: float, density: str, temperatures: list[str], time: str = "") -> str:
    return _TEXT.format(
        title=title,
        parameters=parameters,
        ideal=ideal,
        density=density,
        temperatures=", ".join(temperatures),
        first=temperatures[0],
        last=temperatures[-1],
        time=time,
    )
