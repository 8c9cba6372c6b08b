"""The Helmholtz surface through four isochores of a sampled liquid, beside an equation of state at states in between.

Run: python benchmarks/surface.py [--seeds 3] [--effort 2e7] [--particles 500] [--cutoff 4] [--draws 40] [--workers 2]
Prints (1) u, P, c_v and B_T at twelve states that were not sampled and along an isobar, as deviations from thol-2016 in
combined errors, with the gain over the error bars of a rung and what held-out rungs say; (2) how often 95 % intervals
hold a truth that is known exactly: the equation itself, with noise of the covariance that was sampled; (3) what a
surface costs. Combined errors hold the error bar, the equation's accuracy and the shift that `finite_size` predicts for
so few particles; the tail's g = 1 beyond the cutoff is not in them, and may show in P. Isochores start where the liquid
is nearly stable. The prior was shaped with data made from this same equation (`surface.kernel`), so (2) tells of the
arithmetic and the noise more than of other fluids.
"""

from __future__ import annotations

import os

os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # as the command line has it: small matrices, more threads only wait

import argparse
import time
from collections import defaultdict
from collections.abc import Mapping, Sequence
from concurrent.futures import ProcessPoolExecutor
from itertools import repeat
from pathlib import Path

import numpy as np
from scipy.optimize import brentq

import reference
from canonry.budget import finite_size
from canonry.estimation import settled
from estimators.canonical import rung_properties
from estimators.estimate import Estimate
from estimators.surface.helmholtz import Surface, surface
from estimators.surface.measured import Measured, measured
from reference.virial import pair_second_virial
from sampler.fluid import Fluid, State
from sampler.protocol import Protocol
from sampler.rung import advance, assemble
from sampler.store import Chain

EQUATION = reference.find("thol-2016")
ISOCHORES = {
    0.60: (1.18, 1.30, 1.44, 1.60),
    0.65: (1.10, 1.25, 1.42, 1.60),
    0.70: (1.02, 1.18, 1.37, 1.60),
    0.75: (1.00, 1.17, 1.37, 1.60),
}
RUNGS = [(temperature, density) for density, ladder in ISOCHORES.items() for temperature in ladder]
BETWEEN = [
    *((1.25, 0.62), (1.40, 0.62), (1.55, 0.63), (1.20, 0.66), (1.35, 0.66), (1.50, 0.67)),
    *((1.10, 0.71), (1.25, 0.68), (1.45, 0.72), (1.10, 0.74), (1.30, 0.73), (1.55, 0.74)),
]
NAMES = ("residual_energy", "pressure", "residual_heat_capacity", "bulk_modulus")
MORE = ("thermal_pressure", "isobaric_heat_capacity", "thermal_expansion", "sound_speed", "joule_thomson")
ISOBAR, ALONG = 0.9, (1.15, 1.25, 1.35, 1.45)
REPEATS = 2

Point = tuple[float, float]
States = Mapping[Point, Mapping[str, Estimate]]


def rung(point: Point, seed: int, options: argparse.Namespace) -> dict[str, Estimate]:
    fluid, state = Fluid(cutoff=options.cutoff), State(*point, options.particles)
    steps = round(options.effort / REPEATS / options.particles / 500) * 500
    protocol = Protocol(seed=seed, repeats=REPEATS, equilibration=5000, steps=steps)
    found = []
    for number in range(REPEATS):
        chain, before, segments = Chain(Path(), fluid, state, protocol, number), None, []
        for index, (first, _) in enumerate(chain.segments):
            before = advance(chain, index, before, np.zeros(1, np.uint8))
            if first >= protocol.settling:
                segments.append(before)
        found.append(settled(assemble(chain, segments)))
    return rung_properties(found)


def virial(temperature: float, particles: float = np.inf) -> float:
    full = pair_second_virial(lambda r: 4.0 * (r**-12 - r**-6) if r > 0.0 else np.inf, temperature=temperature)
    return (1.0 - 1.0 / particles) * full


def score(name: str, found: Estimate, point: Point, particles: int) -> float:
    """Deviation from the equation in combined errors."""
    told = EQUATION.value(name, temperature=point[0], density=point[1])
    shift = finite_size(State(*point, particles), EQUATION).get(name, 0.0)
    return (found.value - told.value) / float(np.hypot(np.hypot(found.standard_error, told.uncertainty), shift))


def beside_equation(states: States, options: argparse.Namespace) -> dict[str, list[float]]:
    started = time.perf_counter()
    built = surface(states, second_virial=lambda t: virial(t, options.particles), ideal_heat_capacity=1.5)
    assert built is not None
    seconds = time.perf_counter() - started
    scores: dict[str, list[float]] = defaultdict(list)
    gains = defaultdict(list)
    for point in BETWEEN:
        answer = built.at(*point)
        for name in (*NAMES, *MORE):
            scores[name].append(score(name, answer.properties[name], point, options.particles))
        nearest = min(RUNGS, key=lambda each: abs(each[0] - point[0]) / 0.6 + abs(each[1] - point[1]) / 0.15)
        for name in NAMES:
            gains[name].append(states[nearest][name].standard_error / answer.properties[name].standard_error)
    held = [each.z for each in built.held_out()]
    print(f"  surface in {seconds:.2f} s; held-out rungs: rms z {rms(held):.2f}, largest {np.max(np.abs(held)):.1f}")
    print(
        "  error bar of the nearest rung over that of the surface: " + told({n: np.median(g) for n, g in gains.items()})
    )
    for name, each in along_isobar(built, options).items():
        scores[f"{name} at P {ISOBAR:g}"] += each
    return scores


