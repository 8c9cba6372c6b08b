"""An estimate: a value with the influence of every sample on it, and arithmetic that keeps correlations."""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

from estimators.errors import BadSeries
from estimators.gamma import Scatter, block_scatter, scatter

__all__ = ["Chain", "Estimate", "centred", "coarsened", "combine", "exact", "mean"]

Floats = npt.NDArray[np.float64]
Chain = tuple[float, float, int, int]  # temperature, density, particles, repeat
State = tuple[float, float, int]

FEWEST_SAMPLES = 50.0  # effective; fewer do not tell their own error
COMFORTABLE_SAMPLES = 200.0
SHORTEST_SERIES = 50.0  # autocorrelation times
WEIGHTY = 0.1  # share of the variance from which a state's own length matters
BLOCK_TOLERANCE = 3.0  # combined errors between the two error bars
STEP = 1e-20


@dataclass(frozen=True, eq=False)
class Estimate:
    """A value and what every sample contributes to its error.

    value : the estimate
    influence : chain -> (n_chain,), scaled so that estimate - truth is to first order the sum of all entries
    method : "average", "fluctuation", "derived", "reweighted" or "surface"

    Error bars come from the autocorrelation of the influences: repeats of one state are pooled, states are independent.
    Estimates add, multiply and so on with one another and with numbers; samples they share stay correlated.
    """

    value: float
    influence: Mapping[Chain, Floats] = field(repr=False)
    method: str = "average"
    __array_ufunc__ = None  # numpy numbers leave the arithmetic to us

    @cached_property
    def _states(self) -> dict[State, list[Floats]]:
        """Influence series of each state, one a repeat."""
        states: dict[State, list[Floats]] = defaultdict(list)
        for chain, values in self.influence.items():
            states[chain[:3]].append(values)
        return dict(states)

    @cached_property
    def scatters(self) -> dict[State, Scatter]:
        """How far each state's influences scatter: autocorrelation time, window and their share of the variance."""
        return {state: scatter(repeats) for state, repeats in self._states.items()}

    @property
    def variance(self) -> float:
        """Square of the standard error."""
        return sum(each.variance for each in self.scatters.values())

    @property
    def standard_error(self) -> float:
        """Standard error of the value; infinite if a state holds too few samples to have one."""
        return math.sqrt(self.variance)

    @property
    def error_of_error(self) -> float:
        """Standard error of `standard_error`."""
        if not 0.0 < self.variance < math.inf:
            return self.variance
        spread = math.hypot(*(each.variance * each.relative_error for each in self.scatters.values()))
        return 0.5 * spread / self.standard_error

    @property
    def effective_samples(self) -> float:
        """Independent samples behind the value; of several states, those weigh that carry its error (Satterthwaite)."""
        if self.variance == 0.0:
            return math.inf
        if math.isinf(self.variance):
            return 0.0
        shares = [(each.variance / self.variance, each.effective_samples) for each in self.scatters.values()]
        return 1.0 / sum(share**2 / samples for share, samples in shares)

    @property
    def trust(self) -> str:
        """ "ok", "caution" or "no": whether the error bar can be believed."""
        return self._judgement[0]

    @property
    def reason(self) -> str:
        """Why trust is not "ok"; empty if it is."""
        return self._judgement[1]

    @cached_property
    def _judgement(self) -> tuple[str, str]:
        if not math.isfinite(self.value):
            return "no", "not a finite number"
        if self.effective_samples < FEWEST_SAMPLES or self._series_too_short:
            return "no", "too short to tell"
        if self.effective_samples < COMFORTABLE_SAMPLES:
            return "caution", f"only {self.effective_samples:.0f} effective samples"
        if self._blocks_disagree:
            return "caution", "error bars from autocorrelation and from blocks disagree"
        return "ok", ""

    @property
    def _series_too_short(self) -> bool:
        weighty = (each for each in self.scatters.values() if each.variance >= WEIGHTY * self.variance > 0.0)
        return any(each.longest < SHORTEST_SERIES * each.tau for each in weighty)

    @property
    def _blocks_disagree(self) -> bool:
        if self.variance == 0.0:
            return False
        blocks = [block_scatter(repeats) for repeats in self._states.values()]
        variance = sum(each for each, _ in blocks)
        block_error = math.sqrt(variance)
        block_spread = 0.5 * math.hypot(*(each * relative for each, relative in blocks)) / max(block_error, 1e-300)
        gap = abs(block_error - self.standard_error)
        return not gap <= BLOCK_TOLERANCE * math.hypot(block_spread, self.error_of_error)

    def __neg__(self) -> Estimate:
        return _linear(-self.value, [(-1.0, self)], self.method)

    def __add__(self, other: Estimate | float) -> Estimate:
        if isinstance(other, Estimate):
            return _linear(self.value + other.value, [(1.0, self), (1.0, other)], _common_method(self, other))
        return _linear(self.value + other, [(1.0, self)], self.method)

    def __radd__(self, other: float) -> Estimate:
        return self + other

    def __sub__(self, other: Estimate | float) -> Estimate:
        return self + -other

    def __rsub__(self, other: float) -> Estimate:
        return -self + other

    def __mul__(self, other: Estimate | float) -> Estimate:
        if isinstance(other, Estimate):
            parts = [(other.value, self), (self.value, other)]
            return _linear(self.value * other.value, parts, _common_method(self, other))
        return _linear(self.value * other, [(other, self)], self.method)

    def __rmul__(self, other: float) -> Estimate:
        return self * other

    def __truediv__(self, other: Estimate | float) -> Estimate:
        if isinstance(other, Estimate):
            return self * other**-1.0
        return self * (1.0 / other)

    def __rtruediv__(self, other: float) -> Estimate:
        return self**-1.0 * other

    def __pow__(self, power: float) -> Estimate:
        return _linear(self.value**power, [(power * self.value ** (power - 1.0), self)], self.method)


