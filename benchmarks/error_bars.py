"""How often nominal 95 % intervals hold the truth: correlated normal series, then properties of sampled fluids.

Run: nice python benchmarks/error_bars.py [--series 2000] [--repeats 500] [--workers 2] [--skip series|fluids] [--cut]
About 20 minutes on two cores; --series 300 --repeats 60 gives a first look in three. With --cut every series loses what
the equilibration cut would leave out of it, although all are settled: what the cut itself does to the coverage.

tau is the integrated autocorrelation time of the series in samples, 1/2 for independent ones; lengths are in tau.
Columns: share of intervals +-1.96 standard errors that hold the truth, mean standard error over the true one (the root
mean square distance of the estimates from the truth), share judged ok, share of these whose interval holds the truth.
"""

from __future__ import annotations

import argparse
import math
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import numpy.typing as npt
from scipy.linalg import expm
from scipy.signal import lfilter

from canonry.estimation import settled
from estimators.canonical import rung_properties
from estimators.covariance import covariance
from estimators.estimate import Estimate, mean
from estimators.reweight import pool
from estimators.settle import settled_start
from sampler.fluid import Fluid, State
from sampler.protocol import Protocol
from sampler.rung import advance, assemble
from sampler.series import Series
from sampler.store import Chain

Floats = npt.NDArray[np.float64]

NORMAL = 1.96
KEY = (1.0, 1.0, 1, 0)
SLOPE = -0.6  # correlation of the two series
NUMERATOR, DENOMINATOR = 5.0, 3.0  # means of a ratio's series, in standard deviations
QUANTITIES = ("mean", "variance", "covariance", "ratio")
TRUTHS = {"mean": 0.0, "variance": 1.0, "covariance": SLOPE, "ratio": NUMERATOR / DENOMINATOR}
TAUS = (1.0, 7.0, 50.0)
LENGTHS = (50, 100, 200, 500, 1000, 5000)
PARTICLES, TIME_STEP, FRICTION, EVERY = 108, 0.005, 2.0, 10
STIFFNESS, EXPONENT = 20.0, 2.0 / 3.0  # of the well at the volume sampled; it falls as volume^-EXPONENT
PROPERTIES = ("residual_energy", "pressure", "residual_heat_capacity", "thermal_pressure")
BETWEEN = "reweighted residual_heat_capacity"


@dataclass(frozen=True)
class Held:
    """What a set of estimates of one number was worth."""

    coverage: float
    width: float
    ok: float
    coverage_ok: float

    @classmethod
    def of(cls, estimates: Sequence[tuple[float, float, bool]], truth: float | None = None) -> Held:
        """From (value, standard error, judged ok) of each; the truth is the mean of all if None."""
        values, errors, ok = np.array(estimates).T
        off = values - (np.mean(values) if truth is None else truth)
        inside, trusted = np.abs(off) < NORMAL * errors, ok > 0.0
        finite = np.isfinite(errors)
        return cls(
            coverage=float(np.mean(inside)),
            width=float(np.mean(errors[finite]) / np.sqrt(np.mean(off**2))),
            ok=float(np.mean(trusted)),
            coverage_ok=float(np.mean(inside[trusted])) if np.any(trusted) else math.nan,
        )

    def __str__(self) -> str:
        return f"{self.coverage:9.3f} {self.width:7.2f} {self.ok:7.3f} {self.coverage_ok:11.3f}"


def autoregressive(generator: np.random.Generator, shape: tuple[int, int], tau: float) -> Floats:
    """(m, n), m stationary normal AR(1) series of unit variance with integrated autocorrelation time tau."""
    memory = (2.0 * tau - 1.0) / (2.0 * tau + 1.0)
    noise = generator.normal(size=shape)
    noise[:, 1:] *= math.sqrt(1.0 - memory**2)
    return np.asarray(lfilter([1.0], [1.0, -memory], noise, axis=1), dtype=float)


