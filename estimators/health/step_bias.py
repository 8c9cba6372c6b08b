"""Whether the time step shifts values: held against sampling that is exact at any time step."""

from __future__ import annotations

import math
from collections.abc import Mapping

from estimators.estimate import Estimate
from estimators.health.reading import Reading, threshold

__all__ = ["step_bias"]

CHECK = "step-bias"
LOOKED_AT = {"residual_energy": "u", "pressure": "P", "residual_heat_capacity": "c_v"}


def step_bias(sampled: Mapping[str, Estimate], exact: Mapping[str, Estimate], *, level: float) -> list[Reading] | None:
    """Shift of u, P and c_v of one rung against metropolised sampling of the same rung at the same time step.

    sampled, exact : estimates by property, reduced units, from different trajectories
    A shift that is not seen is bounded by two of its standard errors, and the reading says so. None where no property
    is in both.
    """
    return [
        _reading(name, sampled[name], exact[name], level) for name in LOOKED_AT if name in sampled and name in exact
    ] or None


def _reading(name: str, sampled: Estimate, exact: Estimate, level: float) -> Reading:
    shift, error = sampled.value - exact.value, math.hypot(sampled.standard_error, exact.standard_error)
    statistic, limit = abs(shift) / error, threshold(level)
    seen = (
        "take a smaller one"
        if statistic > limit
        else f"nothing below {2.0 * error:.2g} can be seen with so many samples"
    )
    meaning = f"the time step shifts {LOOKED_AT[name]} by {shift:+.2g} +- {error:.1g} in reduced units; {seen}"
    return Reading.deviation(CHECK, statistic, level, meaning)
