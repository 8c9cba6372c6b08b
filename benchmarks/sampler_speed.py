"""Cost of a step of the sampler beside a sampler written by hand with NumPy, both timed in turn in one process.

Run: python benchmarks/sampler_speed.py [--particles 500 4000] [--density 0.8] [--windows 9]
Prints nanoseconds per particle-step (medians over windows) and the median of the paired ratios; sums are recorded every
10 steps, list building, random numbers and recording are included. Below a minute.
"""

from __future__ import annotations

import argparse
import time

import numpy as np
from scipy.spatial import cKDTree

from sampler.fluid import Fluid, State
from sampler.noise import chain_key
from sampler.pairs import pair_function
from sampler.schemes import COLUMNS, propagate, substeps
from sampler.start import first_positions, first_velocities

CUTOFF, TIME_STEP, FRICTION, EVERY = 3.0, 0.005, 2.0, 10


class Compiled:
    """The project's sampler."""

    def __init__(self, state: State) -> None:
        self.state, self.step = state, 0
        self.fluid = Fluid(cutoff=CUTOFF)
        self.key = chain_key(1, state.temperature, state.density, 0)
        self.where, self.velocity = first_positions(self.fluid, state, self.key), first_velocities(state, self.key)

    def run(self, n_steps: int) -> None:
        temperature = self.state.temperature
        propagate(
            pair_function(self.fluid),
            self.where,
            self.velocity,
            self.state.box,
            (0.2, 0.9),
            substeps("baoab", time_step=TIME_STEP, friction=FRICTION, temperature=temperature),
            self.key,
            self.step,
            n_steps,
            EVERY,
            n_steps,
            np.empty((n_steps // EVERY, len(COLUMNS))),
            np.empty((0, self.state.particles, 3)),
            np.zeros(1),
            np.zeros(1, np.uint8),
        )
        self.step += n_steps


class ByHand:
    """The same dynamics with whole-array operations on a list of neighbouring pairs."""

    SKIN = 0.4

    def __init__(self, start: Compiled) -> None:
        self.box, self.temperature = start.state.box, start.state.temperature
        self.where, self.velocity = start.where.copy(), start.velocity.copy()
        self.random = np.random.default_rng(1)
        self._list()
        self._evaluate()

    def _list(self) -> None:
        self.where %= self.box
        self.where[self.where >= self.box] = 0.0
        self.listed_at = self.where.copy()
        tree = cKDTree(self.where, boxsize=self.box)
        self.pairs = tree.query_pairs(CUTOFF + self.SKIN, output_type="ndarray")

    def _evaluate(self) -> None:
        first, second = self.pairs.T
        apart = self.where[first] - self.where[second]
        apart -= self.box * np.rint(apart / self.box)
        square = np.einsum("ij,ij->i", apart, apart)
        inside = square < CUTOFF**2
        first, second, apart, square = first[inside], second[inside], apart[inside], square[inside]
        sixth = square**-3.0
        pull = (sixth * (48.0 * sixth - 24.0) / square)[:, None] * apart
        n = len(self.where)
        self.sums = (sixth * sixth).sum(), sixth.sum()
        self.force = np.column_stack(
            [np.bincount(first, pull[:, c], n) - np.bincount(second, pull[:, c], n) for c in range(3)]
        )

    def run(self, n_steps: int) -> None:
        kept = np.exp(-FRICTION * TIME_STEP)
        width = np.sqrt((1.0 - kept * kept) * self.temperature)
        for _ in range(n_steps):
            self.velocity += 0.5 * TIME_STEP * self.force
            self.where += 0.5 * TIME_STEP * self.velocity
            self.velocity = kept * self.velocity + width * self.random.standard_normal(self.velocity.shape)
            self.where += 0.5 * TIME_STEP * self.velocity
            if ((self.where - self.listed_at) ** 2).sum(axis=1).max() > (0.5 * self.SKIN) ** 2:
                self._list()
            self._evaluate()
            self.velocity += 0.5 * TIME_STEP * self.force


def seconds(run: Compiled | ByHand, n_steps: int) -> float:
    """Wall time of some steps."""
    start = time.perf_counter()
    run.run(n_steps)
    return time.perf_counter() - start


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--particles", type=int, nargs="+", default=[500, 4000])
    parser.add_argument("--density", type=float, default=0.8)
    parser.add_argument("--temperature", type=float, default=1.0)
    parser.add_argument("--windows", type=int, default=9)
    options = parser.parse_args()
    print(f"{'particles':>9} {'compiled, ns':>12} {'by hand, ns':>12} {'by hand / compiled':>18}")
    for n in options.particles:
        ours = Compiled(State(options.temperature, options.density, n))
        ours.run(2000)
        hand = ByHand(ours)
        steps = max(EVERY, 400_000 // n // EVERY * EVERY)
        few = max(2, 30_000 // n)
        pairs = np.array([(seconds(ours, steps) / steps, seconds(hand, few) / few) for _ in range(options.windows)])
        a, b = np.median(pairs, axis=0) / n * 1e9
        print(f"{n:9d} {a:12.0f} {b:12.0f} {np.median(pairs[:, 1] / pairs[:, 0]):18.1f}")


if __name__ == "__main__":
    main()
