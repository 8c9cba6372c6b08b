"""Rungs that overlap and are solved together, and what their samples say at a temperature, with influences.

Influences of an estimating equation: those of the free energies f are -response @ claims; a weighted mean A* has
w (A - A*) at fixed f, and moves with f by -sum_n p_k w (A - A*). Both are centred over each rung, all its repeats
together: a rung's samples scatter about that rung's mean.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from estimators.canonical import NEEDS
from estimators.estimate import Estimate
from estimators.mixture import Mixture
from estimators.moments import POWERS, Moments, Run, claimed, moments
from sampler.series import Series

__all__ = ["Group", "Rung"]

Floats = npt.NDArray[np.float64]

METHOD = "reweighted"
THINNED = 4096  # samples of a rung that are enough for links


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

    @property
    def recorded(self) -> Iterator[tuple[Series, Floats]]:
        """Its repeats with their energies."""
        return zip(self.repeats, self.energies, strict=True)

    @cached_property
    def thinned(self) -> Floats:
        stride = -(-self.samples // THINNED)
        return np.concatenate([energies[::stride] for energies in self.energies])

    @cached_property
    def mean_energy(self) -> float:
        return sum(float(np.sum(energies)) for energies in self.energies) / self.samples

    @cached_property
    def heat_capacity(self) -> float:
        """var(E)/T^2 of the whole system."""
        squares = sum(float(np.sum((energies - self.mean_energy) ** 2)) for energies in self.energies)
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
class Group:
    """Rungs that overlap, solved together."""

    rungs: list[Rung]
    mixture: Mixture
    runs: list[Run]

    def moments(self, temperatures: Floats) -> Moments:
        """At the temperatures (G,), all of them in one pass over the samples."""
        return moments(self.mixture, self.runs, temperatures, [rung.inefficiency for rung in self.rungs])

    def effective_samples(self, temperature: float, kish: float) -> float:
        """Independent samples behind weights that are worth `kish`.

        Beyond the outermost rungs at most what should survive of every rung: there the weights themselves tell too
        much, as the heaviest are those of samples that nobody drew.
        """
        if self.rungs[0].temperature <= temperature <= self.rungs[-1].temperature:
            return kish
        return min(kish, sum(rung.surviving(temperature) for rung in self.rungs))

    def free_energies(self, reference_energy: float) -> list[Estimate]:
        """F/T less that of the group's first rung."""
        beta = self.mixture.beta
        values = self.mixture.free_energies + (beta - beta[0]) * reference_energy
        return self._estimates(values, -self.mixture.response, [0.0] * len(self.runs))

    def properties(self, temperature: float, found: Moments, index: int) -> dict[str, Estimate]:
        """By name, from the moments at a temperature, which is the one with this index; of recorded columns only."""
        samples = self.effective_samples(temperature, float(found.kish[index]))
        rows = self._rows(temperature, found.means[index], correction=1.0 / (1.0 - 1.0 / samples))
        values = rows @ found.means[index]
        rows[:, 0] -= values
        pull = rows @ found.claimed[index] @ self.mixture.response
        estimates = self._estimates(values, pull, [rows @ blocks[index] for blocks in found.blocks])
        energy, heat_capacity, pressure, thermal_pressure, bulk_modulus = estimates
        series = self.runs[0].series
        properties = {
            "residual_energy": energy,
            "residual_heat_capacity": heat_capacity,
            "pressure": pressure,
            "compressibility_factor": pressure / (series.state.density * temperature),
            "thermal_pressure": thermal_pressure,
        }
        if not (series.fluid.has_pairs and series.fluid.surface_hypervirial(series.state.density)):
            properties["bulk_modulus"] = bulk_modulus
        if series.freedom is not None and not any(run.series.has("energy") for run in self.runs):
            properties["heat_capacity"] = heat_capacity + 0.5 * series.freedom / series.state.particles
        return {name: each for name, each in properties.items() if self._has(*NEEDS[name])}

    def _has(self, *columns: str) -> bool:
        return all(run.series.has(*columns) for run in self.runs)

    def _rows(self, temperature: float, means: Floats, *, correction: float) -> Floats:
        """(5, POWERS): of which combinations of powers the properties are the weighted means.

        In a covariance the means may stand still: its influence is the product of deviations, to first order.
        correction : what the scatter of these means takes from a covariance, made good
        """
        one, u, e, w, stiffness, ue, we, ww = np.eye(POWERS)
        state, (u_centre, w_centre, stiffness_centre) = self.runs[0].series.state, self.runs[0].centres
        particles, volume, density = state.particles, state.volume, state.density

        def covariance(product: Floats, first: Floats, second: Floats) -> Floats:
            a, b = first @ means, second @ means
            return np.asarray(correction * (product - b * first - a * second + a * b * one), dtype=float)

        ideal = density * temperature * one
        return np.stack(
            [
                (u + u_centre * one) / particles,
                covariance(ue, u, e) / (particles * temperature**2),
                (w + w_centre * one) / volume + ideal,
                covariance(we, w, e) / (volume * temperature**2) + density * one,
                (stiffness + stiffness_centre * one - covariance(ww, w, w) / temperature) / volume + ideal,
            ]
        )

    @cached_property
    def _claimed(self) -> list[Floats]:
        return [claimed(self.mixture, run) for run in self.runs]

    def _estimates(self, values: Floats, pull: Floats, own: Sequence[Floats | float]) -> list[Estimate]:
        """Estimates from their influences, own + pull @ claims, once these are centred over each rung.

        values : (rows,)
        pull : (rows, K), how far each estimate moves when the rungs' claims do
        own : of each run, (rows, B): influence at fixed free energies
        """
        influences = [each + pull @ claims for each, claims in zip(own, self._claimed, strict=True)]
        centres = np.zeros((len(self.rungs), len(values)))
        for run, each in zip(self.runs, influences, strict=True):
            centres[run.rung] += np.sum(each, axis=1) / self.rungs[run.rung].samples
        for run, each in zip(self.runs, influences, strict=True):
            each -= np.multiply.outer(centres[run.rung], run.lengths)
        return [
            Estimate(
                float(value), {run.chain: each[row] for run, each in zip(self.runs, influences, strict=True)}, METHOD
            )
            for row, value in enumerate(values)
        ]
