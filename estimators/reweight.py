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

from estimators.errors import BadSeries, NotSolved
from estimators.estimate import Estimate, mean
from estimators.group import Group, Rung
from estimators.mixture import bennett, polished
from estimators.overlap import Gap, connected, gaps
from estimators.trust import FEWEST_SAMPLES
from sampler.series import Series

__all__ = ["Pooled", "Reweighted", "check", "pool", "rung_of", "solved"]

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
    surviving : share of the samples of the best rung that still counts; 1 between rungs
    """

    temperature: float
    effective_samples: float
    properties: dict[str, Estimate]
    refused: str = ""
    surviving: float = 1.0


@dataclass(frozen=True)
class Pooled:
    """All rungs of one isochore, solved; build it with `pool`.

    temperatures : (K,), of the rungs, rising
    """

    temperatures: list[float]
    gaps: list[Gap]
    _groups: list[Group]
    _constants: Floats
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
            for rung, estimate in zip(group.rungs, group.free_energies(self._constants), strict=True)
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
                refused, properties = self._refusal(temperature, support[best]), {}
            else:
                refused, properties = "", self._groups[best].properties(temperature, moments[best], index)
            surviving = self._groups[best].surviving(temperature)
            yield Reweighted(temperature, support[best], properties, refused, surviving)

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
    check(series)
    reference_energy = float(np.mean([np.mean(each.column("sampled_energy")) for each in series]))
    by_temperature: dict[float, list[Series]] = defaultdict(list)
    for each in series:
        by_temperature[each.state.temperature].append(each)
    rungs = [_rung(*item, reference_energy) for item in sorted(by_temperature.items(), key=lambda item: item[0])]
    labels = connected(rungs)
    groups = [
        solved([rung for rung, own in zip(rungs, labels, strict=True) if own == label]).seen(rungs[0].density)
        for label in np.unique(labels)
    ]
    temperatures = [rung.temperature for rung in rungs]
    return Pooled(temperatures, gaps(rungs, labels), groups, np.array([reference_energy]), spoken)


def check(series: Sequence[Series], *, densities: bool = False) -> None:
    """Raises BadSeries where series cannot be reweighted together.

    densities : whether they may be of several
    """
    if not series:
        raise BadSeries("no samples to reweight: every series is empty; sample longer or cut less")
    first = series[0]
    for each in series:
        if not each.bath:
            raise BadSeries(f"the series at {each.state} has no bath: only canonical samples can be reweighted")
        if (each.fluid, each.state.particles) != (first.fluid, first.state.particles):
            raise BadSeries(f"only one fluid and box is reweighted together, found {first.state}, {each.state}")
        if not densities and each.state.density != first.state.density:
            raise BadSeries(f"only one fluid at one density is reweighted together, found {first.state}, {each.state}")
        if not each.has("sampled_energy"):
            raise BadSeries(f"the series at {each.state}, repeat {each.repeat}, has no energy to reweight it by")
        columns = filter(each.has, ("energy", "sampled_energy", "virial", "hypervirial"))
        if not all(np.all(np.isfinite(each.column(name))) for name in columns):
            raise BadSeries(f"the series at {each.state}, repeat {each.repeat}, holds entries that are not finite")
    if len({each.chain for each in series}) < len(series):
        raise BadSeries("the same repeat of a rung was given twice")


def _rung(temperature: float, repeats: list[Series], reference_energy: float) -> Rung:
    features = [(each.column("sampled_energy") - reference_energy)[None] for each in repeats]
    return rung_of(temperature, repeats, features, np.array([1.0 / temperature]))


def rung_of(temperature: float, repeats: list[Series], features: list[Floats], slopes: Floats) -> Rung:
    """A rung with its inefficiency; see `Rung`."""
    samples = sum(map(len, repeats))
    potentials = {each.chain: slopes @ values for each, values in zip(repeats, features, strict=True)}
    inefficiency = max(samples / max(mean(potentials).effective_samples, 1.0), 1.0)
    return Rung(temperature, repeats[0].state.density, repeats, features, slopes, inefficiency)


def solved(rungs: list[Rung]) -> Group:
    """Rungs that overlap as a group, not yet seen at a density; raises NotSolved where no free energies are found."""
    slopes = np.array([rung.slopes for rung in rungs])
    mixture = polished(
        slopes,
        np.array([float(rung.samples) for rung in rungs]),
        _thinned_solution(slopes, [rung.thinned[:, :: -(-rung.thinned.shape[1] // START)] for rung in rungs]),
        [features for rung in rungs for features in rung.features],
    )
    if mixture is None:
        raise NotSolved(
            f"the free energies of the {len(rungs)} rungs at temperatures "
            f"{', '.join(f'{rung.temperature:g}' for rung in rungs)} could not be found from their samples; sample "
            "them longer or set rungs between them"
        )
    return Group(rungs, mixture, [])


def _thinned_solution(slopes: Floats, features: list[Floats]) -> Floats:
    """Free energies (K,) solved on thinned samples, from the sum of the neighbours' pairwise differences.

    Where that fails the start itself is returned: whether it is good enough shows when it is polished.
    """
    changes = zip(np.diff(slopes, axis=0), features, features[1:], strict=False)
    steps = [bennett(change @ first, change @ second)[0] for change, first, second in changes]
    start = np.concatenate([[0.0], np.cumsum(steps)])
    if len(slopes) == 1:
        return start
    with _quiet():
        from pymbar import MBAR
        from pymbar.utils import ParameterError

        reduced = slopes @ np.concatenate(features, axis=1)
        protocol = ({"method": "adaptive", "options": {"min_sc_iter": 0}},)
        try:
            solution = MBAR(
                reduced, [each.shape[1] for each in features], initial_f_k=start, solver_protocol=protocol
            ).f_k
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
