"""An estimate: a value with the influence of every sample on it, and arithmetic that keeps correlations."""

from __future__ import annotations

import math
import operator
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
from scipy import special

from estimators.errors import BadSeries
from estimators.gamma import Scatter, coarsened
from estimators.influence import Chain, Influence, State
from estimators.trust import judgement

__all__ = ["Chain", "Estimate", "State", "centred", "combine", "exact", "mean"]

Floats = npt.NDArray[np.float64]
NORMAL = 1.959963984540054  # 95 % of a normal variable lies within so many standard deviations
SKEW = (NORMAL**4 + 2.0 * NORMAL**2 - 3.0) / 18.0
STEP = 1e-20
CURVATURE_STEP = 1e-2  # standard errors


@dataclass(frozen=True, eq=False)
class Estimate:
    """A value and what every sample contributes to its error.

    value : the estimate
    influence : chain -> (n_chain,), scaled so that estimate - truth is to first order the sum of all entries
    method : "average", "fluctuation", "derived", "reweighted" or "surface"
    underlying : state -> effective samples of the observables whose fluctuation it is, where they are the fewer
    unsampled : variance that no sample carries, such as that of what lies between samples; taken to be independent of
        that of every other estimate

    Error bars come from the autocorrelation of the influences: repeats of one state are pooled, states are independent.
    Estimates add, multiply and so on with one another and with numbers; samples they share stay correlated.
    """

    value: float
    influence: Mapping[Chain, Floats] = field(repr=False)
    method: str = "average"
    underlying: Mapping[State, float] = field(default_factory=dict, repr=False)
    unsampled: float = 0.0
    __array_ufunc__ = None  # numpy numbers leave the arithmetic to us

    def __post_init__(self) -> None:
        object.__setattr__(self, "influence", Influence.of(self.influence))

    @property
    def repeats(self) -> dict[State, list[Floats]]:
        """Influence series of each state, one a repeat."""
        return Influence.of(self.influence).repeats

    @property
    def scatters(self) -> dict[State, Scatter]:
        """How far each state's influences scatter: autocorrelation time, window and their share of the variance."""
        return Influence.of(self.influence).scatters

    @property
    def variance(self) -> float:
        """Variance of the value, to first order."""
        return self.unsampled + sum(each.variance for each in self.scatters.values())

    @cached_property
    def freedom(self) -> float:
        """Degrees of freedom of `variance` (Welch and Satterthwaite): 2 over the square of its relative error."""
        if not 0.0 < self.variance < math.inf:
            return 0.0 if self.variance else math.inf
        shares = [(each.variance / self.variance, each.relative_error) for each in self.scatters.values()]
        noise = math.fsum((share * error) ** 2 for share, error in shares)
        return 2.0 / noise if noise else math.inf

    @property
    def skewness(self) -> float:
        """Of the value."""
        if not 0.0 < self.variance < math.inf:
            return 0.0
        return math.fsum(each.skewness * (each.variance / self.variance) ** 1.5 for each in self.scatters.values())

    @cached_property
    def standard_error(self) -> float:
        """Standard error of the value, such that 95 % of intervals of +-1.96 of it hold the truth.

        The root of the variance, widened for what makes such intervals too narrow: the noise of the variance (Student's
        t at `freedom`), and the correlation of error bar and value, which is the value's skewness g: by
        (z^4 + 2 z^2 - 3) g^2 / 18 at z = 1.96 (P. Hall, Ann. Probab. 15, 920 (1987)). Both vanish as samples grow.
        Infinite if a state holds too few samples to have an error.
        """
        if not 0.0 < self.variance < math.inf:
            return math.sqrt(self.variance)
        noise = float(special.stdtrit(self.freedom, 0.975)) / NORMAL
        skew = 1.0 + SKEW * self.skewness**2
        return math.sqrt(self.variance) * noise * skew

    @property
    def error_of_error(self) -> float:
        """Standard error of `standard_error`."""
        return self.standard_error / math.sqrt(2.0 * self.freedom) if self.freedom else math.inf

    @property
    def effective_samples(self) -> float:
        """Independent samples behind the value; of several states, those weigh that carry its error (Satterthwaite)."""
        if self.variance == 0.0:
            return math.inf
        if math.isinf(self.variance):
            return 0.0
        sampled = self.variance - self.unsampled
        shares = [(each.variance / sampled, each.effective_samples) for each in self.scatters.values() if sampled]
        return 1.0 / sum(share**2 / samples for share, samples in shares) if shares else math.inf

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
        return judgement(self)

    def __neg__(self) -> Estimate:
        return _linear(-self.value, [(-1.0, self)], self.method)

    def __add__(self, other: Estimate | float) -> Estimate:
        if isinstance(other, Estimate):
            return _linear(self.value + other.value, [(1.0, self), (1.0, other)], _common_method(self, other))
        return replace(self, value=float(self.value + other))

    def __radd__(self, other: float) -> Estimate:
        return self + other

    def __sub__(self, other: Estimate | float) -> Estimate:
        if isinstance(other, Estimate):
            return _linear(self.value - other.value, [(1.0, self), (-1.0, other)], _common_method(self, other))
        return self + -other

    def __rsub__(self, other: float) -> Estimate:
        return -self + other

    def __mul__(self, other: Estimate | float) -> Estimate:
        if isinstance(other, Estimate):
            return combine(operator.mul, self, other, method=_common_method(self, other))
        return _linear(self.value * other, [(other, self)], self.method)

    def __rmul__(self, other: float) -> Estimate:
        return self * other

    def __truediv__(self, other: Estimate | float) -> Estimate:
        if isinstance(other, Estimate):
            return combine(operator.truediv, self, other, method=_common_method(self, other))
        return self * (1.0 / other)

    def __rtruediv__(self, other: float) -> Estimate:
        return self**-1.0 * other

    def __pow__(self, power: float) -> Estimate:
        return combine(lambda value: value**power, self, method=self.method)


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


