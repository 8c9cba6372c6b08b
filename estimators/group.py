"""Rungs that overlap and are solved together, and what their samples say at a temperature, with influences.

Influences of an estimating equation: those of the free energies f are -response @ claims; a weighted mean A* has
w (A - A*) at fixed f, and moves with f by -sum_n p_k w (A - A*). Both are centred over each rung, all its repeats
together: a rung's samples scatter about that rung's mean.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from estimators.estimate import Chain, Estimate
from estimators.mixture import Mixture, slices
from sampler.fluid import State
from sampler.series import Series

__all__ = ["Group", "Run", "Rung", "Weights"]

Floats = npt.NDArray[np.float64]

METHOD = "reweighted"
INFLUENCES = 2**16  # entries of one estimate over all its chains; longer series enter as block sums
THINNED = 4096  # samples of a rung that are enough for links and a start


@dataclass(frozen=True)
class Rung:
    """All repeats of one temperature; energies (n,) each, dynamical, less one constant for the whole isochore."""

    temperature: float
    repeats: list[Series]
    energies: list[Floats]
    inefficiency: float

    @property
    def samples(self) -> int:
        return sum(map(len, self.energies))

    @cached_property
    def thinned(self) -> Floats:
        stride = -(-self.samples // THINNED)
        return np.concatenate([energies[::stride] for energies in self.energies])

    @cached_property
    def heat_capacity(self) -> float:
        """var(E)/T^2 of the whole system."""
        mean = sum(float(np.sum(energies)) for energies in self.energies) / self.samples
        squares = sum(float(np.sum((energies - mean) ** 2)) for energies in self.energies)
        return squares / self.samples / self.temperature**2

    def surviving(self, temperature: float) -> float:
        """Independent samples of the rung that survive reweighting to a temperature, at constant heat capacity C.

        The partition function then goes as T^C, so that <w>^2/<w^2> = ((1 + d)^2/(1 + 2d))^-C with d = T_rung/T - 1;
        nothing survives to twice the rung's temperature.
        """
        d = self.temperature / temperature - 1.0
        if 1.0 + 2.0 * d <= 0.0:
            return 0.0
        survival = math.exp(-self.heat_capacity * (2.0 * math.log1p(d) - math.log1p(2.0 * d)))
        return self.samples / self.inefficiency * survival


@dataclass(frozen=True)
class Run:
    """One repeat inside a group.

    rung : index of its rung in the group
    energies : (n,), dynamical, less the constant
    claims : (K, n), share of each rung in each sample; error bars alone need them
    log_density : (n,), log D(E)
    """

    rung: int
    chain: Chain
    series: Series
    energies: Floats
    claims: npt.NDArray[np.float32]
    log_density: Floats


@dataclass(frozen=True)
class Weights:
    """Weights of a group's runs at one temperature, each (n,), of sum 1 in all."""

    runs: list[Floats]
    effective_samples: float


