"""Rungs that overlap and are solved together, and what their samples say at a temperature, with influences.

Influences of an estimating equation: those of the free energies f are -response @ claims; a weighted mean A* has
w (A - A*) at fixed f, and moves with f by -sum_n p_k w (A - A*). Both are centred over each rung, all its repeats
together: a rung's samples scatter about that rung's mean.
"""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np
import numpy.typing as npt

from estimators.canonical import NEEDS
from estimators.estimate import Estimate
from estimators.mixture import Mixture
from estimators.moments import POWERS, Moments, Run, block_starts, claimed, energy_name, moments
from sampler.series import Series

__all__ = ["Group", "Rung"]

Floats = npt.NDArray[np.float64]

METHOD = "reweighted"
LEAST_SHARE = 0.2  # of a rung's samples; where less survives, half of the target is where the rung has no samples
THINNED = 4096  # samples of a rung that are enough for links


@dataclass(frozen=True)
class Rung:
    """All repeats of one state.

    features : (d, n) of each repeat, less one constant for the whole group
    slopes : (d,), of the features in the reduced potential of this state
    inefficiency : 2 tau of the reduced potential
    """

    temperature: float
    density: float
    repeats: list[Series]
    features: list[Floats]
    slopes: Floats
    inefficiency: float

    @cached_property
    def samples(self) -> int:
        return sum(map(len, self.repeats))

    @property
    def recorded(self) -> Iterator[tuple[Series, Floats]]:
        """Its repeats with their features."""
        return zip(self.repeats, self.features, strict=True)

    @cached_property
    def thinned(self) -> Floats:
        """(d, m), of samples over all of the rung."""
        stride = -(-self.samples // THINNED)
        return np.concatenate([features[:, ::stride] for features in self.features], axis=1)

    @cached_property
    def mean_energy(self) -> float:
        """Of U_dyn, less a constant."""
        return self.temperature * sum(float(np.sum(self.slopes @ each)) for each in self.features) / self.samples

    @cached_property
    def heat_capacity(self) -> float:
        """var(U_dyn)/T^2 of the whole system."""
        mean = self.mean_energy / self.temperature
        return sum(float(np.sum((self.slopes @ each - mean) ** 2)) for each in self.features) / self.samples

    @property
    def independent(self) -> float:
        """Independent samples."""
        return self.samples / self.inefficiency

    def surviving(self, temperature: float) -> float:
        """Share of the samples that survives reweighting to a temperature, at constant heat capacity C.

        The partition function then goes as T^C, so that <w>^2/<w^2> = ((1 + d)^2/(1 + 2d))^-C with d = T_rung/T - 1;
        nothing survives to twice the rung's temperature.
        """
        d = self.temperature / temperature - 1.0
        if 1.0 + 2.0 * d <= 0.0:
            return 0.0
        return math.exp(-self.heat_capacity * (2.0 * math.log1p(d) - math.log1p(2.0 * d)))


@dataclass(frozen=True)
class Group:
    """Rungs that overlap, solved together.

    runs : their repeats as they are at one density, none before that is said, see `seen`
    elsewhere : whether that is another density than some of them were sampled at
    """

    rungs: list[Rung]
    mixture: Mixture
    runs: list[Run]
    elsewhere: bool = False

    def seen(self, density: float, look: Callable[[Series, float], Series] | None = None) -> Group:
        """The group with energies and virials as they are at a density.

        look : gives those of a series that was sampled at another one
        """
        repeats = [(index, *each) for index, rung in enumerate(self.rungs) for each in rung.recorded]
        views = [
            series if look is None or series.state.density == density else look(series, density)
            for _, series, _ in repeats
        ]
        samples = sum(map(len, views))
        constant = sum(float(np.sum(view.column("sampled_energy"))) for view in views) / samples
        centres = _centres(views)
        runs = [
            Run(
                index,
                series.chain,
                view,
                features,
                view.column("sampled_energy") - constant,
                centres,
                block_starts(len(view), samples),
            )
            for (index, series, features), view in zip(repeats, views, strict=True)
        ]
        return replace(self, runs=runs, elsewhere=any(rung.density != density for rung in self.rungs))

    def moments(self, temperatures: Floats) -> Moments:
        """At the temperatures (G,), all of them in one pass over the samples."""
        return moments(self.mixture, self.runs, temperatures, [rung.inefficiency for rung in self.rungs])

    def effective_samples(self, temperature: float, kish: float) -> float:
        """Independent samples behind weights that are worth `kish`.

        Beyond the outermost rungs, and at another density, at most what should survive of the rungs: there the weights
        themselves tell too much, as the heaviest are those of samples that nobody drew. Rungs of which less than
        LEAST_SHARE survives do not count.
        """
        if self._is_between(temperature):
            return kish
        shares = zip(self.rungs, self.shares(temperature), strict=True)
        return min(kish, sum(share * rung.independent for rung, share in shares if share >= LEAST_SHARE))

    def surviving(self, temperature: float) -> float:
        """Share of the samples of the best rung that still counts; 1 between rungs."""
        return 1.0 if self._is_between(temperature) else max(self.shares(temperature))

    def _is_between(self, temperature: float) -> bool:
        return not self.elsewhere and self.rungs[0].temperature <= temperature <= self.rungs[-1].temperature

    def shares(self, temperature: float) -> list[float]:
        """Of each rung, what survives of its samples.

        At another density as if the change of the reduced potential were normal: <w>^2/<w^2> is then exp(-s^2), with s
        its standard deviation.
        """
        if not self.elsewhere:
            return [rung.surviving(temperature) for rung in self.rungs]
        changes: dict[int, list[Floats]] = defaultdict(list)
        for run in self.runs:
            changes[run.rung].append(run.energies / temperature - self.rungs[run.rung].slopes @ run.features)
        return [math.exp(-float(np.var(np.concatenate(each)))) for _, each in sorted(changes.items())]

    def free_energies(self, constants: Floats) -> list[Estimate]:
        """F/T less that of the group's first rung.

        constants : (d,), taken off the features
        """
        values = self.mixture.free_energies + (self.mixture.slopes - self.mixture.slopes[0]) @ constants
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


def _centres(series: Sequence[Series]) -> tuple[float, float, float]:
    """Means of U, W and W + X; zero for a column that is not recorded throughout."""
    samples = sum(map(len, series))
    energy = sum(float(np.sum(each.column(energy_name(each)))) for each in series) / samples
    virial, hypervirial = (
        sum(float(np.sum(each.column(name))) for each in series if each.has(name)) / samples
        for name in ("virial", "hypervirial")
    )
    return energy, virial, virial + hypervirial
