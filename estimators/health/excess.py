"""How far an estimate is beyond what is allowed, as a normal deviate; and several such deviates as one."""

from __future__ import annotations

import math

from scipy import special, stats

from estimators.estimate import Estimate
from estimators.health.reading import deviate
from estimators.trust import FEWEST_SAMPLES

__all__ = ["CERTAIN", "excess", "jointly", "too_short"]

CERTAIN = deviate(0.0)
"""The largest deviate there is, 38.5: of what cannot be chance."""


def excess(estimate: Estimate, low: float = -math.inf, high: float = math.inf) -> float:
    """Normal deviate of an estimate beyond the interval from low to high; 0 within.

    Of the same probability as Student's t at the estimate's degrees of freedom, as its error is itself estimated. An
    estimate outside that has no error, or is not a number, gives the largest deviate there is; an infinite error, 0.
    """
    beyond = max(low - estimate.value, estimate.value - high)
    if beyond <= 0.0 or math.isinf(estimate.variance):
        return 0.0
    if not beyond < math.inf or estimate.variance == 0.0:
        return CERTAIN
    return deviate(2.0 * float(special.stdtr(estimate.freedom, -beyond / math.sqrt(estimate.variance))))


def jointly(*deviates: float) -> float:
    """The largest of several deviates, made smaller for their number (Bonferroni)."""
    return deviate(min(2.0 * len(deviates) * float(stats.norm.sf(max(deviates))), 1.0))


def too_short(estimate: Estimate) -> bool:
    """Whether so few effective samples are behind an estimate that its error says little."""
    return estimate.effective_samples < FEWEST_SAMPLES
