"""What a health check says, and how a rate of false alarms becomes a threshold.

Statistics are deviations in standard errors wherever there is a distribution: a check whose healthy statistic is not
normal gives the normal deviate of the same two-sided probability, so that one threshold serves all.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

from scipy import stats

__all__ = ["Reading", "deviate", "threshold"]


@dataclass(frozen=True)
class Reading:
    """What one check says of a rung, of one of its repeats, or of a rung and its warmer neighbour.

    statistic, threshold : the check is passed as long as the first is not above the second
    meaning : one sentence with the measured figure: what a failure means and what to do about it
    repeat : None for all repeats of a rung together
    level : rate of false alarms where the statistic is a deviation in standard errors; None where no distribution
        stands behind the threshold
    """

    check: str
    statistic: float
    threshold: float
    meaning: str
    repeat: int | None = None
    level: float | None = None

    @classmethod
    def deviation(cls, check: str, statistic: float, level: float, meaning: str, repeat: int | None = None) -> Reading:
        """Of a statistic that is a deviation in standard errors, with this rate of false alarms."""
        return cls(check, statistic, threshold(level), meaning, repeat, level)

    def at(self, level: float) -> Reading:
        """The same with another rate of false alarms; itself where it has none."""
        return self if self.level is None else replace(self, threshold=threshold(level), level=level)

    @property
    def passed(self) -> bool:
        """Whether the statistic is within the threshold; a number that is none never is."""
        return self.statistic <= self.threshold


def threshold(level: float) -> float:
    """Deviation that a standard normal variable exceeds in size with probability `level`."""
    return float(stats.norm.isf(0.5 * level))


def deviate(probability: float) -> float:
    """Standard normal deviation with this two-sided probability of a larger one; finite also for 0."""
    return float(stats.norm.isf(max(0.5 * probability, math.ulp(0.0))))
