"""The second virial coefficient as a function of inverse temperature, with its derivatives."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from numpy.polynomial import Chebyshev

from estimators.errors import BadSeries, NotSolved

__all__ = ["VirialCurve", "virial_curve"]

Floats = npt.NDArray[np.float64]

DEGREES = (12, 20, 32, 48, 64)
ACCURACY = 1e-11  # of the largest coefficient
MARGIN = 0.05  # of the range, on either side: derivatives are less accurate at the ends


@dataclass(frozen=True)
class VirialCurve:
    """B2(tau) and what it makes of a dilute gas; build it with `virial_curve`."""

    series: tuple[Chebyshev, Chebyshev, Chebyshev]

    def derivatives(self, points: Floats) -> Floats:
        """A_mn of alpha = rho B2 at points (Q, 2) of tau and rho, (Q, 6) in the order of `kernel.ORDERS`."""
        tau, rho = points.T
        value, slope, bend = (tau**order * each(tau) for order, each in enumerate(self.series))
        return np.stack([rho * each for each in (value, slope, value, bend, slope, 0.0 * value)], axis=1)


def virial_curve(second_virial: Callable[[float], float], taus: tuple[float, float]) -> VirialCurve:
    """Interpolates B2(T) between two inverse temperatures to 1e-10 of its largest value there.

    Raises BadSeries if B2 is not finite, NotSolved if it is too rough to be interpolated.
    """
    low, high = taus
    margin = min(MARGIN * (high - low), 0.5 * low)
    domain = [low - margin, high + margin]

    def of(taus: Floats) -> Floats:
        return np.array([float(second_virial(1.0 / tau)) for tau in taus])

    for degree in DEGREES:
        series = Chebyshev.interpolate(of, degree, domain=domain)
        sizes = np.abs(series.coef)
        if not np.all(np.isfinite(sizes)):
            raise BadSeries(f"the second virial coefficient is not finite between T {1 / domain[1]:g} and the hottest")
        if np.max(sizes[-3:]) <= ACCURACY * np.max(sizes):
            return VirialCurve((series, series.deriv(), series.deriv(2)))
    raise NotSolved(f"the second virial coefficient is no smooth function of T near {1.0 / high:g} to {1.0 / low:g}")
