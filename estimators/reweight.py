"""Multistate reweighting over all rungs of one isochore: properties at temperatures between and beside the rungs.

A sample of dynamical energy E weighs exp(-E/T)/D(E) at temperature T, with D the density of the mixture of all rungs:
M. R. Shirts and J. D. Chodera, J. Chem. Phys. 129, 124105 (2008), solved with pymbar. Rungs that share too few samples
are solved apart. The solution of these equations has an influence series like any mean, so its error bars come from the
correlated samples themselves; influences are centred rung by rung, as a rung's samples scatter about that rung's mean.
"""

from __future__ import annotations

import logging
import math
import warnings
from collections import defaultdict
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt

from estimators.errors import BadSeries
from estimators.estimate import Estimate, mean
from estimators.group import Group, Rung
from estimators.mixture import bennett, polished
from estimators.moments import Run, block_starts, energy_name
from estimators.overlap import Gap, connected, gaps
from estimators.trust import FEWEST_SAMPLES
from sampler.series import Series

__all__ = ["Pooled", "Reweighted", "pool"]

Floats = npt.NDArray[np.float64]

START = 1024  # samples of a rung that are enough for a start
TOGETHER = 64  # temperatures: as many as fit into memory with their block sums


@dataclass(frozen=True)
class Reweighted:
    """Properties at a temperature, or why there are none.

    effective_samples : independent samples of the target ensemble that the weights are worth:
        1 / sum_n g_n w_n^2, weights w of sum 1 (Kish), g the statistical inefficiency (2 tau) of the energy at the
        rung that sample n comes from; beyond the outermost rungs at most what survives at constant heat capacity
    properties : by name, empty if refused
    refused : the reason, empty if there are properties
    """

    temperature: float
    effective_samples: float
    properties: dict[str, Estimate]
    refused: str = ""


@dataclass(frozen=True)
class Pooled:
    """All rungs of one isochore, solved; build it with `pool`.

    temperatures : (K,), of the rungs, rising
    """

    temperatures: list[float]
    gaps: list[Gap]
    _groups: list[Group]
    _reference_energy: float
    _spoken: Callable[[float], str]

    @cached_property
    def overlap(self) -> Floats:
        """(K, K), chance that a sample of rung i might as well be one of rung j; rows sum to 1, 0 between groups."""
        overlap = np.zeros((len(self.temperatures), len(self.temperatures)))
        for group in self._groups:
            members = [self.temperatures.index(rung.temperature) for rung in group.rungs]
            overlap[np.ix_(members, members)] = group.mixture.overlap
        return overlap

    @cached_property
    def free_energies(self) -> list[Estimate]:
        """Configurational F/T of each rung less that of the coldest rung it is connected with."""
        by_temperature = {
            rung.temperature: estimate
            for group in self._groups
            for rung, estimate in zip(group.rungs, group.free_energies(self._reference_energy), strict=True)
        }
        return [by_temperature[temperature] for temperature in self.temperatures]

    def at(self, temperature: float) -> Reweighted:
        """Properties at a temperature (epsilon/k_B), refused where fewer than 50 effective samples support them."""
        return self.curve([temperature])[0]

    def curve(self, temperatures: Sequence[float]) -> list[Reweighted]:
        """What `at` gives at each temperature, at hardly more cost than at one."""
        asked = [each for each in temperatures if math.isfinite(each) and each > 0.0]
        batches = [asked[start : start + TOGETHER] for start in range(0, len(asked), TOGETHER)]
        found = {each.temperature: each for batch in batches for each in self._together(batch)}
        reason = "a temperature must be a positive number, found "
        return [found.get(each) or Reweighted(each, 0.0, {}, f"{reason}{each!r}") for each in temperatures]

    def _together(self, temperatures: Sequence[float]) -> Iterator[Reweighted]:
        """At each temperature from the group that supports it best."""
        moments = [group.moments(np.array(temperatures)) for group in self._groups]
        for index, temperature in enumerate(temperatures):
            support = [
                group.effective_samples(temperature, float(each.kish[index]))
                for group, each in zip(self._groups, moments, strict=True)
            ]
            best = int(np.argmax(support))
            if support[best] < FEWEST_SAMPLES:
                yield Reweighted(temperature, support[best], {}, self._refusal(temperature, support[best]))
            else:
                properties = self._groups[best].properties(temperature, moments[best], index)
                yield Reweighted(temperature, support[best], properties)

    def _refusal(self, temperature: float, samples: float) -> str:
        support = f"{samples:.0f} effective samples support temperature {self._spoken(temperature)}"
        reason = f"{support}, {FEWEST_SAMPLES:.0f} are needed"
        for gap in self.gaps:
            if gap.low < temperature < gap.high:
                return f"{reason}; {gap.told(self._spoken)}"
        nearest = min(self.temperatures, key=lambda each: abs(each - temperature))
        if math.isclose(nearest, temperature, rel_tol=1e-9):
            return f"{reason}; sample this rung longer"
        return f"{reason}; the nearest rung is at {self._spoken(nearest)}, set one closer or sample it longer"


def _in_reduced_units(temperature: float) -> str:
    return f"{temperature:.5g} epsilon/k_B"


