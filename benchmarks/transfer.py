"""Reweighting to states never sampled: coverage of its error bars against direct sampling, and where support ends.

Run: python benchmarks/transfer.py [--pairs 500] [--workers 2]
Pairs of a short ladder (108 particles, density 0.8, T 1.0 and 1.1, 20 000 steps each) and a run at the target itself.
Printed is how often both agree within 1.96 combined standard errors: at the targets asked for, and, for densities
farther and farther away, by effective samples, which is what the threshold of 50 rests on. Takes 15 minutes.
"""

from __future__ import annotations

import argparse
from collections import defaultdict
from concurrent.futures import ProcessPoolExecutor
from itertools import pairwise
from pathlib import Path

import numpy as np

from canonry.estimation import settled
from canonry.targets import Target
from estimators.canonical import rung_properties
from estimators.field import field
from estimators.reweight import Reweighted
from sampler.fluid import Fluid, State
from sampler.protocol import Protocol
from sampler.rung import advance, assemble
from sampler.series import Series
from sampler.store import Chain, Segment

N, DENSITY, TEMPERATURES = 108, 0.8, (1.0, 1.1)
FLUID = Fluid(cutoff=2.5)
NAMES = ("residual_energy", "pressure", "residual_heat_capacity", "thermal_pressure", "bulk_modulus")
ASKED = {
    "T +5 %": Target(1.05 * 1.1, DENSITY),
    "epsilon +2 %": Target(1.05, DENSITY, epsilon=1.02),
    "rho +0.5 %": Target(1.05, 1.005 * DENSITY),
    "sigma +0.3 %": Target(1.05, DENSITY, sigma=1.003),
    "rho +0.5 %, T -3 %": Target(0.97, 1.005 * DENSITY),
}
FARTHER = (1.015, 1.02, 1.025, 1.03, 1.035)
BINS = (0.0, 10.0, 20.0, 35.0, 50.0, 75.0, 120.0, 250.0, 1e9)


def sampled(state: State, seed: int, steps: int = 20_000) -> Series:
    """One settled repeat."""
    chain = Chain(Path(), FLUID, state, Protocol(seed=seed, equilibration=2000, steps=steps), 0)
    segments: list[Segment] = []
    before = None
    for index, (first, _) in enumerate(chain.segments):
        before = advance(chain, index, before, np.zeros(1, np.uint8))
        if before is not None and first >= chain.protocol.settling:
            segments.append(before)
    return settled(assemble(chain, segments))


def pair(seed: int) -> list[tuple[str, float, dict[str, float]]]:
    """Target, effective samples and deviations in combined standard errors by property; of states with support."""
    ladder = field([sampled(State(temperature, DENSITY, N), seed) for temperature in TEMPERATURES])
    wanted = {name: target.corresponding(N) for name, target in ASKED.items()}
    wanted |= {"farther": State(1.05, FARTHER[seed % len(FARTHER)] * DENSITY, N)}
    found = []
    for name, state in wanted.items():
        direct = rung_properties([sampled(state, 10_000 + seed)])
        there = _unrefused(ladder, state)
        deviations = {}
        for each in NAMES:
            difference = there.properties[each] - direct[each]
            deviations[each] = difference.value / difference.standard_error
        found.append((name, there.effective_samples, deviations))
    return found


def _unrefused(ladder, state: State) -> Reweighted:  # type: ignore[no-untyped-def]
    """What the samples say also where they are too few."""
    import estimators.field

    estimators.field.FEWEST_SAMPLES = 0.0
    return ladder.at(state.temperature, state.density)


def coverage(deviations: list[float]) -> str:
    """Share within 1.96, with its standard error, in per cent."""
    share = float(np.mean(np.abs(deviations) < 1.96))
    return f"{100 * share:5.1f}({100 * np.sqrt(share * (1 - share) / len(deviations)):.1f})"


def main() -> None:
    """Print both tables."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--pairs", type=int, default=500)
    parser.add_argument("--workers", type=int, default=2)
    options = parser.parse_args()
    by_target: dict[str, list[tuple[float, dict[str, float]]]] = defaultdict(list)
    with ProcessPoolExecutor(options.workers) as pool:
        for found in pool.map(pair, range(options.pairs)):
            for name, samples, deviations in found:
                by_target[name].append((samples, deviations))
    print(f"{'pairs that agree within 1.96 combined errors, %':>42}  samples  {'  '.join(NAMES)}")
    for name in ASKED:
        rows = by_target[name]
        shares = "  ".join(coverage([each[key] for _, each in rows]).rjust(len(key)) for key in NAMES)
        print(f"{name:>42}  {np.median([samples for samples, _ in rows]):7.0f}  {shares}")
    every = [row for rows in by_target.values() for row in rows]
    for low, high in pairwise(BINS):
        rows = [row for row in every if low <= row[0] < high]
        if len(rows) >= 20:
            shares = "  ".join(coverage([each[key] for _, each in rows]).rjust(len(key)) for key in NAMES)
            print(f"{f'effective samples {low:g} to {high:g}':>42}  {len(rows):7d}  {shares}")


if __name__ == "__main__":
    main()
