"""Whether enough effective samples are behind energy and heat capacity for their error bars to be believed."""

from __future__ import annotations

import math
from collections.abc import Mapping

from estimators.estimate import Estimate
from estimators.health.reading import Reading
from estimators.trust import FEWEST_SAMPLES, SHORTEST_SERIES

__all__ = ["enough"]

CHECK = "enough"
LOOSEST = 1.0 / 3.0  # error of an error bar over that bar; a fifth is usual at 50 effective samples
PROPERTIES = {"residual_energy": "energy", "residual_heat_capacity": "heat capacity"}


def enough(found: Mapping[str, Estimate]) -> list[Reading] | None:
    """Effective samples of energy and heat capacity, the length of the longest repeat, and the error of the error bar.

    found : estimates of one rung by property
    The statistic is the largest of 50 / effective samples, 50 autocorrelation times / longest repeat, and 3 x relative
    error of the error bar, which must not be above 1. The first two are what trust rests on. None without an energy.
    """
    return [_reading(words, found[name]) for name, words in PROPERTIES.items() if name in found] or None


def _reading(words: str, estimate: Estimate) -> Reading:
    samples, longest = _lengths(estimate)
    error = math.sqrt(0.5 / estimate.freedom) if estimate.freedom else math.inf
    shortfalls = FEWEST_SAMPLES / max(samples, 1.0), SHORTEST_SERIES / max(longest, 1.0), error / LOOSEST
    meaning = (
        f"behind the {words} are about {samples:.3g} effective samples, its longest repeat holds {longest:.3g} "
        f"autocorrelation times, and its error bar is known to {100.0 * error:.2g} %; below {FEWEST_SAMPLES:g} "
        f"samples, {SHORTEST_SERIES:g} times or beyond {100.0 * LOOSEST:.2g} % error bars do not hold what they "
        "promise, so sample longer"
    )
    return Reading(CHECK, max(shortfalls), 1.0, meaning)


def _lengths(estimate: Estimate) -> tuple[float, float]:
    """Effective samples and autocorrelation times of the longest repeat, of the state where either is least."""
    found = [
        (min(each.steady_samples, estimate.underlying.get(state, math.inf)), each.longest / each.tau)
        for state, each in estimate.scatters.items()
        if each.variance > 0.0
    ]
    if not found:
        return 0.0, 0.0
    return min(samples for samples, _ in found), min(longest for _, longest in found)
