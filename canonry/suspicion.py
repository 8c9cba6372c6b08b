"""What gives away that samples are not what they are said to be."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from canonry.numbers import plain, with_error
from estimators.covariance import covariance
from estimators.estimate import Estimate, mean
from sampler.series import Series

__all__ = ["Times", "ensemble", "pressure_factor", "times", "unit_named"]

Floats = npt.NDArray[np.float64]

_UNEVEN = 0.05  # of the usual time between rows: what two of them may differ by
_SURE = 5.0  # standard errors: chance does not do that
_STILL = 1e-5  # variance of the energy, per particle and T^2, below which it is constant
_HEAT = (0.8, 1.25)  # mean kinetic energy over that of the temperature stated
_PRESSURE_UNITS = {"Pa": 1e-6, "Torr": 1.33322e-4, "kPa": 1e-3, "bar": 0.1, "atm": 0.101325, "MPa": 1.0, "GPa": 1e3}
"""MPa."""
_CLOSE = 0.1  # of a factor between two units
_FAR = 0.3  # of one, from which on a factor is another one


@dataclass(frozen=True)
class Times:
    """Rows to keep of a repeat, the time from one to the next, and what is to be said about them."""

    rows: npt.NDArray[np.int_]
    interval: float
    notes: tuple[str, ...]


def times(values: Floats) -> Times | None:
    """Rows in the order of time, each time once: where a run was taken up again, its later rows count.

    values : (n,); None where fewer than half of them rise, so that they are no times
    """
    later = np.append(np.minimum.accumulate(values[::-1])[::-1][1:], math.inf)
    rows = np.flatnonzero(values < later)
    if len(rows) < 2 or 2 * len(rows) < len(values):
        return None
    steps = np.diff(values[rows])
    interval = float(np.median(steps))
    notes = []
    if len(rows) < len(values):
        notes.append(
            f"{len(values) - len(rows)} of {len(values)} rows carry a time that stands there again further down; the "
            "later row counts"
        )
    uneven = int(np.sum(np.abs(steps - interval) > _UNEVEN * interval))
    if uneven:
        notes.append(
            f"the time between rows is not even: {plain(interval, 4)} as a rule, {uneven} times another, from "
            f"{plain(float(np.min(steps)), 4)} to {plain(float(np.max(steps)), 4)}; error bars take it as even"
        )
    return Times(rows, interval, tuple(notes))


def ensemble(series: Sequence[Series]) -> str:
    """Why the repeats of a rung cannot be canonical samples of a potential energy; empty where nothing says so.

    In the canonical ensemble potential and kinetic energy at one moment are independent. The kinetic energy's share in
    what is said to be the potential energy is 0 then, 1 in a total energy, and -1 where the total energy is constant.
    """
    state = series[0].state
    if not all(each.has("sampled_energy") for each in series):
        return _heat(series)
    energies = {each.chain: each.column("sampled_energy") for each in series}
    if all(float(np.var(values)) < _STILL * state.particles * state.temperature**2 for values in energies.values()):
        return "the potential energy hardly changes, as the total energy of a run at constant energy does"
    if problem := _heat(series):
        return problem
    if not all(each.has("kinetic") for each in series):
        return ""
    kinetic = {each.chain: each.column("kinetic") for each in series}
    if not all(float(np.var(values)) > 0.0 for values in kinetic.values()):
        return ""
    share = covariance(energies, kinetic) / covariance(kinetic, kinetic)
    told = f"{with_error(share.value, share.standard_error)} of the kinetic energy"
    if share.value > max(0.5, _SURE * share.standard_error):
        return f"the potential energy moves with {told}, none of it is expected: this is a total energy"
    if -share.value > max(0.5, _SURE * share.standard_error):
        return f"potential and kinetic energy make up for one another ({told}): the total energy was held constant"
    return ""


def _heat(series: Sequence[Series]) -> str:
    if not all(each.has("kinetic") for each in series):
        return ""
    first = series[0]
    found = mean({each.chain: each.column("kinetic") for each in series}).value
    ratio = found / (0.5 * first.kinetic_freedom * first.state.temperature)
    if _HEAT[0] < ratio < _HEAT[1]:
        return ""
    return f"the mean kinetic energy is {plain(ratio, 3)} times what temperature and kinetic_freedom make it"


def pressure_factor(rungs: Sequence[Sequence[Series]], *, instantaneous: bool) -> Estimate | None:
    """By what factor the pressures of an isochore are too large, from what their ideal part does; None if unknown.

    rungs : repeats of each, by rising temperature, whose virial is made of a pressure column
    instantaneous : whether the pressure followed the kinetic energy, which the virial then is to be free of

    A pressure that follows the kinetic energy K moves by 2 K/(3 V). Any pressure rises from one temperature to the next
    by its covariance with the energy, which scales with it, and by rho dT, which does not.
    """
    found = list(_by_kinetic(rungs) if instantaneous else _by_temperature(rungs))
    found = [each for each in found if 0.0 < each.standard_error < math.inf]
    if not found:
        return None
    weights = [each.standard_error**-2 for each in found]
    first, *others = (each * (weight / sum(weights)) for each, weight in zip(found, weights, strict=True))
    for each in others:
        first = first + each
    return first


def _by_kinetic(rungs: Sequence[Sequence[Series]]) -> Iterator[Estimate]:
    for series in rungs:
        if all(each.has("kinetic", "virial") for each in series):
            kinetic = {each.chain: each.column("kinetic") for each in series}
            virial = {each.chain: each.column("virial") for each in series}
            yield covariance(virial, kinetic) / covariance(kinetic, kinetic) * 1.5 + 1.0


def _by_temperature(rungs: Sequence[Sequence[Series]]) -> Iterator[Estimate]:
    for cold, warm in pairwise(rungs):
        if not all(each.has("virial", "sampled_energy") for each in (*cold, *warm)):
            continue
        low, high = cold[0].state, warm[0].state
        rise = _mean_virial(warm) - _mean_virial(cold)
        fluctuation = (_coupling(cold) + _coupling(warm)) * (0.5 / low.temperature - 0.5 / high.temperature)
        yield (rise - fluctuation) / (low.particles * (high.temperature - low.temperature)) + 1.0


def _mean_virial(series: Sequence[Series]) -> Estimate:
    return mean({each.chain: each.column("virial") for each in series})


def _coupling(series: Sequence[Series]) -> Estimate:
    return covariance(
        {each.chain: each.column("virial") for each in series},
        {each.chain: each.column("sampled_energy") for each in series},
    )


def unit_named(factor: Estimate, stated: float | None) -> str:
    """The words for a pressure column whose values are off by a factor; empty where they may be right.

    stated : the unit stated, MPa; None where that is not known
    """
    if abs(factor.value - 1.0) < max(_FAR, _SURE * factor.standard_error):
        return ""
    told = with_error(factor.value, factor.standard_error)
    words = f"the ideal part of the pressures is {told} times what density and temperature make it"
    if stated is None or factor.value <= 0.0:
        return words
    off = {name: abs(math.log(factor.value * size / stated)) for name, size in _PRESSURE_UNITS.items()}
    name = min(off, key=lambda each: off[each])
    allowed = max(_CLOSE, 3.0 * factor.standard_error / factor.value)
    return f"{words}, as in values in {name}" if off[name] < allowed else words
