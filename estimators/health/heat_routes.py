"""Whether the heat capacity is the same by another route: the slope of the energy, or sampling at constant energy."""

from __future__ import annotations

from dataclasses import dataclass

from estimators.estimate import Estimate
from estimators.health.excess import excess, too_short
from estimators.health.reading import Reading

__all__ = ["ALONG_TEMPERATURE", "AT_CONSTANT_ENERGY", "Routes", "heat_routes"]


@dataclass(frozen=True)
class Routes:
    """Two routes to one heat capacity, in words, and what it means where they part.

    allowed : share of the heat capacity by which they may
    """

    own: str
    other: str
    parted: str
    allowed: float = 0.0


ALONG_TEMPERATURE = Routes(
    "the rung's own fluctuations",
    "the slope of the energy",
    "the energy on record is not the one that was sampled, or rungs are too far apart or of different phases",
)
AT_CONSTANT_ENERGY = Routes(
    "fluctuations of the energy in the bath, at the temperatures of the other route,",
    "those of the kinetic energy at constant energy",
    "the bath does not draw the canonical ensemble, or the time step is too large for constant energy: look at "
    "kinetic-law and ledger, and sample both with a smaller one",
    allowed=0.005,
)
"""Velocity Verlet's kinetic energy is low by (omega dt)^2/4 in a mode of frequency omega, of which the kinetic law
allows 0.5 %, and the residual heat capacity from its fluctuations high by the same share: both are exact for the
energy that the steps conserve, in which K is divided by 1 - (omega dt)^2/4."""


def heat_routes(
    own: Estimate, other: Estimate | None, *, level: float, routes: Routes = ALONG_TEMPERATURE
) -> Reading | None:
    """Residual heat capacity of a rung against that by another route.

    own, other : per particle; from samples that may be in part the same: their correlation is kept
    At constant energy the heat capacity at the temperature measured differs from the canonical one by
    d(T^2 c'/(2c))/dT / N, with c(T) of all degrees of freedom (both ensembles expanded about the energy of largest
    weight): in a liquid of 100 particles some 0.001, below any error bar.
    None without another route, or if either has fewer than 50 effective samples.
    """
    if other is None or too_short(own) or too_short(other):
        return None
    difference = own - other
    allowed = routes.allowed * abs(own.value)
    slack = f", of which {allowed:.2g} is allowed for the time step" if allowed else ""
    return Reading.deviation(
        "heat-routes",
        excess(difference, -allowed, allowed),
        level,
        f"the residual heat capacity is {own.value:.4g} from {routes.own} and {other.value:.4g} from {routes.other} "
        f"(standard error of the difference {difference.standard_error:.2g}{slack}); if they differ, {routes.parted}",
    )