def along_isobar(built: Surface, options: argparse.Namespace) -> dict[str, list[float]]:
    """As `score`, with the equation's own density at the pressure, and what its errors do to that."""
    scores = defaultdict(list)
    for temperature, answer in zip(ALONG, built.isobar(ISOBAR, ALONG), strict=True):
        own = brentq(lambda rho, t=temperature: equation("pressure", t, rho) - ISOBAR, 0.55, 0.8)
        state = State(temperature, own, options.particles)
        shifts = finite_size(state, EQUATION)
        slope = equation("bulk_modulus", temperature, own) / own
        pressure = EQUATION.value("pressure", temperature=temperature, density=own).uncertainty
        for name in ("density", "residual_energy", "isobaric_heat_capacity"):
            value, uncertainty, shift, rate = own, 0.0, 0.0, 1.0
            if name != "density":
                told = EQUATION.value(name, temperature=temperature, density=own)
                value, uncertainty, shift = told.value, told.uncertainty, shifts.get(name, 0.0)
                rate = (equation(name, temperature, own + 1e-4) - equation(name, temperature, own - 1e-4)) / 2e-4
            moved = rate / slope
            found = answer.properties[name]
            parts = (found.standard_error, uncertainty, shift, moved * pressure, moved * shifts["pressure"])
            scores[name].append((found.value - value) / float(np.sqrt(np.sum(np.square(parts)))))
    return scores


def equation(name: str, temperature: float, density: float) -> float:
    return EQUATION.value(name, temperature=temperature, density=density).value


def known_truth(found: Measured, options: argparse.Namespace) -> dict[str, list[float]]:
    """Deviations in error bars where the truth is the equation and the noise as it was sampled, for many draws."""
    rng = np.random.default_rng(11)
    root = np.linalg.cholesky(found.noise + 1e-12 * np.diag(np.diag(found.noise)))
    scores = defaultdict(list)
    for _ in range(options.draws):
        states: dict[Point, dict[str, Estimate]] = defaultdict(dict)
        noise = root @ rng.standard_normal(len(root))
        for (point, name), each, off in zip(found.labels, found.estimates, noise, strict=True):
            states[point][name] = Estimate(equation(name, *point) + off, each.influence)
        built = surface(states, second_virial=EQUATION.second_virial)
        assert built is not None
        for point in BETWEEN:
            properties = built.at(*point).properties
            for name in (*NAMES, "thermal_pressure"):
                scores[name].append((properties[name].value - equation(name, *point)) / properties[name].standard_error)
    return scores


def rms(values: Sequence[float]) -> float:
    return float(np.sqrt(np.mean(np.square(values))))


def told(values: Mapping[str, float]) -> str:
    return ", ".join(f"{name} {value:.1f}" for name, value in values.items())


def show(scores: Mapping[str, Sequence[float]]) -> None:
    for name, each in scores.items():
        inside = np.mean(np.abs(each) < 1.96)
        print(
            f"  {name:32s} rms z {rms(each):.2f}, largest {np.max(np.abs(each)):.2f}, 95 % intervals hold {inside:.1%}"
        )
    together = [score for each in scores.values() for score in each]
    print(
        f"  together: largest {np.max(np.abs(together)):.2f}, hold {np.mean(np.abs(together) < 1.96):.1%}", flush=True
    )


def cost(states: States, options: argparse.Namespace) -> None:
    """Of 120 rungs: temperatures between the sampled ones, values from the equation, noise of a sampled rung."""
    like = states[1.37, 0.70]
    many: dict[Point, dict[str, Estimate]] = {}
    rng = np.random.default_rng(12)
    for density in np.linspace(0.6, 0.75, 6):
        for temperature in np.linspace(1.2, 1.6, 20):
            point = float(temperature), float(density)
            many[point] = {
                name: Estimate(
                    equation(name, *point) + each.standard_error * rng.standard_normal(),
                    {(*point, options.particles, 0): next(iter(each.influence.values()))},
                )
                for name, each in like.items()
            }
    started = time.perf_counter()
    built = surface(many, second_virial=EQUATION.second_virial)
    assert built is not None
    fitted = time.perf_counter()
    errors = [each.standard_error for each in built.at(1.31, 0.68).properties.values()]
    print(f"  {len(many)} rungs: {fitted - started:.1f} s, {len(errors)} properties of a state with error bars "
          f"{time.perf_counter() - fitted:.2f} s")  # fmt: skip


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seeds", type=int, default=3)
    parser.add_argument("--effort", type=float, default=2e7)
    parser.add_argument("--particles", type=int, default=500)
    parser.add_argument("--cutoff", type=float, default=4.0)
    parser.add_argument("--draws", type=int, default=40)
    parser.add_argument("--workers", type=int, default=2)
    options = parser.parse_args()
    every: dict[str, list[float]] = defaultdict(list)
    with ProcessPoolExecutor(options.workers) as pool:
        for seed in range(1, options.seeds + 1):
            started = time.perf_counter()
            states = dict(zip(RUNGS, pool.map(rung, RUNGS, repeat(seed), repeat(options)), strict=True))
            seconds = time.perf_counter() - started
            print(f"seed {seed}: {len(RUNGS)} rungs of {options.effort:.0e} particle-steps sampled in {seconds:.0f} s")
            scores = beside_equation(states, options)
            show(scores)
            for name, each in scores.items():
                every[name] += each
    print("All seeds")
    show(every)
    print(f"Truth known exactly, {options.draws} draws of the noise")
    show(known_truth(measured(states, ()), options))
    print("Cost")
    cost(states, options)


if __name__ == "__main__":
    main()
