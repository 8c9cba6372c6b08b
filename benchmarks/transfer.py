"""Reweighting to states never sampled: coverage of its error bars against direct sampling, and where support ends.

Run: python benchmarks/transfer.py [--pairs 500] [--workers 2]
Pairs of a short ladder (108 particles, density 0.8, T 1.0 and 1.1, 20 000 steps each) and a run at the target itself.
Printed is how often both agree within 1.96 combined standard errors: at the targets asked for, and, for densities
farther and farther away, by the share of the samples that survives, which is what LEAST_SHARE rests on. Takes 15
minutes.
"""

from __future__ import annotations

import argparse
from concurrent.futures import ProcessPoolExecutor
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest

from canonry.estimation import settled
from canonry.targets import Target
from estimators import group
from estimators.canonical import rung_properties
from estimators.field import Field, field
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
FARTHER = (1.01, 1.014, 1.018, 1.022, 1.026, 0.99, 0.986, 0.98, 0.975, 0.97)
BINS = (0.0, 0.03, 0.06, 0.1, 0.15, 0.2, 0.3, 0.45, 0.65, 1.0)


Found = tuple[str, float, float, dict[str, float]]
"""Target, effective samples, share that survives, and deviations in combined standard errors by property."""


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


def pair(seed: int) -> list[Found]:
    """At every target, and at one farther away."""
    ladder = field([sampled(State(temperature, DENSITY, N), seed) for temperature in TEMPERATURES])
    wanted = {name: target.corresponding(N) for name, target in ASKED.items()}
    wanted |= {"farther": State(1.05, FARTHER[seed % len(FARTHER)] * DENSITY, N)}
    found: list[Found] = []
    for name, state in wanted.items():
        direct = rung_properties([sampled(state, 10_000 + seed)])
        there, share = _unrefused(ladder, state)
        deviations = {}
        for each in NAMES:
            difference = there.properties[each] - direct[each]
            deviations[each] = difference.value / difference.standard_error
        found.append((name, there.effective_samples, share, deviations))
    return found


def _unrefused(ladder: Field, state: State) -> tuple[Reweighted, float]:
    """What the samples say also where they are too few, and the share of the best rung's that survives."""
    (solved,) = ladder.groups
    shares = solved.seen(state.density, ladder.look).shares(state.temperature)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(group, "LEAST_SHARE", 0.0)
        patch.setattr("estimators.field.FEWEST_SAMPLES", 0.0)
        return ladder.at(state.temperature, state.density), max(shares)


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
    with ProcessPoolExecutor(options.workers) as pool:
        found = [each for several in pool.map(pair, range(options.pairs)) for each in several]
    print(f"{'pairs that agree within 1.96 combined errors, %':>47}  samples  share  {'  '.join(NAMES)}")
    for name in ASKED:
        show(name, [each for each in found if each[0] == name])
    for low, high in pairwise(BINS):
        rows = [each for each in found if low <= each[2] < high]
        if len(rows) >= 20:
            show(f"{len(rows)} of which {low:.0%} to {high:.0%} survive", rows)


def show(title: str, rows: list[Found]) -> None:
    """One line: medians of samples and share, coverage by property."""
    shares = "  ".join(coverage([each[3][key] for each in rows]).rjust(len(key)) for key in NAMES)
    samples, share = (np.median([each[k] for each in rows]) for k in (1, 2))
    print(f"{title:>47}  {samples:7.0f}  {share:5.2f}  {shares}")


if __name__ == "__main__":
    main()