def estimates_of_series(
    quantity: str, tau: float, samples: int, count: int, seed: int, *, cut: bool = False
) -> list[tuple[float, float, bool]]:
    """(value, standard error, judged ok) of `count` pairs of correlated series."""
    generator = np.random.default_rng(seed)
    estimators: dict[str, Callable[[Floats, Floats], Estimate]] = {
        "mean": lambda x, y: mean({KEY: x}),
        "variance": lambda x, y: covariance({KEY: x}, {KEY: x}),
        "covariance": lambda x, y: covariance({KEY: x}, {KEY: y}),
        "ratio": lambda x, y: mean({KEY: NUMERATOR + x}) / mean({KEY: DENOMINATOR + y}),
    }
    found = []
    for _ in range(count):
        x, other = autoregressive(generator, (2, samples), tau)
        start = settled_start(x) if cut else 0
        x, other = x[start:], other[start:]
        found.append(_row(estimators[quantity](x, SLOPE * x + math.sqrt(1.0 - SLOPE**2) * other)))
    return found


def wells(state: State, samples: int, count: int, seed: int) -> Iterator[Series]:
    """Repeats of an ideal gas in a harmonic well, from the exact propagator of the Langevin oscillator.

    The well softens as the volume grows: U = k/2 sum r^2 with k proportional to V^-EXPONENT, so W = EXPONENT U.
    """
    generator = np.random.default_rng(seed)
    step = expm(np.array([[0.0, 1.0], [-STIFFNESS, -FRICTION]]) * TIME_STEP * EVERY)
    widths = np.diag([state.temperature / STIFFNESS, state.temperature])
    kick = np.linalg.cholesky(widths - step @ widths @ step.T)
    fluid = Fluid(cutoff=0.25 * state.box, truncation="force-shifted")
    for repeat in range(count):
        phase = np.sqrt(widths) @ generator.normal(size=(2, 3 * state.particles))
        recorded = np.empty((samples, 2))
        for index in range(samples):
            recorded[index] = 0.5 * STIFFNESS * (phase[0] @ phase[0]), 0.5 * (phase[1] @ phase[1])
            phase = step @ phase + kick @ generator.normal(size=phase.shape)
        energy, kinetic = recorded.T
        yield Series(
            fluid=fluid,
            state=state,
            repeat=repeat,
            bath=True,
            interval=TIME_STEP * EVERY,
            energy=energy,
            sampled_energy=energy,
            virial=EXPONENT * energy,
            hypervirial=EXPONENT**2 * energy,
            kinetic=kinetic,
            ledger=np.zeros(samples),
            frames=np.empty((0, state.particles, 3)),
            frame_stride=1,
        )


def liquids(state: State, samples: int, count: int, seed: int) -> Iterator[Series]:
    """Repeats of the Lennard-Jones fluid from the project's sampler, settled for 2000 steps."""
    steps = samples * EVERY
    protocol = Protocol(
        seed=seed,
        repeats=count,
        time_step=TIME_STEP,
        friction=FRICTION,
        equilibration=2000,
        steps=steps,
        record_every=EVERY,
        frame_every=500,
    )
    fluid = Fluid(cutoff=2.5, truncation="corrected")
    for repeat in range(count):
        chain, before, segments = Chain(Path(), fluid, state, protocol, repeat), None, []
        for index in range(len(chain.segments)):
            before = advance(chain, index, before, np.zeros(1, np.uint8))
            assert before is not None
            segments.append(before)
        yield assemble(chain, [each for each in segments if each.first >= protocol.settling])


