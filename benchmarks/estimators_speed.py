"""The estimators on long series and large boxes: seconds and memory of what `canonry estimate` does.

Run: python benchmarks/estimators_speed.py [--samples 1000000] [--frames 500]
Prints (1) time and peak memory of `canonry estimate` on a study directory of 8 rungs of N = 500, whose segments are
made up rather than sampled: canonical ensembles of a fluid of constant heat capacity, a frame to 4000 samples; (2) the
same of g(r) from frames of N = 4000. Each is done three times, in a process of its own; given are median and range.
Below five minutes on two cores, with 1 GB in the folder for temporary files.
"""

from __future__ import annotations

import argparse
import math
import multiprocessing
import resource
import statistics
import sys
import tempfile
import time
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.signal import lfilter

from canonry.directory import claim, load
from sampler import store
from sampler.fluid import Fluid, State
from sampler.ladder import chains
from sampler.series import Series

Floats = npt.NDArray[np.float64]

RUNS = 3
STUDY = """
title = "Made-up segments"
[fluid]
potential = "lennard-jones"
truncation = "corrected"
ideal_heat_capacity = 1.5
[state]
density = 0.8
temperatures = [1.00, 1.07, 1.15, 1.23, 1.32, 1.41, 1.51, 1.62]
particles = 500
[sampling]
repeats = 1
equilibration = 0
steps = {steps}
record_every = {record_every}
frame_every = {frame_every}
[compare]
against = ["thol-2016"]
"""
RECORD_EVERY = 10
FRAME_EVERY = 40_000
GROUND, HEAT_CAPACITY = -6.6, 0.9  # U/N = GROUND + HEAT_CAPACITY T
MEMORIES = (0.9, 0.99)  # of the two equal parts of the energy's fluctuation; autocorrelation times 10 and 100 samples


def correlated(rng: np.random.Generator, samples: int, memory: float) -> Floats:
    """Stationary autoregressive normals, (samples,)."""
    noise = rng.standard_normal(samples) * math.sqrt(1.0 - memory**2)
    noise[0] /= math.sqrt(1.0 - memory**2)
    return np.asarray(lfilter([1.0], [1.0, -memory], noise))


def gamma_like(normals: Floats, shape: float) -> Floats:
    """Variables of a gamma distribution from normal ones: E. B. Wilson, M. M. Hilferty, PNAS 17, 684 (1931)."""
    return np.asarray(shape * (1.0 - 1.0 / (9.0 * shape) + normals / (3.0 * math.sqrt(shape))) ** 3)


def samples_of(rng: np.random.Generator, state: State, samples: int) -> Floats:
    """What a kernel records, (samples, 15): the energy E has the density E^(C - 1) exp(-E/T) above its ground."""
    particles, temperature = state.particles, state.temperature
    normals = sum(correlated(rng, samples, each) for each in MEMORIES) / math.sqrt(len(MEMORIES))
    energy = temperature * gamma_like(np.asarray(normals), HEAT_CAPACITY * particles)
    virial = -3.0 * particles + 4.0 * energy + 30.0 * correlated(rng, samples, 0.8)
    energy += GROUND * particles
    kinetic = temperature * gamma_like(correlated(rng, samples, 0.9), 1.5 * particles)
    twelfth = (virial - 2.0 * energy) / 8.0  # U = 4 S12 - 4 S6, W = 16 S12 - 8 S6
    sixth = twelfth - 0.25 * energy
    ledger = 1e-3 * np.cumsum(rng.standard_normal(samples)) - kinetic - energy
    pairs = np.full(samples, 26.0 * particles)
    third, momentum, none = kinetic[:, None] / 3.0, rng.standard_normal((samples, 3)), np.zeros((samples, 2))
    return np.column_stack(
        [twelfth, sixth, pairs, 2.0 * pairs, kinetic, kinetic, ledger, third, third, third, momentum, none]
    )


def frames_of(rng: np.random.Generator, state: State, frames: int) -> Floats:
    """Jittered lattices, (frames, particles, 3)."""
    side = math.ceil(round(state.particles ** (1.0 / 3.0), 9))
    cells = np.stack(np.meshgrid(*[np.arange(side)] * 3, indexing="ij"), axis=-1).reshape(-1, 3)[: state.particles]
    jitter = rng.uniform(-0.1, 0.1, (frames, state.particles, 3))
    return np.asarray(np.mod((cells + 0.5 + jitter) * state.box / side, state.box))


def write_study(directory: Path, samples: int, *, frame_every: int = FRAME_EVERY) -> None:
    """A study directory whose segments all are there."""
    file = directory.with_suffix(".toml")
    file.write_text(STUDY.format(steps=samples * RECORD_EVERY, record_every=RECORD_EVERY, frame_every=frame_every))
    study = load(file)
    claim(study, directory)
    rng = np.random.default_rng(1)
    for chain in chains(directory, study.fluid, study.states, study.sampling):
        recorded = samples_of(rng, chain.state, samples)
        for index, (first, last) in enumerate(chain.segments):
            frames = frames_of(rng, chain.state, (last - first) // study.sampling.frame_every)
            part = recorded[first // RECORD_EVERY : last // RECORD_EVERY]
            where = frames_of(rng, chain.state, 1)[0]
            segment = store.Segment(first, last, part, frames, where, np.zeros_like(where), 0.0)
            store.write(chain.path(index), segment, chain.identity)


def estimate(directory: str) -> float:
    """Seconds, with the loading of libraries."""
    started = time.perf_counter()
    from canonry.job import estimate

    estimate(directory)
    return time.perf_counter() - started


def structure(frames: int) -> float:
    """Seconds, once libraries are loaded and kernels compiled."""
    from estimators.structure import pair_structure

    state, nothing = State(1.0, 0.8, 4000), [np.zeros(frames)] * 6
    positions = frames_of(np.random.default_rng(2), state, frames)
    series = Series(Fluid(), state, 0, True, 1.0, *nothing, frames=positions, frame_stride=1)
    pair_structure([replace(series, frames=positions[:1])])
    started = time.perf_counter()
    pair_structure([series])
    return time.perf_counter() - started


def _cost(function: Callable[[Any], float], argument: str | int) -> tuple[float, float]:
    """Seconds of a call, and the peak memory of the whole process in GB."""
    seconds = function(argument)
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * (1.0 if sys.platform == "darwin" else 1024.0)
    return seconds, peak / 1e9


def cost(function: Callable[[Any], float], argument: str | int) -> str:
    """Of several calls, each in a new process that has nothing loaded."""
    costs = []
    for _ in range(RUNS):
        with multiprocessing.get_context("spawn").Pool(1) as processes:
            costs.append(processes.apply(_cost, (function, argument)))
    seconds, peaks = zip(*costs, strict=True)
    return f"{statistics.median(seconds):.1f} s ({min(seconds):.1f} to {max(seconds):.1f}), at most {max(peaks):.2f} GB"


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--samples", type=int, default=1_000_000)
    parser.add_argument("--frames", type=int, default=500)
    asked = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder:
        directory = Path(folder) / "study"
        write_study(directory, asked.samples)
        print(f"canonry estimate, 8 rungs of {asked.samples} samples: {cost(estimate, str(directory))}", flush=True)
    print(f"g(r), {asked.frames} frames of N = 4000: {cost(structure, asked.frames)}")


if __name__ == "__main__":
    main()
