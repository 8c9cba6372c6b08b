"""What forces in float32 between samples change: averages, and the balance of heat.

Run: python benchmarks/precision.py [--minutes 3] [--steps 240] [--particles 500]
For each of three states (minutes each, on one core): from points along a trajectory in double precision a copy sets out
with float32 forces and the same noise. Until chaos parts them the difference of the two is due to the forces alone, and
its mean over many such windows shows a shift of u and P, as soon as the window is longer than their memory (0.1 to
0.3 time units), with errors far below those of two independent runs. The same windows give what the float32 forces
add to the drift of the conserved quantity K + U_dyn + heat.
"""

from __future__ import annotations

import argparse
import time
from typing import Any

import numpy as np

from sampler import rung
from sampler.fluid import Fluid, State
from sampler.noise import chain_key
from sampler.pairs import pair_function
from sampler.schemes import propagate, substeps
from sampler.start import first_positions, first_velocities
from sampler.store import COLUMNS

STATES = ((1.0, 0.8, 2.0), (1.5, 0.3, 1.0), (1.3, 0.95, 2.0))  # temperature, density, friction
TIME_STEP, EVERY, SETTLING = 0.005, 10, 4000
FLUID = Fluid(cutoff=3.0)


class Trajectory:
    """A trajectory that others can set out from."""

    def __init__(self, state: State, friction: float) -> None:
        self.state, self.step = state, 0
        self.key = chain_key(3, state.temperature, state.density, 0)
        self.where, self.velocity = first_positions(FLUID, state, self.key), first_velocities(state, self.key)
        self.steps = substeps("baoab", time_step=TIME_STEP, friction=friction, temperature=state.temperature)

    def run(self, n_steps: int, *, short: bool, copy: bool = False) -> Any:
        """u, P and the conserved quantity per particle, (3, samples); a copy leaves the trajectory where it is."""
        where, velocity = (self.where.copy(), self.velocity.copy()) if copy else (self.where, self.velocity)
        samples, heat = np.empty((n_steps // EVERY, len(COLUMNS))), np.zeros(2)
        frames, stop = np.empty((0, *where.shape)), np.zeros(1, np.uint8)
        propagate(
            pair_function(FLUID), FLUID.sampled_weights, where, velocity, self.state.box, rung.skins(self.state),
            self.steps, short, self.key, self.step, n_steps, EVERY, n_steps, samples, frames, heat, stop,
        )  # fmt: skip
        self.step += 0 if copy else n_steps
        totals, n = FLUID.totals(samples, self.state), self.state.particles
        conserved = totals.sampled_energy + samples[:, 6:10].sum(axis=1)  # heat and kinetic energy
        return np.array([totals.energy / n, totals.virial / self.state.volume, conserved / n])


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--minutes", type=float, default=3.0)
    parser.add_argument("--steps", type=int, default=240)
    parser.add_argument("--particles", type=int, default=500)
    options = parser.parse_args()
    for temperature, density, friction in STATES:
        trajectory = Trajectory(State(temperature, density, options.particles), friction)
        trajectory.run(SETTLING, short=False)
        differences, end = [], time.monotonic() + 60.0 * options.minutes
        while time.monotonic() < end:
            mixed = trajectory.run(options.steps, short=True, copy=True)
            differences.append(mixed - trajectory.run(options.steps, short=False))
        mean, error = np.mean(differences, axis=0), np.std(differences, axis=0) / np.sqrt(len(differences))
        steps = len(differences) * options.steps
        print(f"T {temperature:g}, rho {density:g}: {len(differences)} windows, {steps:.2g} steps, mixed less double")
        for k in np.linspace(0, options.steps // EVERY - 1, 7).astype(int)[1:]:
            parts = (f"{name} {mean[c, k]:+.1e}({error[c, k]:.0e})" for c, name in enumerate(("u", "P", "conserved")))
            print(f"  after {(k + 1) * EVERY * TIME_STEP:.2f}: ", ", ".join(parts), flush=True)


if __name__ == "__main__":
    main()
