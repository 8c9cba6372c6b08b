"""Lennard-Jones pair functions in reduced units.

Source: J. E. Lennard-Jones, Proc. Phys. Soc. 43, 461 (1931).
u = 4 (r^-12 - r^-6), so the sums U, W, X are linear in S12 = sum r^-12 and S6 = sum r^-6.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

__all__ = ["ENERGY", "EXPONENTS", "HYPERVIRIAL", "NAME", "VIRIAL", "tail_sums", "u", "w", "x"]

Floats = npt.NDArray[np.float64]

NAME = "lennard-jones"
EXPONENTS = (12, 6)
ENERGY = np.array([4.0, -4.0])  # U from (S12, S6)
VIRIAL = np.array([16.0, -8.0])  # W = -1/3 sum w
HYPERVIRIAL = np.array([64.0, -16.0])  # X = 1/9 sum x


def u(r: npt.ArrayLike) -> Floats:
    """Pair energy at distance r (sigma), epsilon."""
    s6: Floats = np.asarray(r, dtype=float) ** -6.0
    return 4.0 * (s6 * s6 - s6)


def w(r: npt.ArrayLike) -> Floats:
    """r u'(r), epsilon."""
    s6: Floats = np.asarray(r, dtype=float) ** -6.0
    return -48.0 * s6 * s6 + 24.0 * s6


def x(r: npt.ArrayLike) -> Floats:
    """r d/dr (r u'(r)), epsilon."""
    s6: Floats = np.asarray(r, dtype=float) ** -6.0
    return 576.0 * s6 * s6 - 144.0 * s6


def tail_sums(cutoff: float, density: float) -> Floats:
    """Power sums S12, S6 per particle beyond the cutoff of a homogeneous fluid (g = 1), shape (2,).

    S_n = 2 pi rho r_c^(3-n) / (n-3).
    """
    return np.array([2.0 * np.pi * density * cutoff ** (3 - n) / (n - 3) for n in EXPONENTS])
