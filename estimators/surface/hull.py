"""What lies between the sampled states: their convex hull in inverse temperature and density."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["Hull", "hull"]

Floats = npt.NDArray[np.float64]

TOLERANCE = 1e-9  # of the extent of the sampled states


@dataclass(frozen=True, eq=False)
class Hull:
    """Convex hull of points that span an area; build it with `hull`.

    sides : (k, 3), a, b, c of a tau + b rho + c <= 0, in units of the extent of the points
    """

    sides: Floats

    def holds(self, tau: float, density: float) -> bool:
        """Whether a point is inside or on the edge."""
        return bool(np.all(self.sides @ [tau, density, 1.0] <= TOLERANCE))

    def densities(self, tau: float) -> tuple[float, float] | None:
        """Lowest and highest density at an inverse temperature; None if it is outside."""
        slopes, offsets = self.sides[:, 1], self.sides[:, 0] * tau + self.sides[:, 2]
        level = np.abs(slopes) < TOLERANCE * np.max(np.abs(slopes))
        if np.any(offsets[level] > TOLERANCE):
            return None
        crossings = -offsets[~level] / slopes[~level]
        low, high = np.max(crossings[slopes[~level] < 0.0]), np.min(crossings[slopes[~level] > 0.0])
        middle = 0.5 * (low + high)
        if not self.holds(tau, middle):
            return None
        return float(min(low, middle)), float(max(high, middle))


def hull(points: Floats) -> Hull | None:
    """Hull of points (P, 2) of tau and rho; None if they all lie on a line."""
    from scipy.spatial import ConvexHull, QhullError

    if len(points) < 3:
        return None
    low, extent = points.min(axis=0), np.ptp(points, axis=0)
    if not np.all(extent > 0.0):
        return None
    try:
        found = ConvexHull((points - low) / extent).equations
    except QhullError:
        return None
    sides = np.column_stack([found[:, :2] / extent, found[:, 2] - found[:, :2] @ (low / extent)])
    return Hull(sides)
