"""What every sample contributes to the error of an estimate."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Mapping
from functools import cached_property

import numpy as np
import numpy.typing as npt

from estimators.gamma import Scatter, scatter

__all__ = ["Chain", "Influence", "State"]

Floats = npt.NDArray[np.float64]
Chain = tuple[float, float, int, int]  # temperature, density, particles, repeat
State = tuple[float, float, int]


class Influence(dict[Chain, Floats]):
    """Influence series by chain, with their scatter, which estimates that differ by a constant share."""

    @staticmethod
    def of(series: Mapping[Chain, Floats]) -> Influence:
        """The series themselves if they are one already."""
        return series if isinstance(series, Influence) else Influence(series)

    @cached_property
    def repeats(self) -> dict[State, list[Floats]]:
        """Series of each state, one a repeat."""
        states: dict[State, list[Floats]] = defaultdict(list)
        for chain, values in self.items():
            states[chain[:3]].append(values)
        return dict(states)

    @cached_property
    def scatters(self) -> dict[State, Scatter]:
        """By the Gamma method, over all repeats of each state."""
        return {state: scatter(repeats) for state, repeats in self.repeats.items()}