@dataclass(frozen=True)
class System:
    """A fluid at two rungs; properties at the first, reweighting to the middle of both."""

    name: str
    density: float
    temperatures: tuple[float, float]
    samples: int
    repeats: Callable[[State, int, int, int], Iterator[Series]]

    def truth(self, name: str) -> float | None:
        """Exact value, where there is one."""
        if self.repeats is not wells:
            return None
        pressure = self.density * self.temperatures[0] * (1.0 + 1.5 * EXPONENT)
        exact = {"residual_energy": 1.5 * self.temperatures[0], "pressure": pressure}
        return (exact | {"thermal_pressure": pressure / self.temperatures[0]}).get(name, 1.5)

    def estimates(self, count: int, seed: int, *, cut: bool = False) -> dict[str, list[tuple[float, float, bool]]]:
        """(value, standard error, judged ok) of every property from each repeat."""
        states = [State(temperature, self.density, PARTICLES) for temperature in self.temperatures]
        rungs = (self.repeats(state, self.samples, count, seed + at) for at, state in enumerate(states))
        found: dict[str, list[tuple[float, float, bool]]] = {}
        for cold, warm in zip(*(map(settled, rung) if cut else rung for rung in rungs), strict=True):
            properties = rung_properties([cold])
            for name in PROPERTIES:
                found.setdefault(name, []).append(_row(properties[name]))
            between = pool([cold, warm]).at(float(np.mean(self.temperatures)))
            found.setdefault(BETWEEN, []).append(_row(between.properties["residual_heat_capacity"]))
        return found


SYSTEMS = (
    System("ideal gas in a harmonic well", 0.3, (1.0, 1.1), 3000, wells),
    System("Lennard-Jones, rho 0.3, T 2", 0.3, (2.0, 2.2), 2500, liquids),
    System("Lennard-Jones, rho 0.8, T 1", 0.8, (1.0, 1.1), 2500, liquids),
)


def _row(estimate: Estimate) -> tuple[float, float, bool]:
    return estimate.value, estimate.standard_error, estimate.trust == "ok"


def series_table(workers: ProcessPoolExecutor, count: int, *, cut: bool) -> None:
    """Print the coverage on AR(1) series."""
    print(f"\n{count} series a cell\n{'quantity':11} {'tau':>4} {'length':>6}  coverage   width      ok  coverage ok")
    cells = [(quantity, tau, length) for quantity in QUANTITIES for tau in TAUS for length in LENGTHS]
    jobs = [
        workers.submit(estimates_of_series, quantity, tau, round(tau * length), count, seed, cut=cut)
        for seed, (quantity, tau, length) in enumerate(cells)
    ]
    for (quantity, tau, length), job in zip(cells, jobs, strict=True):
        print(f"{quantity:11} {tau:4g} {length:6d} {Held.of(job.result(), TRUTHS[quantity])}", flush=True)


def fluids_table(workers: ProcessPoolExecutor, count: int, *, cut: bool) -> None:
    """Print the coverage on sampled fluids; seeds of the batches differ."""
    batch = 25
    print(f"\n{count} repeats, N {PARTICLES}\n{'property':35} {'against':8} coverage   width      ok  coverage ok")
    jobs = {
        system: [
            workers.submit(system.estimates, min(batch, count - first), 1000 + 2 * first, cut=cut)
            for first in range(0, count, batch)
        ]
        for system in SYSTEMS
    }
    for system, batches in jobs.items():
        print(f"{system.name}, {system.samples} samples")
        parts = [job.result() for job in batches]
        for name in parts[0]:
            rows = [row for part in parts for row in part[name]]
            print(f"  {name:33} {'mean':8}{Held.of(rows)}", flush=True)
            if (truth := system.truth(name)) is not None:
                print(f"  {'':33} {'exact':8}{Held.of(rows, truth)}", flush=True)


def main() -> None:
    """Print both tables."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--series", type=int, default=2000)
    parser.add_argument("--repeats", type=int, default=500)
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--skip", choices=("series", "fluids"), action="append", default=[])
    parser.add_argument("--cut", action="store_true")
    options = parser.parse_args()
    with ProcessPoolExecutor(options.workers) as workers:
        if "series" not in options.skip:
            series_table(workers, options.series, cut=options.cut)
        if "fluids" not in options.skip:
            fluids_table(workers, options.repeats, cut=options.cut)


if __name__ == "__main__":
    main()
