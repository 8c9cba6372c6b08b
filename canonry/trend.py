"""How a fluid's energy, heat capacity and the noise of its estimates run along an isochore, from pilots."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from functools import lru_cache
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt
from numpy.polynomial import Polynomial

from canonry.pilot import WIDEST, Pilot, pilot
from canonry.quantities import rounded
from canonry.study import Study
from sampler.fluid import State

if TYPE_CHECKING:
    from estimators.estimate import Estimate
    from sampler.fluid import Fluid
    from sampler.protocol import Protocol
    from sampler.series import Series

__all__ = ["ORDERS", "Trend", "trends"]

Floats = npt.NDArray[np.float64]

ORDERS = ("energy", "energy squared", "energy cubed")
_STEP = 0.2  # in ln T, from pilot to pilot
_FEWEST, _MOST = 3, 7  # pilots of an isochore of as many rungs or more
_TOGETHER = 12  # pilots of full length; more are shorter
_SHORTEST = 1_000_000  # particle-steps
_LONGEST = 4  # times as long a pilot may become where the fluid forgets slowly
_SAMPLES = 32  # at least, so that there is anything to tell
_FEW = 500  # particles
_DEGREE = 3  # of the energy in 1/T, at most
_GROWTH = 1.03  # a step takes N to this power: benchmarks/sampler_speed.py, from 500 to 100 000 particles
_FLOOR = 0.3  # of the lowest heat capacity of a pilot: where the fit may not go below


@dataclass(frozen=True, eq=False)
class Trend:
    """One isochore as smooth functions of 1/T, intensive and residual, in reduced units.

    particles : of the pilots
    seconds : wall time of a step of theirs of one worker, while all were busy
    """

    particles: int
    seconds: float
    _energy: Polynomial
    _lowest: float
    _waiting: Mapping[str, Polynomial]
    _spread: Polynomial
    _share: float

    def energy(self, temperatures: Floats) -> Floats:
        """Per particle."""
        return np.asarray(self._energy(1.0 / temperatures))

    def heat_capacity(self, temperatures: Floats) -> Floats:
        """Per particle, the slope of the energy."""
        slope = self._energy.deriv()(1.0 / temperatures)
        return np.asarray(np.maximum(-slope / temperatures**2, self._lowest))

    def waiting(self, name: str, temperatures: Floats) -> Floats:
        """Time for an independent sample: twice the autocorrelation time of a column, (K,).

        name : "pressure", or one of ORDERS, Hermite polynomials of the energy: where the energy is Gaussian, the error
            of the heat capacity from time t is c sqrt(2 waiting / t) for the second
        """
        return np.asarray(np.exp(self._waiting[name](1.0 / temperatures)))

    def spread(self, temperatures: Floats) -> tuple[Floats, float]:
        """Variance of the pressure from sample to sample, times particles, and the share that follows the energy."""
        return np.exp(self._spread(1.0 / temperatures)), self._share

    def seconds_per_step(self, particles: int) -> float:
        """Wall time of a step with so many."""
        return self.seconds * math.pow(particles / self.particles, _GROWTH)


def trends(study: Study, *, particle_steps: int, workers: int | None = None) -> Mapping[float, Trend]:
    """The trend of every isochore, by density, from pilots over the range of its ladder or of its rungs.

    particle_steps : of each pilot, fewer where there are many; up to four times as many where the energy forgets
        slowly, though no more than a listed rung is to have
    Pilots are of some hundred particles where the study has more: what they tell does not depend on the size. Asked
    again for the same, the answer is the one there was. Raises as `canonry.pilot` does.
    """
    ladder = study.ladder
    states = tuple(
        State(temperature, density, _few(study, density))
        for density, own in study.isochores.items()
        for temperature in (
            _placed(own[0].temperature, own[-1].temperature, len(own))
            if ladder is None
            else _placed(ladder.start, ladder.end, _MOST)
        )
    )
    fewest = _SAMPLES * min(study.sampling.record_every, WIDEST) * max(state.particles for state in states)
    effort = max(particle_steps * min(_TOGETHER / len(states), 1.0), min(_SHORTEST, particle_steps), fewest)
    most = _LONGEST * effort if ladder else max(min(_LONGEST * effort, _rung(study)), effort)
    return _sampled(_Asked(study.fluid, study.sampling, states, round(effort), round(most), workers, study))


def _rung(study: Study) -> int:
    """Particle-steps of a rung, repeats together."""
    return study.sampling.steps * study.sampling.repeats * study.states[0].particles


@dataclass(frozen=True)
class _Asked:
    """What trends depend on, by which they are known again."""

    fluid: Fluid
    sampling: Protocol
    states: tuple[State, ...]
    particle_steps: int
    most: int
    workers: int | None
    study: Study = field(compare=False)


@lru_cache(maxsize=4)
def _sampled(asked: _Asked) -> Mapping[float, Trend]:
    runs = pilot(asked.study, asked.states, particle_steps=asked.particle_steps, most=asked.most, workers=asked.workers)
    densities = dict.fromkeys(state.density for state in runs)
    return {rho: _fitted([run for state, run in runs.items() if state.density == rho]) for rho in densities}


def _few(study: Study, density: float) -> int:
    """Some hundred particles, or as many as the cutoff needs."""
    needed = math.ceil(density * (2.0 * study.fluid.cutoff) ** 3) + 1
    return min(study.states[0].particles, max(_FEW, needed))


def _placed(low: float, high: float, rungs: int) -> list[float]:
    """Temperatures of pilots, evenly in ln T."""
    number = min(rungs, _MOST, max(_FEWEST, math.ceil(math.log(high / low) / _STEP) + 1))
    return [rounded(float(each)) for each in np.geomspace(low, high, number)]


def _fitted(runs: Sequence[Pilot]) -> Trend:
    """Energies and heat capacities fitted together, each by its error; the rest as exponentials of lines in 1/T."""
    from estimators.canonical import rung_properties

    inverse = np.array([1.0 / run.series.state.temperature for run in runs])
    own = [rung_properties([run.series]) for run in runs]
    energies, capacities = (
        np.array([[each[name].value, each[name].standard_error] for each in own]).T
        for name in ("residual_energy", "residual_heat_capacity")
    )
    waiting = np.array([_waiting(run.series, each) for run, each in zip(runs, own, strict=True)])
    spreads, shares = np.array([_pressure_scatter(run.series) for run in runs]).T
    return Trend(
        runs[0].series.state.particles,
        float(np.mean([run.seconds_per_step for run in runs])),
        _energy_fit(inverse, energies, capacities),
        _FLOOR * float(max(np.min(capacities[0]), 1e-6)),
        {name: _line(inverse, each) for name, each in zip((*ORDERS, "pressure"), waiting.T, strict=True)},
        _line(inverse, spreads),
        float(np.mean(shares)),
    )


def _waiting(series: Series, own: Mapping[str, Estimate]) -> list[float]:
    """Time for an independent sample of each of ORDERS and of the pressure.

    In a bath the energy is taken as a Gaussian process: its Hermite polynomials are correlated as powers of its own
    correlation, which a short series tells better than they do; what noise adds to the square is taken off.
    """
    from estimators.gamma import autocovariances, scatter

    samples, energies = len(series), series.column("sampled_energy")
    scattered = scatter([energies])
    if series.bath:
        window = scattered.window
        covariances = autocovariances([energies - np.mean(energies)], window + 1)
        correlations = covariances[1:] / covariances[0]
        noise = window / samples
        squares = max(float(np.sum(correlations**2)) - noise, 0.0) / (1.0 + 2.0 * noise)
        of_energy = [scattered.tau, 0.5 + squares, 0.5 + max(float(np.sum(correlations**3)), 0.0)]
    else:
        capacity = own["residual_heat_capacity"]
        of_energy = [scattered.tau] + [(capacity.standard_error / capacity.value) ** 2 * samples / 4.0] * 2
    return [2.0 * tau * series.interval for tau in (*of_energy, scatter([series.column("virial")]).tau)]


def _energy_fit(inverse: Floats, energies: Floats, capacities: Floats) -> Polynomial:
    """A polynomial in 1/T through the energies whose slope is that of the heat capacities.

    inverse : (n,), 1/T; energies, capacities : (2, n), values and standard errors
    """
    powers = np.arange(min(len(inverse), _DEGREE) + 1)
    centre = float(np.mean(inverse))
    x = (inverse - centre)[:, None]
    slopes = -powers * x ** np.maximum(powers - 1, 0) * inverse[:, None] ** 2
    errors = np.concatenate([energies[1], capacities[1]])
    weights = 1.0 / np.clip(errors, 1e-12, 1e6)
    rows, values = np.concatenate([x**powers, slopes]), np.concatenate([energies[0], capacities[0]])
    found = np.linalg.lstsq(rows * weights[:, None], values * weights, rcond=None)[0]
    return Polynomial(found)(Polynomial([-centre, 1.0]))


def _line(inverse: Floats, values: Floats) -> Polynomial:
    """The straight line in 1/T nearest to the logarithms of values."""
    degree = min(len(inverse) - 1, 1)
    return Polynomial.fit(inverse, np.log(np.maximum(values, 1e-300)), degree).convert()


def _pressure_scatter(series: Series) -> tuple[float, float]:
    """Variance from sample to sample, times particles, and the squared correlation with the sampled energy."""
    virials, energies = series.column("virial"), series.column("sampled_energy")
    shared = float(np.corrcoef(virials, energies)[0, 1]) ** 2
    return float(np.var(virials)) / series.state.volume**2 * series.state.particles, shared
