"""What sampling costs on this machine: step, growth with size, cores, start, memory, what is not computing.

Run: python benchmarks/sampler_speed.py [--yardstick FOLDER] [--windows 9]
About ten minutes on two cores. Steps are whole steps of Langevin dynamics (cutoff 3, sums recorded every 10 steps,
lists and random numbers included). What is compared is run in turn in one process, and ratios are medians of paired
windows: a shared machine drifts by more than the differences of interest.

--yardstick : adds a column for another sampler of the same dynamics: FOLDER/common.py with a class
    CSim(4, positions, velocities, box, cutoff, skin, time_step, friction, temperature) and its run(n_steps, every)
"""

from __future__ import annotations

import argparse
import importlib
import os
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import numpy as np
from scipy.spatial import cKDTree

from sampler import rung
from sampler.fluid import Fluid, State
from sampler.ladder import chains, sample, unfinished
from sampler.noise import chain_key
from sampler.pairs import pair_function, tabulated
from sampler.potentials import lennard_jones
from sampler.protocol import Protocol
from sampler.schemes import propagate, substeps
from sampler.start import first_positions, first_velocities
from sampler.store import COLUMNS

CUTOFF, TIME_STEP, FRICTION, EVERY = 3.0, 0.005, 2.0, 10
WINDOW = 1_000_000  # particle-steps of a window: a tenth of a second
LEAST_STEPS = 200


