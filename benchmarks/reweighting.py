"""Reweighted curves of u, c_v and P: cost and error bars beside pymbar, on a harmonic system known exactly.

Run: python benchmarks/reweighting.py [--bootstraps 200] [--samples 4000] [--long 1000000] [--replicas 1000]
Prints (1) the curve from 8 rungs of correlated samples at 60 temperatures beside block bootstraps refitted with pymbar,
both timed in this process; (2) time and memory of the same curve from long series, in a process of its own; (3) errors
of independent samples beside pymbar's asymptotic ones; (4) coverage of nominal 95 % intervals between rungs and beside
them. Below ten minutes on two cores, nearly all of it the bootstraps.
"""

from __future__ import annotations

import argparse
import logging
import math
import multiprocessing
import resource
import time
from collections.abc import Callable, Iterator, Sequence

import numpy as np
import numpy.typing as npt
from scipy.signal import lfilter

from estimators.estimate import Estimate
from estimators.gamma import scatter
from estimators.reweight import Reweighted, pool
from sampler.fluid import Fluid, State
from sampler.series import Series

Floats = npt.NDArray[np.float64]

PARTICLES, DENSITY = 8, 0.5
RUNGS = 1.25 ** np.arange(8.0)
GRID = np.linspace(RUNGS[0], RUNGS[-1], 60)
MEMORY = 0.8  # of each mode; its energy forgets with the square of it, autocorrelation time 2.3 samples
RUNS = 5  # of ours, spread over the time that the bootstraps take, as other work on the machine comes and goes
BLOCK = 100  # samples of a bootstrap's block
NAMES = ("residual_energy", "residual_heat_capacity", "pressure")
EXACT: dict[str, Callable[[float], float]] = {
    "residual_energy": lambda t: 1.875 * t,
    "residual_heat_capacity": lambda t: 1.875,
    "pressure": lambda t: 0.65 * t,
}


def harmonic(rng: np.random.Generator, temperature: float, samples: int, *, memory: float = MEMORY) -> Series:
    """3N autoregressive Gaussian modes of energy U_dyn; of the half with energy H: U = U_dyn + H/2, W = 0.4 H."""
    half, whole, nothing = np.zeros(samples), np.zeros(samples), np.zeros(samples)
    for mode in range(3 * PARTICLES):
        noise = rng.standard_normal(samples)
        noise[1:] *= math.sqrt(1.0 - memory**2)
        energies = 0.5 * temperature * lfilter([1.0], [1.0, -memory], noise) ** 2
        whole += energies
        if mode % 2:
            half += energies
    state = State(temperature, DENSITY, PARTICLES)
    recorded = (whole + 0.5 * half, whole, 0.4 * half, 0.8 * half, nothing, nothing)
    return Series(Fluid(cutoff=1.0), state, 0, True, 1.0, *recorded, frames=np.zeros((0, PARTICLES, 3)), frame_stride=1)


def ladder(seed: int, samples: int, *, memory: float = MEMORY) -> list[Series]:
    rng = np.random.default_rng(seed)
    return [harmonic(rng, float(temperature), samples, memory=memory) for temperature in RUNGS]


def our_curve(series: Sequence[Series]) -> tuple[list[Reweighted], Floats]:
    """The curve and its standard errors, (properties, temperatures)."""
    curve = pool(series).curve(GRID.tolist())
    return curve, np.array([[each.properties[name].standard_error for each in curve] for name in NAMES])