def exact(value: float, *, method: str = "average") -> Estimate:
    """A value without error, to combine with others."""
    return Estimate(float(value), {}, method)


def mean(observables: Mapping[Chain, Floats]) -> Estimate:
    """Mean over all samples of all chains, each sample with the same weight.

    observables : chain -> (n_chain,)
    Raises BadSeries when there is no sample at all or one is not finite.
    """
    value, deviations = centred(observables)
    samples = sum(map(len, deviations.values()))
    return Estimate(value, {chain: values / samples for chain, values in deviations.items()})


def centred(observables: Mapping[Chain, Floats]) -> tuple[float, dict[Chain, Floats]]:
    """Mean over all samples of all chains, and the deviations from it; raises BadSeries as `mean` does."""
    samples = sum(map(len, observables.values()))
    if samples == 0:
        raise BadSeries("no samples to average: every series is empty; sample longer or cut less")
    value = sum(float(np.sum(values)) for values in observables.values()) / samples
    if not math.isfinite(value):
        raise BadSeries("a series holds entries that are not finite numbers; leave those samples out or repair them")
    return value, {chain: np.asarray(values, dtype=float) - value for chain, values in observables.items()}


def combine(function: Callable[..., Any], *estimates: Estimate, method: str = "derived") -> Estimate:
    """Smooth function of estimates, to first order, with all correlations kept.

    function : of as many numbers; must take complex ones and be analytic (the gradient is a complex step: numpy ufuncs
    and arithmetic do, abs() and comparisons do not)
    """
    values = [estimate.value for estimate in estimates]
    parts = []
    for index, estimate in enumerate(estimates):
        shifted: list[complex] = [*values]
        shifted[index] += 1j * STEP
        parts.append((float(np.imag(function(*shifted))) / STEP, estimate))
    return _linear(float(np.real(function(*values))), parts, method)


def _common_method(first: Estimate, second: Estimate) -> str:
    return first.method if first.method == second.method else "derived"


def _linear(value: float, parts: Sequence[tuple[float, Estimate]], method: str) -> Estimate:
    """The estimate whose influence is the weighted sum of those of its parts."""
    influence: dict[Chain, Floats] = {}
    for weight, estimate in parts:
        for chain, values in estimate.influence.items():
            share = weight * values
            influence[chain] = _sum_on_coarser(influence[chain], share) if chain in influence else share
    return Estimate(float(value), influence, method)


def _sum_on_coarser(first: Floats, second: Floats) -> Floats:
    if len(first) == len(second):
        return np.asarray(first + second, dtype=float)
    length = min(len(first), len(second))
    return np.asarray(coarsened(first, length) + coarsened(second, length), dtype=float)


def coarsened(values: Floats, length: int) -> Floats:
    """Sums over `length` consecutive blocks, as equal as they can be, (length,)."""
    if len(values) == length:
        return values
    starts = np.arange(length) * len(values) // length
    return np.asarray(np.add.reduceat(values, starts), dtype=float)
