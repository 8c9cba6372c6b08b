"""Which rungs share samples enough to be solved together, and what would close the gaps between those that do not."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
import numpy.typing as npt

from estimators.group import Rung
from estimators.mixture import bennett

__all__ = ["Gap", "connected", "gaps"]

LINKED = 10.0  # shared effective samples: they tell a free energy to 1/sqrt(10), still small enough to be linear in
FARTHEST = 2.0  # standard deviations of the energy between rungs: 45 % of their samples are then shared


@dataclass(frozen=True)
class Gap:
    """Neighbouring temperatures that no chain of linked rungs spans, and the rungs that would close the gap.

    rungs : none where the two lie close enough and only hold too few samples
    """

    low: float
    high: float
    rungs: tuple[float, ...]

    def told(self, spoken: Callable[[float], str]) -> str:
        """The gap and what would close it in words; `spoken` writes a temperature."""
        both = f"the rungs at {spoken(self.low)} and {spoken(self.high)}"
        if not self.rungs:
            return f"{both} hold too few samples to be joined, sample them longer"
        *most, last = map(spoken, self.rungs)
        listed = f"rungs at {', '.join(most)} and {last}" if most else f"a rung at {last}"
        return f"{both} do not overlap, set {listed} between them"


def connected(
    rungs: Sequence[Rung], comparable: Callable[[Rung, Rung], bool] = lambda one, other: True
) -> npt.NDArray[np.int64]:
    """(K,), equal labels for rungs that share 10 effective samples or are connected through others that do.

    comparable : whether two rungs may share any
    """
    labels = np.arange(len(rungs))
    for distance in range(1, len(rungs)):
        for i, j in zip(range(len(rungs)), range(distance, len(rungs)), strict=False):
            if labels[i] == labels[j] or not comparable(rungs[i], rungs[j]):
                continue
            if _shared_samples(rungs[i], rungs[j]) >= LINKED:
                labels[labels == labels[j]] = labels[i]
    return labels


def _shared_samples(first: Rung, second: Rung) -> float:
    """Effective samples of two rungs that either might have drawn."""
    change = second.slopes - first.slopes
    _, *evenness = bennett(change @ first.thinned, change @ second.thinned)
    pairs = zip(evenness, (first, second), strict=True)
    return sum(float(np.mean(even)) * rung.samples / rung.inefficiency for even, rung in pairs)


def gaps(rungs: Sequence[Rung], labels: npt.NDArray[np.int64]) -> list[Gap]:
    """Between neighbours, from the coldest, that no rungs of equal label span.

    labels : (K,), as `connected` gives them
    """
    spans = [np.flatnonzero(labels == label)[[0, -1]] for label in np.unique(labels)]
    return [
        Gap(cold.temperature, hot.temperature, _bridge(cold, hot))
        for index, (cold, hot) in enumerate(pairwise(rungs))
        if not any(first <= index < last for first, last in spans)
    ]


def _bridge(cold: Rung, hot: Rung) -> tuple[float, ...]:
    """Temperatures of rungs, even in ln T, none further from the next than two standard deviations of the energy.

    At constant heat capacity C = dE/dT a rung's energy scatters by sqrt(C) T, so that sqrt(C) ln(T_hot/T_cold)
    deviations part the two.
    """
    first, last = cold.temperature, hot.temperature
    heat_capacity = max((hot.mean_energy - cold.mean_energy) / (last - first), 0.0)
    rungs = max(math.ceil(math.sqrt(heat_capacity) * math.log(last / first) / FARTHEST) - 1, 0)
    return tuple(first * (last / first) ** (step / (rungs + 1)) for step in range(1, rungs + 1))
