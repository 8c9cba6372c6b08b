"""Reweighting over all isochores: properties at temperatures and densities beside those that were sampled.

At one density the reduced potential of a sample is its energy over T. Where it is linear in sums of powers of the
distances, a change of density is a uniform scaling of all of them, so that the reduced potential is linear in two
features at every density, and rungs of neighbouring densities that share samples are solved together. Other fluids are
evaluated again at the density asked for, from their stored positions, and solved density by density.

Scaled coordinates carry no volume: the free energies are residual ones. Support is thin: of 500 particles in a liquid a
change of density by half a percent leaves few samples that still count.
"""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from estimators.errors import BadSeries
from estimators.group import Group, Rung
from estimators.overlap import connected
from estimators.reweight import Reweighted, check, rung_of, solved
from estimators.trust import FEWEST_SAMPLES
from sampler.fluid import State
from sampler.series import Series

__all__ = ["Field", "field", "rescaled"]

Floats = npt.NDArray[np.float64]
Look = Callable[[Series, float], Series]

NEAR = 0.05  # relative difference of densities beyond which rungs are not looked at as neighbours


@dataclass(frozen=True)
class Field:
    """Rungs of all densities, solved where they share samples; build it with `field`.

    look : series as they are at another density
    """

    groups: list[Group]
    look: Look

    def at(self, temperature: float, density: float) -> Reweighted:
        """Properties at a state, refused where fewer than 50 effective samples support them."""
        return self.along([temperature], density)[0]

    def along(self, temperatures: Sequence[float], density: float) -> list[Reweighted]:
        """What `at` gives at each temperature, at hardly more cost than at one."""
        best = [Reweighted(each, 0.0, {}, _refusal(0.0)) for each in temperatures]
        for group in self.groups:
            if all(abs(math.log(rung.density / density)) > NEAR for rung in group.rungs):
                continue
            seen = group.seen(density, self.look)
            found = seen.moments(np.array(temperatures))
            for index, temperature in enumerate(temperatures):
                samples = seen.effective_samples(temperature, float(found.kish[index]))
                if samples <= best[index].effective_samples:
                    continue
                supported = samples >= FEWEST_SAMPLES
                properties = seen.properties(temperature, found, index) if supported else {}
                best[index] = Reweighted(
                    temperature,
                    samples,
                    properties,
                    "" if supported else _refusal(samples),
                    seen.surviving(temperature),
                )
        return best


def field(series: Sequence[Series], *, look: Look | None = None) -> Field:
    """All repeats of all rungs of one fluid and one number of particles; series without samples are left out.

    look : gives a series' energies and virials at another density, where they are no sums of powers; by default
        `rescaled`
    Raises BadSeries and NotSolved as `pool` does, BadSeries also where the fluid needs `look` and there is none.
    """
    series = [each for each in series if len(each)]
    check(series, densities=True)
    by_state: dict[State, list[Series]] = defaultdict(list)
    for each in series:
        by_state[each.state].append(each)
    states = sorted(by_state, key=lambda state: (state.density, state.temperature))
    middle = math.exp(float(np.mean([math.log(state.density) for state in states])))
    make = (lambda repeats: _scaling(repeats, middle)) if look is None else _alone
    rungs = [make(by_state[state]) for state in states]
    labels = connected(
        rungs,
        lambda one, other: (
            one.density == other.density or (look is None and abs(math.log(one.density / other.density)) < NEAR)
        ),
    )
    groups = [
        solved([rung for rung, own in zip(rungs, labels, strict=True) if own == label]) for label in np.unique(labels)
    ]
    return Field(groups, look or rescaled)


def rescaled(series: Series, density: float) -> Series:
    """Energies and virials of samples whose distances are all scaled to another density, and the cutoff with them.

    Raises BadSeries where the fluid's energy is no sum of powers.
    """
    return series.moved(density, series.fluid.rescaled(_power_sums(series), density / series.state.density))


def _power_sums(series: Series) -> Floats:
    needed = ("energy", "sampled_energy", "virial")
    sums = series.fluid.power_sums(*map(series.column, needed)) if series.has(*needed) else None
    if sums is None:
        raise BadSeries(
            f"the series at {series.state}, repeat {series.repeat}, cannot be scaled to another density: that takes a "
            "corrected fluid whose energy and virial are on record; other fluids are evaluated again from frames"
        )
    return sums


def _scaling(repeats: list[Series], middle: float) -> Rung:
    """A rung whose features are the power sums of U_dyn at a density in the middle of all."""
    state, fluid = repeats[0].state, repeats[0].fluid
    features = [
        _power_sums(each)[1] * (fluid.slopes(middle / state.density) / fluid.slopes(1.0))[:, None] for each in repeats
    ]
    return rung_of(state.temperature, repeats, features, fluid.slopes(state.density / middle) / state.temperature)


def _alone(repeats: list[Series]) -> Rung:
    """A rung whose feature is its energy."""
    temperature = repeats[0].state.temperature
    features = [each.column("sampled_energy")[None] for each in repeats]
    return rung_of(temperature, repeats, features, np.array([1.0 / temperature]))


def _refusal(samples: float) -> str:
    return f"{samples:.3g} effective samples support this state, {FEWEST_SAMPLES:.0f} are needed"