def combine(
    function: Callable[..., Any], *estimates: Estimate, method: str = "derived", covariance: Floats | None = None
) -> Estimate:
    """Smooth function of estimates, with all correlations kept, free of bias to first order.

    function : of as many numbers; must take complex ones and be analytic (the gradient is a complex step: numpy ufuncs
    and arithmetic do, abs() and comparisons do not)
    covariance : (n, n), of the errors of the estimates, where it is known already
    A curved function of noisy numbers is off by half the sum of its second derivatives times their covariances, which
    is taken off.
    """
    values = np.array([estimate.value for estimate in estimates])
    gradient = _gradient(function, values)
    bias = 0.0
    for index, estimate in enumerate(estimates):
        width = estimate.variance**0.5
        if not 0.0 < width < math.inf:
            continue
        step = np.zeros(len(values))
        step[index] = CURVATURE_STEP * width
        slopes = (_gradient(function, values + step) - _gradient(function, values - step)) / (2.0 * step[index])
        bias += 0.5 * sum(
            slope * (_covariance_of_errors(estimate, other) if covariance is None else covariance[index, column])
            for column, (slope, other) in enumerate(zip(slopes, estimates, strict=True))
            if slope
        )
    value = float(np.real(function(*values))) - bias
    return _linear(value, list(zip(map(float, gradient), estimates, strict=True)), method)


def _gradient(function: Callable[..., Any], values: Floats) -> Floats:
    """By complex steps, (n,)."""
    return np.array([np.imag(function(*(values + 1j * STEP * unit))) / STEP for unit in np.eye(len(values))])


def _covariance_of_errors(first: Estimate, second: Estimate) -> float:
    """Covariance of the errors of two estimates, from the variances of sum and difference; 0 if one is unknown."""
    if first is second:
        return first.variance
    larger = _linear(0.0, [(1.0, first), (1.0, second)], "").variance
    smaller = _linear(0.0, [(1.0, first), (-1.0, second)], "").variance
    return 0.25 * (larger - smaller) if math.isfinite(larger + smaller) else 0.0


def _common_method(first: Estimate, second: Estimate) -> str:
    return first.method if first.method == second.method else "derived"


def _linear(value: float, parts: Sequence[tuple[float, Estimate]], method: str) -> Estimate:
    """The estimate whose influence is the weighted sum of those of its parts."""
    influence: dict[Chain, Floats] = {}
    underlying: dict[State, float] = {}
    weights: dict[int, float] = {}
    for weight, estimate in parts:
        weights[id(estimate)] = weights.get(id(estimate), 0.0) + weight
        for state, samples in estimate.underlying.items():
            underlying[state] = min(samples, underlying.get(state, math.inf))
        for chain, values in estimate.influence.items():
            share = weight * values
            influence[chain] = _sum_on_coarser(influence[chain], share) if chain in influence else share
    unsampled = {id(estimate): estimate.unsampled for _, estimate in parts}
    variance = math.fsum(weights[each] ** 2 * own for each, own in unsampled.items() if own)
    return Estimate(float(value), influence, method, underlying, variance)


def _sum_on_coarser(first: Floats, second: Floats) -> Floats:
    if len(first) == len(second):
        return np.asarray(first + second, dtype=float)
    length = min(len(first), len(second))
    return np.asarray(coarsened(first, length) + coarsened(second, length), dtype=float)