class Theirs:
    """pymbar's solution for some samples of the ladder, and the curve from it."""

    def __init__(self, recorded: Floats, start: Floats | None = None, **tolerance: float) -> None:
        from pymbar import MBAR

        self.energy, self.sampled, self.virial = recorded.reshape(3, -1)
        beta, counts = 1.0 / RUNGS, [recorded.shape[2]] * len(RUNGS)
        reduced = np.multiply.outer(beta, self.sampled)
        self.mbar = MBAR(reduced, counts, initial_f_k=start, **tolerance)

    def curve(self) -> Floats:
        """Averages by pymbar's own calls, (properties, temperatures)."""
        observables = np.stack([self.energy, self.sampled, self.energy * self.sampled, self.virial])
        found = [
            self.mbar.compute_multiple_expectations(observables, self.sampled / temperature, compute_uncertainty=False)
            for temperature in GRID
        ]
        return _properties(np.array([each["mu"] for each in found]).T)

    def curve_by_hand(self) -> Floats:
        """The same from pymbar's free energies, all temperatures in one matrix."""
        offsets = self.mbar.f_k + np.log(self.mbar.N_k)
        exponents = offsets[:, None] - np.multiply.outer(1.0 / RUNGS, self.sampled)
        top = np.max(exponents, axis=0)
        log_density = top + np.log(np.sum(np.exp(exponents - top), axis=0))
        logs = -np.multiply.outer(1.0 / GRID, self.sampled) - log_density
        weights = np.exp(logs - np.max(logs, axis=1)[:, None])
        observables = np.stack([self.energy, self.sampled, self.energy * self.sampled, self.virial])
        return _properties((weights @ observables.T / np.sum(weights, axis=1)[:, None]).T)


def _properties(means: Floats) -> Floats:
    energy, sampled, product, virial = means
    heat_capacity = (product - energy * sampled) / (PARTICLES * GRID**2)
    return np.stack([energy / PARTICLES, heat_capacity, DENSITY * (GRID + virial / PARTICLES)])