@dataclass(frozen=True)
class Group:
    """Rungs that overlap, solved together."""

    rungs: list[Rung]
    mixture: Mixture
    runs: list[Run]

    def weights(self, temperature: float) -> Weights:
        logs = [-run.energies / temperature - run.log_density for run in self.runs]
        top = max(float(np.max(each)) for each in logs)
        raw = [np.exp(each - top) for each in logs]
        total = sum(float(np.sum(each)) for each in raw)
        weights = [each / total for each in raw]
        inefficiencies = [self.rungs[run.rung].inefficiency for run in self.runs]
        spread = sum(factor * float(each @ each) for factor, each in zip(inefficiencies, weights, strict=True))
        return Weights(weights, min(1.0 / spread, self._reach(temperature)))

    def _reach(self, temperature: float) -> float:
        """Most effective samples there can be: beyond the outermost rungs, what should survive of every rung.

        There the weights themselves tell too much, as the heaviest are those of samples that nobody drew.
        """
        if self.rungs[0].temperature <= temperature <= self.rungs[-1].temperature:
            return math.inf
        return sum(rung.surviving(temperature) for rung in self.rungs)

    def free_energies(self, reference_energy: float) -> list[Estimate]:
        """F/T less that of the group's first rung."""
        beta = self.mixture.beta
        values = self.mixture.free_energies + (beta - beta[0]) * reference_energy
        return self._estimates(values, -self.mixture.response, lambda index, part: 0.0)

    def properties(self, temperature: float, weights: Weights) -> dict[str, Estimate]:
        target = _target(self.runs, weights, temperature)
        values = np.zeros(len(target.ideal))
        claimed, coupled = np.zeros(len(self.rungs)), np.zeros((len(target.ideal), len(self.rungs)))
        for index, run in enumerate(self.runs):
            for part in slices(len(run.energies)):
                weight = weights.runs[index][part]
                weighted = weight * target.integrands(run.series, part)
                values += np.sum(weighted, axis=1)
                coupled += weighted @ run.claims[:, part].T
                claimed += run.claims[:, part] @ weight

        def own(index: int, part: slice) -> Floats:
            deviations = target.integrands(self.runs[index].series, part) - values[:, None]
            return np.asarray(weights.runs[index][part] * deviations, dtype=float)

        pull = (coupled - np.multiply.outer(values, claimed)) @ self.mixture.response
        return target.named(self._estimates(values + target.ideal, pull, own))

    def _estimates(self, values: Floats, pull: Floats, own: Callable[[int, slice], Floats | float]) -> list[Estimate]:
        """Estimates from their influences, own + pull @ claims, once these are centred over each rung.

        values : (rows,)
        pull : (rows, K), how far each estimate moves when the rungs' claims do
        own : of the index of a run and a part of it, (rows, n): influence at fixed free energies
        """
        sums, centres = [], np.zeros((len(self.rungs), len(values)))
        for index, run in enumerate(self.runs):
            influence = np.empty((len(values), len(run.energies)))
            for part in slices(len(run.energies)):
                influence[:, part] = own(index, part) + pull @ run.claims[:, part]
            centres[run.rung] += np.sum(influence, axis=1) / self.rungs[run.rung].samples
            starts = self._starts(run)
            sums.append(influence if len(starts) == len(run.energies) else np.add.reduceat(influence, starts, axis=1))
        for run, each in zip(self.runs, sums, strict=True):
            each -= np.multiply.outer(centres[run.rung], np.diff(self._starts(run), append=len(run.energies)))
        return [
            Estimate(float(value), {run.chain: each[row] for run, each in zip(self.runs, sums, strict=True)}, METHOD)
            for row, value in enumerate(values)
        ]

    def _starts(self, run: Run) -> npt.NDArray[np.int64]:
        """First samples of the blocks, as equal as they can be, whose influences are stored as sums."""
        samples = len(run.energies)
        block = -(-samples * len(self.runs) // INFLUENCES)
        blocks = samples // min(block, samples)
        return np.arange(blocks) * samples // blocks


@dataclass(frozen=True)
class _Target:
    """What is averaged at one temperature: integrands whose weighted means, plus the ideal parts, are the properties.

    In a covariance the means may stand still: its influence is the product of deviations, to first order.
    centres : weighted means of U, E and W
    correction : what the scatter of these means takes from a covariance, made good
    """

    temperature: float
    state: State
    centres: Floats
    correction: float
    surface: bool

    @property
    def ideal(self) -> Floats:
        density, temperature = self.state.density, self.temperature
        return np.array([0.0, 0.0, density * temperature, density, density * temperature])

    def integrands(self, series: Series, part: slice) -> Floats:
        temperature, particles, volume = self.temperature, self.state.particles, self.state.volume
        energy, virial = series.energy[part], series.virial[part]
        sampled = (series.sampled_energy[part] - self.centres[1]) * (self.correction / temperature**2)
        deviation = virial - self.centres[2]
        return np.stack(
            [
                energy / particles,
                (energy - self.centres[0]) * sampled / particles,
                virial / volume,
                deviation * sampled / volume,
                (virial + series.hypervirial[part] - deviation**2 * (self.correction / temperature)) / volume,
            ]
        )

    def named(self, estimates: list[Estimate]) -> dict[str, Estimate]:
        energy, heat_capacity, pressure, thermal_pressure, bulk_modulus = estimates
        properties = {
            "residual_energy": energy,
            "residual_heat_capacity": heat_capacity,
            "pressure": pressure,
            "compressibility_factor": pressure / (self.state.density * self.temperature),
            "thermal_pressure": thermal_pressure,
        }
        return properties if self.surface else properties | {"bulk_modulus": bulk_modulus}


def _target(runs: list[Run], weights: Weights, temperature: float) -> _Target:
    centres = np.zeros(3)
    for run, weight in zip(runs, weights.runs, strict=True):
        series = run.series
        centres += [weight @ each for each in (series.energy, series.sampled_energy, series.virial)]
    fluid, state = runs[0].series.fluid, runs[0].series.state
    correction = 1.0 / (1.0 - 1.0 / weights.effective_samples)
    return _Target(temperature, state, centres, correction, fluid.surface_hypervirial(state.density) != 0.0)