class Compiled:
    """The project's sampler."""

    def __init__(self, state: State, *, short: bool, table: bool = False) -> None:
        self.state, self.step, self.short = state, 0, short
        fluid = Fluid(cutoff=CUTOFF)
        r = np.linspace(0.7, CUTOFF + 0.05, 8000)
        self.pair = tabulated(r, lennard_jones.u(r), cutoff=CUTOFF) if table else pair_function(fluid)
        self.key = chain_key(1, state.temperature, state.density, 0)
        self.where, self.velocity = first_positions(fluid, state, self.key), first_velocities(state, self.key)

    def run(self, n_steps: int) -> None:
        propagate(
            self.pair,
            Fluid(cutoff=CUTOFF).sampled_weights,
            self.where,
            self.velocity,
            self.state.box,
            rung.skins(self.state),
            substeps("baoab", time_step=TIME_STEP, friction=FRICTION, temperature=self.state.temperature),
            self.short,
            self.key,
            self.step,
            n_steps,
            EVERY,
            n_steps,
            np.empty((n_steps // EVERY, len(COLUMNS))),
            np.empty((0, self.state.particles, 3)),
            np.zeros(2),
            np.zeros(1, np.uint8),
        )
        self.step += n_steps


class ByHand:
    """The same dynamics as one writes it with whole-array operations on a list of neighbouring pairs."""

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


class Outside:
    """A sampler from elsewhere."""

    def __init__(self, sampler: Callable[..., Any], start: Compiled) -> None:
        state = start.state
        self.other = sampler(
            4, start.where, start.velocity, state.box, CUTOFF, 0.45, TIME_STEP, FRICTION, state.temperature
        )

    def run(self, n_steps: int) -> None:
        self.other.run(n_steps, EVERY)


Sampler = Compiled | ByHand | Outside


def settled(state: State, **options: bool) -> Compiled:
    """A sampler past its start."""
    sampler = Compiled(state, **options)
    sampler.run(2000 if state.particles < 10_000 else 400)
    return sampler


def costs(samplers: Sequence[Sampler], particles: Sequence[int], windows: int) -> np.ndarray[Any, Any]:
    """Nanoseconds per particle-step, (windows, samplers), each window with all samplers in turn."""
    out = np.empty((windows, len(samplers)))
    for window in range(windows):
        for s, (sampler, n) in enumerate(zip(samplers, particles, strict=True)):
            share = 0.05 if isinstance(sampler, ByHand) else 1.0
            steps = max(2 if share < 1.0 else LEAST_STEPS, int(share * WINDOW / n) // EVERY * EVERY)
            start = time.perf_counter()
            sampler.run(steps)
            out[window, s] = (time.perf_counter() - start) / steps / n * 1e9
    return out


def step_table(outside: Callable[..., Any] | None, windows: int) -> None:
    """Cost of a step in both precisions beside a sampler written by hand and one from elsewhere."""
    names = ["mixed", "double", "table", "by hand", *(["outside"] if outside else [])]
    print("Cost of a step, ns per particle, and ratios of paired windows")
    ratios = ["hand/mixed", "hand/double", "table/mixed", *(["mixed/out", "double/out"] if outside else [])]
    print(f"{'T':>5} {'rho':>5} {'N':>6}", *(f"{name:>8}" for name in names), *(f"{name:>12}" for name in ratios))
    for temperature, density, sizes in (
        (1.0, 0.8, (500, 864, 4000, 32_000)),
        (1.5, 0.3, (500, 4000)),
        (1.5, 0.1, (500, 4000)),
    ):
        for n in sizes:
            state = State(temperature, density, n)
            mixed = settled(state, short=True)
            samplers: list[Sampler] = [mixed, settled(state, short=False), settled(state, short=True, table=True)]
            samplers += [ByHand(mixed), *([Outside(outside, mixed)] if outside else [])]
            found = costs(samplers, [n] * len(samplers), windows)
            pairs = [(3, 0), (3, 1), (2, 0), *([(0, 4), (1, 4)] if outside else [])]
            shown = [np.median(found[:, a] / found[:, b]) for a, b in pairs]
            print(
                f"{temperature:5g} {density:5g} {n:6d}",
                *(f"{value:8.0f}" for value in np.median(found, axis=0)),
                *(f"{value:12.2f}" for value in shown),
                flush=True,
            )


def growth_table(windows: int) -> None:
    """Exponent of the time of a step in the number of particles."""
    sizes = (500, 4000, 32_000, 100_000)
    print("\nGrowth with size at density 0.8: ns per particle-step and exponent of the time of a step")
    for short in (True, False):
        found = costs([settled(State(1.0, 0.8, n), short=short) for n in sizes], sizes, max(3, windows // 3))
        exponent = 1.0 + np.polyfit(np.log(sizes), np.log(np.median(found, axis=0)), 1)[0]
        numbers = ", ".join(f"N {n}: {value:.0f}" for n, value in zip(sizes, np.median(found, axis=0), strict=True))
        print(f"{'mixed' if short else 'double':>7}: {numbers}; exponent {exponent:.3f}", flush=True)


def ladder_seconds(workers: int, seed: int) -> tuple[float, float]:
    """Wall time of eight rungs of 500 particles with segments on disk, and the part spent in kernels by a worker."""
    inside = []

    def watched(*arguments: Any) -> Any:
        start = time.perf_counter()
        outcome = propagate(*arguments)
        inside.append(time.perf_counter() - start)
        return outcome

    rung.propagate = watched  # type: ignore[assignment]
    states = [State(1.0 + 0.05 * k, 0.8, 500) for k in range(8)]
    protocol = Protocol(seed=seed, equilibration=0, steps=16_000)
    with tempfile.TemporaryDirectory() as folder:
        work = [(chain, unfinished(chain)[0]) for chain in chains(Path(folder), Fluid(cutoff=CUTOFF), states, protocol)]
        start = time.perf_counter()
        sample(work, workers=workers)
        wall = time.perf_counter() - start
    rung.propagate = propagate
    return wall, sum(inside) / workers


def ladder_table(windows: int) -> None:
    """Eight rungs on one and on two cores."""
    found = np.array([(*ladder_seconds(1, seed), *ladder_seconds(2, seed)) for seed in range(max(3, windows // 2))])
    gain, outside = found[:, 0] / found[:, 2], 1.0 - found[:, 1] / found[:, 0]
    print("\nEight rungs of 500 particles, segments written to disk")
    print(f"  two workers over one: median {np.median(gain):.2f}, best {gain.max():.2f} times as fast")
    print(f"  not in kernels, one worker: median {np.median(outside):.1%}, least {outside.min():.1%}", flush=True)


SAMPLING = """
import time; start = time.perf_counter()
import pathlib, resource, tempfile
from sampler.fluid import Fluid, State
from sampler.ladder import chains, sample, unfinished
from sampler.protocol import Protocol
protocol = Protocol(equilibration=0, steps={steps}, record_every=10, frame_every={steps})
with tempfile.TemporaryDirectory() as folder:
    work = chains(pathlib.Path(folder), Fluid(), [State(1.0, 0.8, {particles})], protocol)
    sample([(chain, unfinished(chain)[0]) for chain in work])
print(time.perf_counter() - start, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)
"""
HELP = "from canonry.cli import main; main(['--help'])"


def in_a_new_process(code: str, **setting: str) -> list[str]:
    """The words that Python code prints."""
    run = [sys.executable, "-c", code]
    done = subprocess.run(run, env=os.environ | setting, check=True, capture_output=True, text=True)
    return done.stdout.split()


def start_table() -> None:
    """Seconds from import to the first step, without and with compiled kernels on disk; and of the help text."""
    first_step = SAMPLING.format(particles=500, steps=10)
    with tempfile.TemporaryDirectory() as folder:
        cold, *cached = (float(in_a_new_process(first_step, XDG_CACHE_HOME=folder)[0]) for _ in range(4))
    start = time.perf_counter()
    in_a_new_process(HELP)
    text = time.perf_counter() - start
    print("\nStart, seconds (where the system honours XDG_CACHE_HOME, the first has nothing compiled)")
    print(f"  import to first step {cold:.1f}, then {np.median(cached):.2f}; `canonry --help` {text:.2f}", flush=True)


def peak_memory(particles: int, steps: int) -> float:
    """Peak resident memory of sampling in a process of its own, kB; not less than this one's, which it forks from."""
    found = float(in_a_new_process(SAMPLING.format(particles=particles, steps=steps))[1])
    return found / (1.0 if sys.platform == "linux" else 1024.0)


def memory_table() -> None:
    """Memory per particle, and with the length of the run."""
    slope = (peak_memory(100_000, 100) - peak_memory(20_000, 100)) / 80_000
    longer = (peak_memory(500, 100_000) - peak_memory(500, 10_000)) / 1024.0
    print(f"Memory: {slope:.2f} kB per particle; {longer:+.1f} MB for a run ten times as long\n", flush=True)


def main() -> None:
    """Print the tables."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--yardstick", metavar="FOLDER")
    parser.add_argument("--windows", type=int, default=9)
    options = parser.parse_args()
    outside = None
    if options.yardstick:
        sys.path.append(options.yardstick)
        outside = importlib.import_module("common").CSim
    memory_table()
    step_table(outside, options.windows)
    growth_table(options.windows)
    ladder_table(options.windows)
    start_table()


if __name__ == "__main__":
    main()