def _resampled(recorded: Floats, rng: np.random.Generator) -> Floats:
    """Blocks drawn with replacement within every rung; recorded : (columns, K, n)."""
    length = recorded.shape[2]
    drawn = []
    for rung in range(recorded.shape[1]):
        starts = rng.integers(0, length - BLOCK + 1, -(-length // BLOCK))
        drawn.append(recorded[:, rung, (starts[:, None] + np.arange(BLOCK)).ravel()[:length]])
    return np.stack(drawn, axis=1)


def beside_bootstraps(samples: int, bootstraps: int) -> Iterator[str]:
    series = ladder(1, samples)
    our_curve(ladder(2, 500))
    recorded = np.array([[getattr(s, name) for s in series] for name in ("energy", "sampled_energy", "virial")])
    rng = np.random.default_rng(3)
    clock = np.zeros(3)
    full = Theirs(recorded, relative_tolerance=1e-13)
    replicas, gap, ours = [], 0.0, []
    for bootstrap in range(bootstraps):
        if bootstrap % -(-bootstraps // RUNS) == 0:
            started = time.perf_counter()
            curve, errors = our_curve(series)
            ours.append(time.perf_counter() - started)
        marks = [time.perf_counter()]
        one = Theirs(_resampled(recorded, rng), full.mbar.f_k)
        marks.append(time.perf_counter())
        replicas.append(one.curve())
        marks.append(time.perf_counter())
        gap = max(gap, float(np.max(np.abs(one.curve_by_hand() / replicas[-1] - 1.0))))
        marks.append(time.perf_counter())
        clock += np.diff(marks)
    values = np.array([[each.properties[name].value for each in curve] for name in NAMES])
    values[1] *= [1.0 - 1.0 / each.effective_samples for each in curve]
    refits, averages, by_hand = clock
    seconds = float(np.mean(ours))
    yield f"ours {seconds:.3f} s (mean of {len(ours)})"
    yield f"pymbar's {bootstraps} bootstraps: refits {refits:.1f} s, averages {averages:.1f} s"
    yield f"  so many times faster: {(refits + averages) / seconds:.0f}"
    yield f"  with averages by hand ({by_hand:.1f} s, the same to {gap:.0e}): {(refits + by_hand) / seconds:.0f}"
    yield f"  largest relative difference of values: {np.max(np.abs(values / full.curve() - 1.0)):.1e}"
    yield "  (heat capacities without our removal of the bias, which the bootstrapped ones keep)"
    ratios = errors / np.std(replicas, axis=0, ddof=1)
    for name, ratio in zip(NAMES, ratios, strict=True):
        yield (
            f"  standard error over bootstrap's, {name}: median {np.median(ratio):.3f}, "
            f"range {np.min(ratio):.3f} to {np.max(ratio):.3f}"
        )
    yield f"  (the bootstrap's own noise is {1.0 / math.sqrt(2.0 * bootstraps):.3f})"


def _long(samples: int) -> tuple[float, float, float]:
    series = ladder(4, samples)
    made = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
    started = time.perf_counter()
    our_curve(series)
    return time.perf_counter() - started, made, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6


def long_series(samples: int) -> Iterator[str]:
    with multiprocessing.get_context("spawn").Pool(1) as processes:
        seconds, made, peak = processes.apply(_long, (samples,))
    yield f"8 rungs of {samples} samples: {seconds:.1f} s, at most {peak:.2f} GB, of which the samples {made:.2f} GB"


def _independent_error(estimate: Estimate) -> float:
    """Standard error without a window."""
    repeats = estimate.influence.values()
    return math.sqrt(sum(scatter([values], window=0).variance for values in repeats))


def beside_asymptotic(samples: int) -> Iterator[str]:
    series = ladder(5, samples, memory=0.0)
    recorded = np.array([[getattr(s, name) for s in series] for name in ("energy", "sampled_energy", "virial")])
    theirs = Theirs(recorded, relative_tolerance=1e-13)
    targets = GRID[3::9]
    ratios = []
    for each in pool(series).curve(targets.tolist()):
        temperature = each.temperature
        reduced = theirs.sampled / temperature
        plain = np.stack([theirs.energy, theirs.sampled])
        energy, sampled = theirs.mbar.compute_multiple_expectations(plain, reduced)["mu"]
        product = (theirs.energy - energy) * (theirs.sampled - sampled) / temperature**2
        observables = np.stack([theirs.energy, product, DENSITY * theirs.virial]) / PARTICLES
        sigmas = theirs.mbar.compute_multiple_expectations(observables, reduced)["sigma"]
        estimates = [each.properties[name] for name in NAMES]
        ratios.append(
            [(_independent_error(e) / s, e.standard_error / s) for e, s in zip(estimates, sigmas, strict=True)]
        )
    known, found = np.moveaxis(np.array(ratios), 2, 0)
    for words, ratio in (("known to be independent", known), ("window from the data", found)):
        yield f"standard error over pymbar's, {words}: {np.min(ratio):.3f} to {np.max(ratio):.3f}"


def coverage(replicas: int) -> Iterator[str]:
    plan = [(1.0, 1200), (1.3, 700), (1.7, 1600), (2.2, 1000)]
    targets = (1.15, 1.3, 1.5, 2.0, 2.3)
    rng = np.random.default_rng(6)
    found = np.empty((replicas, len(targets), len(NAMES), 3))
    for replica in range(replicas):
        pooled = pool([harmonic(rng, temperature, samples) for temperature, samples in plan])
        for index, each in enumerate(pooled.curve(targets)):
            for row, name in enumerate(NAMES):
                estimate = each.properties[name]
                deviation = estimate.value - EXACT[name](each.temperature)
                found[replica, index, row] = deviation, estimate.standard_error, estimate.trust == "ok"
    for index, temperature in enumerate(targets):
        for row, name in enumerate(NAMES):
            deviations, errors, ok = found[:, index, row].T
            spread = np.std(deviations, ddof=1)
            yield (
                f"T {temperature:g} {name:22s} covered {np.mean(np.abs(deviations) < 1.96 * errors):.1%}, "
                f"median error over scatter {np.median(errors) / spread:.3f}, "
                f"bias over scatter {np.mean(deviations) / spread:+.3f}, ok {np.mean(ok):.1%}"
            )
    yield f"(noise: coverage {math.sqrt(0.05 * 0.95 / replicas):.1%}, bias {1.0 / math.sqrt(replicas):.3f})"


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--bootstraps", type=int, default=200)
    parser.add_argument("--samples", type=int, default=4000)
    parser.add_argument("--long", type=int, default=1_000_000)
    parser.add_argument("--replicas", type=int, default=1000)
    asked = parser.parse_args()
    logging.getLogger("pymbar").setLevel(logging.CRITICAL)
    for title, lines in (
        (
            f"Curve of {len(GRID)} temperatures from {len(RUNGS)} rungs of {asked.samples} samples",
            beside_bootstraps(asked.samples, asked.bootstraps),
        ),
        ("Long series", long_series(asked.long)),
        ("Independent samples", beside_asymptotic(asked.samples)),
        (f"Nominal 95 % intervals, {asked.replicas} replicas", coverage(asked.replicas)),
    ):
        print(title)
        for line in lines:
            print(f"  {line}", flush=True)


if __name__ == "__main__":
    main()
