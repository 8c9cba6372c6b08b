"""One residual Helmholtz energy behind all that was sampled, and every property that follows from it in between.

As all properties are derivatives of one function, they are consistent with one another: energies with the slopes of
free energies, thermal pressures with those of pressures. Each measured derivative so adds to all others.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from estimators.errors import BadSeries
from estimators.estimate import Estimate, exact
from estimators.surface.answer import METHOD, Answer, clear_formulas, estimate, gradient
from estimators.surface.hull import Hull, hull
from estimators.surface.kernel import TRENDS
from estimators.surface.measured import Change, Measured, Point, measured
from estimators.surface.properties import Formula
from estimators.surface.regression import Prediction, Regression, regression
from estimators.surface.virial import VirialCurve, virial_curve

__all__ = ["HeldOut", "Surface", "surface"]

Floats = npt.NDArray[np.float64]

NEARBY = 1e-4  # relative, of densities for slopes along an isotherm
GRID = 129  # densities at which an isobar is looked for


@dataclass(frozen=True)
class HeldOut:
    """A measured property, by name, beside what the surface says without its state."""

    temperature: float
    density: float
    name: str
    value: float
    predicted: float
    combined_error: float

    @property
    def z(self) -> float:
        """Deviation in combined standard errors."""
        return (self.value - self.predicted) / self.combined_error


@dataclass(frozen=True, eq=False)
class Surface:
    """alpha(tau, rho) = A_res/(N T), tau = 1/T, through all that was measured; build it with `surface`."""

    ideal_heat_capacity: float | None
    _measured: Measured
    _virial: VirialCurve
    _regression: Regression
    _hull: Hull
    _spoken: Callable[[str, float], str]

    def expected(self, temperatures: npt.ArrayLike, densities: npt.ArrayLike) -> Floats:
        """(..., 6), alpha, A10, A01, A20, A11, A02 over the broadcast shape of both, anywhere, without error bars."""
        tau, rho = np.broadcast_arrays(1.0 / np.asarray(temperatures, dtype=float), np.asarray(densities, dtype=float))
        points = np.stack([tau.ravel(), rho.ravel()], axis=1)
        found = self._regression.expected(points) + self._virial.derivatives(points)
        return np.asarray(found.reshape(*tau.shape, 6))

    def covariance(self, temperature: float, density: float) -> Floats:
        """(6, 6), of the errors of what is `expected` at a state."""
        return self._predicted(temperature, density).covariance

    def at(self, temperature: float, density: float) -> Answer:
        """All properties at a state, refused outside the convex hull of the sampled ones in 1/T and density."""
        reason = self._refusal(temperature, density)
        if reason:
            return Answer(temperature, density, {}, refused=reason)
        found = self._predicted(temperature, density)
        properties = {
            name: estimate(formula, gradient(formula, found.values), found, self._measured)
            for name, formula in self._formulas(found, temperature, density).items()
        }
        return Answer(temperature, density, properties, self._path(temperature, density))

    def isobar(self, pressure: float, temperatures: Sequence[float]) -> list[Answer]:
        """All properties, and `density` among them, at a pressure (epsilon/sigma^3) and each of the temperatures.

        Error bars are those at the pressure: they hold the error of the density. Refused where the sampled densities do
        not reach the pressure, or more than one stable density has it (`density` is then not a number).
        """
        return [self._at_pressure(pressure, temperature) for temperature in temperatures]

    def held_out(self) -> list[HeldOut]:
        """Every measured property beside what the surface says without its state.

        The smoothness of the surface is not found anew for each. Without a corner, its state is outside the hull.
        """
        found = []
        for point in dict.fromkeys(point for point, name in self._measured.labels if name):
            entries = [index for index, touched in enumerate(self._measured.touches) if point in touched]
            deviations, covariance = self._regression.left_out(np.array(entries))
            for place, index in enumerate(entries):
                name, value = self._measured.labels[index][1], self._measured.estimates[index].value
                if name:
                    error = math.sqrt(covariance[place, place])
                    found.append(HeldOut(*point, name, value, value - float(deviations[place]), error))
        return found

    def _predicted(self, temperature: float, density: float) -> Prediction:
        point = np.array([1.0 / temperature, density])
        found = self._regression.predict(point)
        return replace(found, values=found.values + self._virial.derivatives(point[None])[0])

    def _formulas(self, found: Prediction, temperature: float, density: float) -> dict[str, Formula]:
        ideal = self.ideal_heat_capacity
        return clear_formulas(found, temperature=temperature, density=density, ideal_heat_capacity=ideal)

    def _refusal(self, temperature: float, density: float) -> str:
        if not all(math.isfinite(each) and each > 0.0 for each in (temperature, density)):
            return f"temperature and density must be positive numbers, found {temperature!r} and {density!r}"
        if self._hull.holds(1.0 / temperature, density):
            return ""
        points = np.array([(1.0 / t, rho) for t, rho in self._measured.points])
        away = np.sum(((points - [1.0 / temperature, density]) / np.ptp(points, axis=0)) ** 2, axis=1)
        nearest = self._state(*self._measured.points[int(np.argmin(away))])
        return (
            f"{self._state(temperature, density)} lies outside the sampled states, where a surface tells nothing; "
            f"the nearest of them is {nearest}, sample one beyond"
        )

    def _state(self, temperature: float, density: float) -> str:
        return f"T = {self._spoken('temperature', temperature)} at density {self._spoken('density', density)}"

    def _path(self, temperature: float, density: float) -> str:
        sampled = sorted({rho for _, rho in self._measured.points if rho <= density * (1.0 + NEARBY)})
        passed = ", ".join(self._spoken("density", rho) for rho in sampled)
        return (
            f"from the ideal gas along the isotherm up to {self._state(temperature, density)}: at no density the "
            f"second virial coefficient is exact, sampled densities on the way are {passed}"
        )

    def _at_pressure(self, pressure: float, temperature: float) -> Answer:
        found = self._density(pressure, temperature)
        if isinstance(found, str):
            return Answer(temperature, math.nan, {}, refused=found)
        density, here = found, self._predicted(temperature, found)
        formulas = self._formulas(here, temperature, density)
        rates = self._along_isotherm(formulas, temperature, density)
        push = gradient(formulas["pressure"], here.values) / rates["pressure"]
        properties = {
            name: estimate(formula, gradient(formula, here.values) - rates[name] * push, here, self._measured)
            for name, formula in formulas.items()
        }
        properties["pressure"] = exact(pressure, method=METHOD)
        properties["density"] = estimate(lambda values: density, -push, here, self._measured)
        return Answer(temperature, density, properties, self._path(temperature, density))

    def _along_isotherm(self, formulas: Mapping[str, Formula], temperature: float, density: float) -> dict[str, float]:
        """Slopes of the properties with density."""
        ends = density * (1.0 - NEARBY), density * (1.0 + NEARBY)
        values = []
        for end in ends:
            there = Prediction(self.expected(temperature, end), np.zeros((6, 0)), np.zeros((6, 6)))
            own = self._formulas(there, temperature, end)
            values.append({name: float(own[name](there.values)) for name in formulas})
        low, high = values
        return {name: (high[name] - low[name]) / (ends[1] - ends[0]) for name in formulas}

    def _density(self, pressure: float, temperature: float) -> float | str:
        """The stable density at a pressure, or why there is none."""
        from scipy.optimize import brentq

        span = self._hull.densities(1.0 / temperature) if math.isfinite(temperature) and temperature > 0.0 else None
        if span is None:
            return f"T = {self._spoken('temperature', temperature)} lies outside the sampled states"
        grid = np.linspace(*span, GRID)
        pressures = self._pressures(temperature, grid)
        rises = np.flatnonzero((pressures[:-1] <= pressure) & (pressure < pressures[1:]))
        at = f"at T = {self._spoken('temperature', temperature)}"
        if not len(rises) and pressures[-1] == pressure:
            return float(grid[-1])
        if not len(rises):
            low, high = (self._spoken("pressure", float(end)) for end in (np.min(pressures), np.max(pressures)))
            return f"sampled densities {at} hold pressures from {low} to {high}"
        if len(rises) > 1:
            return f"more than one stable density has this pressure {at}: the fluid is in two phases there"
        ends = grid[rises[0]], grid[rises[0] + 1]
        return float(brentq(lambda rho: float(self._pressures(temperature, np.array([rho]))[0]) - pressure, *ends))

    def _pressures(self, temperature: float, densities: Floats) -> Floats:
        return densities * temperature * (1.0 + self.expected(temperature, densities)[:, 2])


_UNITS = {"temperature": "epsilon/k_B", "density": "sigma^-3", "pressure": "epsilon/sigma^3"}


def _in_reduced_units(quantity: str, value: float) -> str:
    return f"{value:.5g} {_UNITS[quantity]}"


def surface(
    states: Mapping[Point, Mapping[str, Estimate]],
    *,
    second_virial: Callable[[float], float],
    changes: Sequence[Change] = (),
    ideal_heat_capacity: float | None = None,
    spoken: Callable[[str, float], str] = _in_reduced_units,
) -> Surface | None:
    """The surface through what was measured at (temperature, density); None where these states span no area.

    states : properties of each, by name, of which `measured.OBSERVED` are taken; more than one density and temperature
    second_virial : B2(T), sigma^3, of the fluid as sampled: in a box of N particles (1 - 1/N) times that of infinitely
        many
    changes : of alpha along isochores
    ideal_heat_capacity : c_v of the ideal gas, k_B per particle; without it there are no totals
    spoken : writes a temperature, density or pressure (its name comes first) in words, with its unit

    Raises BadSeries where values, errors or B2 are no finite numbers, or fewer than the surface needs; NotSolved if no
    smooth surface is found.
    """
    points = np.array([(1.0 / temperature, density) for temperature, density in states]).reshape(-1, 2)
    outline = hull(points)
    if outline is None:
        return None
    found = measured(states, changes)
    if len(found.estimates) <= len(TRENDS):
        raise BadSeries(f"a surface needs more than {len(TRENDS)} measured properties, found {len(found.estimates)}")
    taus = [1.0 / temperature for temperature, _ in found.points]
    virial = virial_curve(second_virial, (min(taus), max(taus)))
    return Surface(ideal_heat_capacity, found, virial, regression(found.data(virial)), outline, spoken)
