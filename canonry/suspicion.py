"""What gives away that samples are not what they are said to be."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from canonry.notes import Note
from canonry.numbers import plain, with_error
from canonry.units import Scale
from estimators.covariance import covariance
from estimators.estimate import Chain, Estimate, mean
from estimators.structure import pair_structure
from sampler.series import Series

__all__ = ["Times", "ensemble", "pressures", "shows_unit", "times"]

Floats = npt.NDArray[np.float64]

_UNEVEN = 0.05  # of the usual time between rows: what two of them may differ by
_FEW_UNEVEN = 0.01  # of the intervals: what cannot change an error bar by more
_SURE = 4.0  # standard errors: chance does that once in 16 000 times
_STILL = 1e-5  # variance of the energy, per particle and T^2, below which it is constant
_HEAT = (0.8, 1.25)  # mean kinetic energy over that of the temperature stated
_UNITS = {"Pa": 1e-6, "Torr": 1.33322e-4, "kPa": 1e-3, "bar": 0.1, "atm": 0.101325, "MPa": 1.0, "GPa": 1e3}
"""MPa."""
_ALIKE = 1.3  # ratio of two units up to which they cannot be told from one another
_CLOSE = 0.02  # of a known pressure: how well a model is the one stated
_NEAR = 0.1  # of a known pressure: within which another unit has to bring it
_FRAMES = 50  # of a repeat that are looked at


@dataclass(frozen=True)
class Times:
    """Rows to keep of a repeat, the time from one to the next, and what is to be said about them."""

    rows: npt.NDArray[np.int_]
    interval: float
    notes: tuple[Note, ...]


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
    notes: list[Note] = []
    if len(rows) < len(values):
        said = f"{len(values) - len(rows)} of {len(values)} rows carry a time that stands there again further down"
        notes.append(Note(f"{said}; the later row counts", "times-again"))
    uneven = int(np.sum(np.abs(steps - interval) > _UNEVEN * interval))
    if uneven:
        shortest, longest = (plain(float(each(steps)) / interval, 3) for each in (np.min, np.max))
        said = (
            f"rows are not even in time: {uneven} of {len(steps)} intervals differ from the usual one, they are from "
            f"{shortest} to {longest} of it; error bars take them as even"
        )
        notes.append(Note(said, "times-uneven" if uneven > _FEW_UNEVEN * len(steps) else ""))
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
    if not all(each.has("kinetic") for each in series):
        return ""
    kinetic = {each.chain: each.column("kinetic") for each in series}
    if not all(float(np.var(values)) > 0.0 for values in kinetic.values()):
        return _heat(series)
    share = covariance(energies, kinetic) / covariance(kinetic, kinetic)
    told = f"{with_error(share.value, share.standard_error)} of the kinetic energy"
    if share.value > max(0.5, _SURE * share.standard_error):
        return f"the potential energy holds {told}, as a total energy does"
    if -share.value > max(0.5, _SURE * share.standard_error):
        return f"the potential energy makes up for {told}, as at constant total energy"
    return _heat(series)


def _heat(series: Sequence[Series]) -> str:
    if not all(each.has("kinetic") for each in series):
        return ""
    first = series[0]
    found = mean({each.chain: each.column("kinetic") for each in series}).value
    ratio = found / (0.5 * first.kinetic_freedom * first.state.temperature)
    if _HEAT[0] < ratio < _HEAT[1]:
        return ""
    return (
        f"the mean kinetic energy is {plain(ratio, 3)} times what temperature and kinetic_freedom make it, in the unit "
        "and for the number of molecules that are stated"
    )


def pressures(rungs: Sequence[Sequence[Series]], *, follow: bool, unit: float, scale: Scale | None) -> str:
    """Why the pressures of an isochore are in another unit than stated; empty where nothing says so.

    rungs : the repeats of each, by rising temperature, whose virial was made of a pressure column
    follow : whether these pressures follow the kinetic energy, which was taken off with the unit stated
    unit : the one stated, in reduced units
    """
    stated = None if scale is None else unit * scale.factor("pressure")
    factor = _joined(list(_by_kinetic(rungs) if follow else _by_temperature(rungs)))
    if factor is not None and abs(factor.value - 1.0) > max(_ALIKE - 1.0, _SURE * factor.standard_error):
        told = with_error(factor.value, factor.standard_error)
        return f"the ideal part of the pressures is {told} times that of the state{_named(factor, stated)}"
    if stated is None:
        return ""
    return next(filter(None, (_against_known(series, stated) for series in rungs)), "")


def shows_unit(rungs: Sequence[Sequence[Series]], *, follow: bool, scale: Scale | None) -> bool:
    """Whether `pressures` has anything to go by: kinetic energies, a second temperature or a known pressure."""
    if follow or any(True for _ in _by_temperature(rungs)):
        return True
    return scale is not None and any(True for series in rungs for _ in _known(series))


def _by_kinetic(rungs: Sequence[Sequence[Series]]) -> Iterator[Estimate]:
    """Factors by which pressures are too large, from the part 2 K/(3 V) with which they follow the kinetic energy."""
    for series in rungs:
        kinetic = {each.chain: each.column("kinetic") for each in series}
        virial = {each.chain: each.column("virial") for each in series}
        yield covariance(virial, kinetic) / covariance(kinetic, kinetic) * 1.5 + 1.0


def _by_temperature(rungs: Sequence[Sequence[Series]]) -> Iterator[Estimate]:
    """The same from neighbouring temperatures.

    From one to the other P rises by the covariance of P and U, which scales with it, and by rho dT, which does not. The
    first holds for any observable, so that U may be taken off as often as leaves the least noise.
    """
    for cold, warm in pairwise(rungs):
        if not all(each.has("virial", "sampled_energy") for each in (*cold, *warm)):
            continue
        low, high = cold[0].state, warm[0].state
        energies = [{each.chain: each.column("sampled_energy") for each in rung} for rung in (cold, warm)]
        virials = [{each.chain: each.column("virial") for each in rung} for rung in (cold, warm)]
        slope = _slope(virials, energies)
        rests = [
            {chain: values - slope * energy[chain] for chain, values in virial.items()}
            for virial, energy in zip(virials, energies, strict=True)
        ]
        coupling = covariance(rests[0], energies[0]) + covariance(rests[1], energies[1])
        fluctuation = coupling * (0.5 / low.temperature - 0.5 / high.temperature)
        rise = mean(rests[1]) - mean(rests[0])
        yield (rise - fluctuation) / (low.particles * (high.temperature - low.temperature)) + 1.0


def _slope(values: Sequence[Mapping[Chain, Floats]], over: Sequence[Mapping[Chain, Floats]]) -> float:
    """Of the straight lines through the samples of each rung, the same for all; 0 where nothing varies."""
    pairs = list(zip(values, over, strict=True))
    width = sum(covariance(x, x).value for _, x in pairs)
    return sum(covariance(y, x).value for y, x in pairs) / width if width > 0.0 else 0.0


def _mean_virial(series: Sequence[Series]) -> Estimate:
    return mean({each.chain: each.column("virial") for each in series})


def _joined(found: Sequence[Estimate]) -> Estimate | None:
    """The weighted mean of those that have an error bar; None if there are none."""
    known = [each for each in found if 0.0 < each.standard_error < math.inf]
    if not known:
        return None
    total = sum(each.standard_error**-2 for each in known)
    first, *others = (each * (each.standard_error**-2 / total) for each in known)
    for each in others:
        first = first + each
    return first


def _named(factor: Estimate, stated: float | None) -> str:
    """The usual units that a factor may belong to, in words; empty if there are none."""
    if stated is None or factor.value <= 0.0:
        return ""
    off = {name: abs(math.log(factor.value * size / stated)) for name, size in _UNITS.items()}
    allowed = max(math.log(_ALIKE), 3.0 * factor.standard_error / factor.value)
    return _as_in([name for name in off if off[name] < allowed])


def _as_in(units: Sequence[str]) -> str:
    return f", as in values in {' or '.join(units)}" if units else ""


def _against_known(series: Sequence[Series], stated: float) -> str:
    """A mean pressure that another unit would bring to the one known from positions or from a reference."""
    state = series[0].state
    pressure = _mean_virial(series) / state.volume + state.density * state.temperature
    for source, value, error in _known(series):
        allowed = _SURE * math.hypot(pressure.standard_error, error) + _CLOSE * state.density * state.temperature
        if abs(pressure.value - value) <= allowed:
            continue
        units = []
        for name, size in _UNITS.items():
            factor = stated / size
            off = abs(pressure.value / factor - value)
            near = _SURE * math.hypot(pressure.standard_error / factor, error) + _CLOSE * abs(value)
            if abs(math.log(factor)) > math.log(_ALIKE) and off < min(near, _NEAR * abs(value)):
                units.append(name)
        if units:
            return f"the mean pressure is {plain(pressure.value / value, 3)} times that {source}{_as_in(units)}"
    return ""


def _known(series: Sequence[Series]) -> Iterator[tuple[str, float, float]]:
    """Pressures with standard error, and where they are from."""
    from reference import find, names

    first = series[0]
    if not first.fluid.has_pairs:
        return
    structure = pair_structure([replace(each, frames=each.frames[:_FRAMES]) for each in series])
    if structure is not None and structure.pressure is not None and math.isfinite(structure.pressure.standard_error):
        yield "of the positions", structure.pressure.value, structure.pressure.standard_error
    temperature, density = first.state.temperature, first.state.density
    for reference in map(find, names()):
        same = reference.same_model(first.fluid.truncation, first.fluid.cutoff)
        if same and not reference.covers(temperature, density):
            known = reference.value("pressure", temperature=temperature, density=density)
            yield f"of {reference.name}", known.value, known.uncertainty
