"""Whether the heat capacity is the same from fluctuations and from the slope of the energy over temperature."""

from __future__ import annotations

from estimators.estimate import Estimate
from estimators.health.excess import excess, too_short
from estimators.health.reading import Reading, threshold

__all__ = ["heat_routes"]


def heat_routes(own: Estimate, slope: Estimate | None, *, level: float) -> Reading | None:
    """Heat capacity of a rung from its own fluctuations against the slope of u(T) between rungs, or another route.

    slope : by another way from samples that may be in part the same; their correlation is kept
    None without another route, or if either has fewer than 50 effective samples.
    """
    if slope is None or too_short(own) or too_short(slope):
        return None
    difference = own - slope
    return Reading(
        "heat-routes",
        excess(difference, 0.0, 0.0),
        threshold(level),
        f"the residual heat capacity is {own.value:.4g} from the rung's own fluctuations and {slope.value:.4g} from "
        f"the slope of the energy (standard error of the difference {difference.standard_error:.2g}); if they differ, "
        "the energy on record is not the one that was sampled, or rungs are too far apart or of different phases",
    )