def pool(series: Sequence[Series], *, spoken: Callable[[float], str] = _in_reduced_units) -> Pooled:
    """All repeats of all rungs of one isochore, pooled; series without samples are left out.

    Properties are those whose columns all series have.

    spoken : writes a temperature (epsilon/k_B) in the words of a refusal, with its unit
    Raises BadSeries if nothing is left, the series differ in fluid, density or particles, hold entries that are not
    finite, come twice, have no bath or no sampled_energy; NotSolved if the free energies of overlapping rungs cannot
    be found.
    """
    series = [each for each in series if len(each)]
    _check(series)
    reference_energy = float(np.mean([np.mean(each.column("sampled_energy")) for each in series]))
    by_temperature: dict[float, list[Series]] = defaultdict(list)
    for each in series:
        by_temperature[each.state.temperature].append(each)
    rungs = [_rung(*item, reference_energy) for item in sorted(by_temperature.items(), key=lambda item: item[0])]
    labels = connected(rungs)
    groups = [
        _solved([rung for rung, own in zip(rungs, labels, strict=True) if own == label]) for label in np.unique(labels)
    ]
    temperatures = [rung.temperature for rung in rungs]
    return Pooled(temperatures, gaps(rungs, labels), groups, reference_energy, spoken)


def _check(series: Sequence[Series]) -> None:
    if not series:
        raise BadSeries("no samples to reweight: every series is empty; sample longer or cut less")
    first = series[0]
    isochore = (first.fluid, first.state.density, first.state.particles)
    for each in series:
        if not each.bath:
            raise BadSeries(f"the series at {each.state} has no bath: only canonical samples can be reweighted")
        if (each.fluid, each.state.density, each.state.particles) != isochore:
            raise BadSeries(f"only one fluid at one density is reweighted together, found {first.state}, {each.state}")
        if not each.has("sampled_energy"):
            raise BadSeries(f"the series at {each.state}, repeat {each.repeat}, has no energy to reweight it by")
        columns = filter(each.has, ("energy", "sampled_energy", "virial", "hypervirial"))
        if not all(np.all(np.isfinite(each.column(name))) for name in columns):
            raise BadSeries(f"the series at {each.state}, repeat {each.repeat}, holds entries that are not finite")
    if len({each.chain for each in series}) < len(series):
        raise BadSeries("the same repeat of a rung was given twice")


def _rung(temperature: float, repeats: list[Series], reference_energy: float) -> Rung:
    energies = [each.column("sampled_energy") - reference_energy for each in repeats]
    samples = sum(map(len, energies))
    effective = mean({each.chain: values for each, values in zip(repeats, energies, strict=True)}).effective_samples
    return Rung(temperature, repeats, energies, max(samples / max(effective, 1.0), 1.0))


def _solved(rungs: list[Rung]) -> Group:
    beta = np.array([1.0 / rung.temperature for rung in rungs])
    mixture = polished(
        beta,
        np.array([float(rung.samples) for rung in rungs]),
        _thinned_solution(beta, [rung.thinned[:: -(-len(rung.thinned) // START)] for rung in rungs]),
        [energies for rung in rungs for energies in rung.energies],
    )
    repeats = [(index, series, energies) for index, rung in enumerate(rungs) for series, energies in rung.recorded]
    centres, pooled = _centres([series for _, series, _ in repeats]), sum(rung.samples for rung in rungs)
    runs = [
        Run(index, series.chain, series, energies, centres, block_starts(len(series), pooled))
        for index, series, energies in repeats
    ]
    return Group(rungs, mixture, runs)


def _centres(series: Sequence[Series]) -> tuple[float, float, float]:
    """Means of U, W and W + X; zero for a column that is not recorded throughout."""
    samples = sum(map(len, series))
    energy = sum(float(np.sum(each.column(energy_name(each)))) for each in series) / samples
    virial, hypervirial = (
        sum(float(np.sum(each.column(name))) for each in series if each.has(name)) / samples
        for name in ("virial", "hypervirial")
    )
    return energy, virial, virial + hypervirial


def _thinned_solution(beta: Floats, energies: list[Floats]) -> Floats:
    """Free energies (K,) solved on thinned samples, from the sum of the neighbours' pairwise differences.

    Where that fails the start itself is returned: whether it is good enough shows when it is polished.
    """
    pairs = zip(beta, beta[1:], energies, energies[1:], strict=False)
    steps = [bennett((low, high), first, second)[0] for low, high, first, second in pairs]
    start = np.concatenate([[0.0], np.cumsum(steps)])
    if len(beta) == 1:
        return start
    with _quiet():
        from pymbar import MBAR
        from pymbar.utils import ParameterError

        reduced = np.multiply.outer(beta, np.concatenate(energies))
        protocol = ({"method": "adaptive", "options": {"min_sc_iter": 0}},)
        try:
            solution = MBAR(reduced, list(map(len, energies)), initial_f_k=start, solver_protocol=protocol).f_k
        except (ParameterError, ArithmeticError, ValueError):
            return start
    return np.asarray(solution, dtype=float)


@contextmanager
def _quiet() -> Iterator[None]:
    """Keeps the notices of a library out of the user's sight."""
    logger = logging.getLogger("pymbar")
    level = logger.level
    logger.setLevel(logging.CRITICAL + 1)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            yield
    finally:
        logger.setLevel(level)
