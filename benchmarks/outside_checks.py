"""Heat capacity, thermal pressure and chemical potential beside values that were found elsewhere.

Run: python benchmarks/outside_checks.py [--effort 2e8] [--workers 2]
500 particles, `effort` particle-steps a state. c_v and gamma_V at ten states against molecular dynamics at constant
energy, differentiated along isochores; the residual chemical potential by test insertion at three against an equation
of state. Printed are values, standard errors and deviations in combined ones. Takes a quarter of an hour.
"""

from __future__ import annotations

import argparse
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

import numpy as np

from canonry.budget import finite_size
from canonry.estimation import settled
from estimators.canonical import rung_properties
from estimators.insertion import insertion
from reference import find
from sampler.fluid import Fluid, State
from sampler.protocol import Protocol
from sampler.rung import advance, assemble
from sampler.series import Series
from sampler.store import Chain

N = 500
FLUID = Fluid(cutoff=4.0)
DYNAMICS_ERROR = 0.005
DYNAMICS = (
    # density, temperature, c_v,res, gamma_V; computed by differentiating U(T) and P(T) of G. Chaparro, E. A. Mueller,
    # J. Chem. Phys. 158, 184505 (2023) along isochores; good to 0.005
    (0.1, 1.999781, 0.10547, 0.12157),
    (0.3, 1.800045, 0.28198, 0.52323),
    (0.4, 1.999763, 0.26723, 0.84103),
    (0.5, 1.699953, 0.35334, 1.32310),
    (0.6, 1.699941, 0.42827, 1.99267),
    (0.7, 1.299952, 0.61169, 3.11641),
    (0.7, 1.500020, 0.58277, 2.99539),
    (0.8, 1.199904, 0.83498, 4.56256),
    (0.8, 1.599978, 0.75992, 4.14154),
    (0.95, 1.599969, 1.12739, 6.49489),
)
INSERTED = ((0.3, 2.0, 200), (0.5, 1.6, 200), (0.7, 1.1, 100))  # density, temperature, steps from frame to frame
EQUATION = "thol-2016"


def sampled(state: State, effort: float, *, frame_every: int) -> Series:
    """One settled repeat."""
    steps = round(effort / state.particles / frame_every) * frame_every
    protocol = Protocol(seed=5, equilibration=10_000, steps=steps, frame_every=frame_every)
    chain = Chain(Path(), FLUID, state, protocol, 0)
    segments, before = [], None
    for index, (first, _) in enumerate(chain.segments):
        before = advance(chain, index, before, np.zeros(1, np.uint8))
        if before is not None and first >= protocol.settling:
            segments.append(before)
    return settled(assemble(chain, segments))


def fluctuations(argument: tuple[tuple[float, float, float, float], float]) -> str:
    """One line: c_v,res and gamma_V at a state, what a closed box is known to shift taken off."""
    (density, temperature, *known), effort = argument
    state = State(temperature, density, N)
    found = rung_properties([sampled(state, effort, frame_every=10_000)])
    shifts = finite_size(state, find(EQUATION))
    cells = []
    for name, value in zip(("residual_heat_capacity", "thermal_pressure"), known, strict=True):
        estimate = found[name] - shifts[name]
        z = (estimate.value - value) / np.hypot(estimate.standard_error, DYNAMICS_ERROR)
        cells.append(f"{estimate.value:9.4f} {estimate.standard_error:7.4f} {value:9.4f} {z:+6.2f}")
    return f"{density:7g} {temperature:6.3f} {'  '.join(cells)}"


def potentials(argument: tuple[tuple[float, float, int], float]) -> str:
    """One line: the residual chemical potential at a state."""
    (density, temperature, frame_every), effort = argument
    found = insertion([sampled(State(temperature, density, N), effort, frame_every=frame_every)])
    if found is None:
        return f"{density:7g} {temperature:6.3f} no room for a particle"
    estimate = found.chemical_potential
    value = find(EQUATION).value("residual_chemical_potential", temperature=temperature, density=density).value
    z = (estimate.value - value) / estimate.standard_error
    return (
        f"{density:7g} {temperature:6.3f} {estimate.value:9.4f} {estimate.standard_error:7.4f} {value:9.4f} {z:+6.2f}  "
        f"{found.trust}"
    )


def main() -> None:
    """Print both tables."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--effort", type=float, default=2e8)
    parser.add_argument("--workers", type=int, default=2)
    options = parser.parse_args()
    with ProcessPoolExecutor(options.workers) as pool:
        print("density      T   c_v,res   error  dynamics      z    gamma_V   error  dynamics      z")
        for line in pool.map(fluctuations, [(row, options.effort) for row in DYNAMICS]):
            print(line, flush=True)
        print(f"\ndensity      T    mu_res   error  {EQUATION}   z (error of the equation aside)")
        for line in pool.map(potentials, [(row, 0.2 * options.effort) for row in INSERTED]):
            print(line, flush=True)


if __name__ == "__main__":
    main()
