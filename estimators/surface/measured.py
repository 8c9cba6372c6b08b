"""What was measured at the sampled states, as equations for the surface, with the covariance of the errors."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from estimators.covariance import covariance_matrix
from estimators.errors import BadSeries
from estimators.estimate import Chain, Estimate, State
from estimators.gamma import coarsened
from estimators.surface.properties import linear
from estimators.surface.regression import Data
from estimators.surface.virial import VirialCurve

__all__ = ["OBSERVED", "Change", "Measured", "measured"]

Floats = npt.NDArray[np.float64]
Point = tuple[float, float]  # temperature, density

OBSERVED = (
    "residual_energy",
    "pressure",
    "residual_heat_capacity",
    "thermal_pressure",
    "bulk_modulus",
    "residual_helmholtz_energy",
    "residual_chemical_potential",
)
"""Properties of a state that the surface takes in; what is not among them is left aside."""
LONGEST = 1024  # entries of the influence of a chain; longer ones are summed over blocks


@dataclass(frozen=True)
class Change:
    """alpha at temperature `end` less that at `start`, both at one density: a change of residual F/(N T)."""

    start: float
    end: float
    density: float
    value: Estimate


@dataclass(frozen=True, eq=False)
class Measured:
    """Measurements in a row; build it with `measured`.

    labels : of each entry, its state and property; a change has that of its end and no property
    touches : of each entry, the states it tells of
    rows : (n, 6 P), of which combination of the A_mn at `points` each is a measurement
    """

    points: list[Point]
    labels: list[tuple[Point, str]]
    touches: list[tuple[Point, ...]]
    rows: Floats
    constants: Floats
    estimates: list[Estimate]

    def data(self, virial: VirialCurve) -> Data:
        """Without what second virial coefficient and ideal gas make of them."""
        points = np.array([(1.0 / temperature, density) for temperature, density in self.points])
        known = self.constants + self.rows @ virial.derivatives(points).ravel()
        return Data(points, self.rows, np.array([each.value for each in self.estimates]) - known, self.noise)

    @cached_property
    def noise(self) -> Floats:
        """(n, n), covariance of the errors: estimates that share no chain are independent."""
        noise = np.zeros((len(self.estimates), len(self.estimates)))
        for entries in _connected([each.influence for each in self.estimates]):
            noise[np.ix_(entries, entries)] = covariance_matrix([self.estimates[entry] for entry in entries])
        return noise

    @cached_property
    def unsampled(self) -> Floats:
        """(n,), variance of each that no sample carries."""
        return np.array([each.unsampled for each in self.estimates])

    def influence(self, weights: Floats) -> dict[Chain, Floats]:
        """Of the sum of all entries with these weights (n,)."""
        return {chain: weights[entries] @ series for chain, (entries, series) in self._stacked.items()}

    @cached_property
    def _stacked(self) -> dict[Chain, tuple[npt.NDArray[np.int_], Floats]]:
        found = {}
        for chain in sorted({chain for each in self.estimates for chain in each.influence}):
            entries = [index for index, each in enumerate(self.estimates) if chain in each.influence]
            series = [self.estimates[index].influence[chain] for index in entries]
            length = min(LONGEST, *map(len, series))
            found[chain] = np.array(entries), np.stack([coarsened(each, length) for each in series])
        return found

    @cached_property
    def underlying(self) -> dict[State, float]:
        """Effective samples of what the fluctuations are made of, by state."""
        found: dict[State, float] = {}
        for each in self.estimates:
            for state, samples in each.underlying.items():
                found[state] = min(samples, found.get(state, math.inf))
        return found


def measured(states: Mapping[Point, Mapping[str, Estimate]], changes: Sequence[Change]) -> Measured:
    """Of all states and changes, those with a finite error bar.

    Raises BadSeries if a temperature or density is not positive, a value is not finite or an error is zero.
    """
    points = sorted(set(states) | {(each.start, each.density) for each in changes} | _ends(changes))
    if not all(math.isfinite(each) and each > 0.0 for point in points for each in point):
        raise BadSeries("a surface needs positive temperatures and densities")
    place = {point: 6 * index for index, point in enumerate(points)}
    found: list[tuple[tuple[Point, str], tuple[Point, ...], Floats, float, Estimate]] = []
    for point, properties in states.items():
        for name in filter(properties.__contains__, OBSERVED):
            form = linear(name, temperature=point[0], density=point[1])
            row = np.zeros(6 * len(points))
            row[place[point] : place[point] + 6] = form.slopes
            found.append(((point, name), (point,), row, form.constant, properties[name]))
    for each in changes:
        start, end = (each.start, each.density), (each.end, each.density)
        row = np.zeros(6 * len(points))
        row[place[end]], row[place[start]] = 1.0, -1.0
        found.append(((end, ""), (start, end), row, 0.0, each.value))
    for (point, name), *_, estimate in found:
        if not math.isfinite(estimate.value) or estimate.standard_error == 0.0:
            raise BadSeries(
                f"{name or 'the change'} at T {point[0]:g}, density {point[1]:g} is no number with an error"
            )
    kept = [entry for entry in found if math.isfinite(entry[-1].standard_error)]
    labels, touches, rows, constants, estimates = zip(*kept, strict=True) if kept else ((),) * 5
    shape = (len(kept), 6 * len(points))
    return Measured(
        points, list(labels), list(touches), np.array(rows).reshape(shape), np.array(constants), list(estimates)
    )


def _ends(changes: Sequence[Change]) -> set[Point]:
    return {(each.end, each.density) for each in changes}


def _connected(chains: Sequence[Iterable[Chain]]) -> list[list[int]]:
    """Indices of those that share chains, directly or through others."""
    groups: list[tuple[set[Chain], list[int]]] = []
    for index, each in enumerate(chains):
        own, members = set(each), [index]
        apart = []
        for group in groups:
            if own.isdisjoint(group[0]):
                apart.append(group)
            else:
                own |= group[0]
                members += group[1]
        groups = [*apart, (own, members)]
    return [sorted(members) for _, members in groups]
