"""A curve of c_v from a ladder that plans itself: against separate runs, and against what its plan foretold.

Run: python benchmarks/ladder.py [--effort 1e7] [--seeds 5] [--workers 2] [--curve] [--forecasts [NAME ...]]

--curve: particle-steps for c_v (with its ideal part) within 1 % (one standard error) over T 0.9 to 1.5 at density 0.8,
N 256. Pooled: ladders of several overlaps, the largest error anywhere on a grid of 61 temperatures. Separate: 13
temperatures, each from its own samples until it is as precise. Each rung has `effort` particle-steps; errors fall with
the root of the steps, by which they are scaled.

--forecasts: standard errors that a plan foretells over those that come out, for a ladder in the liquid (density 0.8,
T 0.9 to 1.5, overlap 0.2), one in the gas (density 0.3, T 1.6 to 3), one in the gas where it forgets slowly (density
0.3, T 1.55 to 1.8, not far from the critical point) and a rung alone (T 1, density 0.8), N 500; mean over `seeds`, four
times `effort` a rung. All of them, or those named.

Without either both are done: about a quarter of an hour on two cores.
"""

from __future__ import annotations

import argparse
from collections import defaultdict
from collections.abc import Sequence
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np

from canonry.estimation import settled
from canonry.isochore import assemble
from canonry.ladder import resolved
from canonry.plan import plan
from canonry.sampling import recorded, sample
from canonry.study import Study, load
from estimators.canonical import rung_properties
from estimators.estimate import Estimate
from estimators.reweight import pool
from sampler.fluid import State
from sampler.series import Series

IDEAL = 1.5
WANTED = 0.01  # of c_v
SEPARATE = np.linspace(0.9, 1.5, 13)
GRID = np.linspace(0.9, 1.5, 61)
OVERLAPS = (0.05, 0.1, 0.15, 0.2)
STUDIES = {
    "liquid": (0.8, "{ from = 0.9, to = 1.5, overlap = 0.2 }"),
    "gas": (0.3, "{ from = 1.6, to = 3.0, overlap = 0.2 }"),
    "slow": (0.3, "{ from = 1.55, to = 1.8, overlap = 0.2 }"),
    "alone": (0.8, "[1.0]"),
}
TEXT = """
[fluid]
potential = "lennard-jones"
[state]
density = {density}
temperatures = {temperatures}
particles = {particles}
[sampling]
seed = {seed}
equilibration = 5000
steps = {steps}
frame_every = {steps}
"""


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--effort", type=float, default=1e7)
    parser.add_argument("--seeds", type=int, default=5)
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--curve", action="store_true")
    parser.add_argument("--forecasts", nargs="*", choices=STUDIES, metavar="NAME", help=", ".join(STUDIES))
    asked = parser.parse_args()
    if asked.curve or asked.forecasts is None:
        curve(asked.effort, asked.workers)
    if asked.forecasts is not None or not asked.curve:
        for name in asked.forecasts or STUDIES:
            forecasts(name, 4.0 * asked.effort, asked.seeds, asked.workers)


def curve(effort: float, workers: int) -> None:
    """Particle-steps that each way takes."""
    listed = str([float(f"{each:.6g}") for each in SEPARATE])
    study, samples = sampled(0.8, listed, 256, 1, effort, workers)
    errors = [relative(rung_properties(each)["residual_heat_capacity"]) for each in samples.values()]
    separate = study.sampling.steps * 256 * sum((error / WANTED) ** 2 for error in errors)
    print(f"separate: {len(errors)} runs, errors {min(errors):.4f} to {max(errors):.4f}: {separate:.3g} particle-steps")
    for overlap in OVERLAPS:
        study, samples = sampled(0.8, f"{{ from = 0.9, to = 1.5, overlap = {overlap} }}", 256, 2, effort, workers)
        found = pool([each for repeats in samples.values() for each in repeats]).curve(GRID.tolist())
        refused = [each.temperature for each in found if each.refused]
        errors = [relative(each.properties["residual_heat_capacity"]) for each in found if not each.refused]
        steps = study.sampling.steps * 256 * len(samples) * (max(errors) / WANTED) ** 2
        print(
            f"pooled, overlap {overlap}: {len(samples)} rungs {[state.temperature for state in samples]}, errors "
            f"{min(errors):.4f} to {max(errors):.4f}: {steps:.3g} particle-steps, {steps / separate:.2f} of separate"
            + (f"; refused at {refused}" if refused else "")
        )


def forecasts(name: str, effort: float, seeds: int, workers: int) -> None:
    """Errors foretold over those that come out, rung by rung."""
    foretold, found = defaultdict[str, list[list[float]]](list), defaultdict[str, list[list[float]]](list)
    for seed in range(1, seeds + 1):
        density, temperatures = STUDIES[name]
        study, samples = sampled(density, temperatures, 500, seed, effort, workers)
        planned = plan(study, workers=workers)
        own = {state: rung_properties(each) for state, each in samples.items()}
        series = [each for repeats in samples.values() for each in repeats]
        isochore = assemble(own, series, temperatures={}, ideal_heat_capacity=IDEAL, spoken=str)
        headlines = [each for each in isochore.properties() if each.headline and each.estimate is not None]
        for quantity in ("heat_capacity", "pressure"):
            foretold[quantity].append([rung.standard_errors[quantity] for rung in planned.rungs])
            found[quantity].append(
                [each.estimate.standard_error for each in headlines if each.estimate and each.property == quantity]
            )
    for quantity, errors in foretold.items():
        rungs = min(map(len, errors))
        before, after = (np.array([each[:rungs] for each in all_]) for all_ in (errors, found[quantity]))
        ratios = before / np.mean(after, axis=0)
        means = ", ".join(f"{each:.2f}" for each in np.mean(ratios, axis=0))
        print(f"{name}, {quantity}: {means} (single plans {np.min(ratios):.2f} to {np.max(ratios):.2f})")


def sampled(
    density: float, temperatures: str, particles: int, seed: int, effort: float, workers: int
) -> tuple[Study, dict[State, Sequence[Series]]]:
    """A study with its rungs, and what was sampled of it, settled."""
    steps = round(effort / particles / 10) * 10
    with TemporaryDirectory() as folder:
        file, directory = Path(folder, "study.toml"), Path(folder, "study")
        file.write_text(
            TEXT.format(density=density, temperatures=temperatures, particles=particles, seed=seed, steps=steps)
        )
        study = resolved(load(file), directory, workers=workers)
        sample(study, directory, workers=workers)
        return study, {state: [settled(each) for each in recorded(study, directory, state)] for state in study.states}


def relative(residual: Estimate) -> float:
    """Standard error of the whole heat capacity as a share of it."""
    value, error = residual.value, residual.standard_error
    return float(error / (value + IDEAL))


if __name__ == "__main__":
    main()
