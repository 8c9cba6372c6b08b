"""What the force kernels need of a fluid: the pair force and the sums that are recorded, by type of a small record.

A kernel is given one of these records and is compiled for its type; `strength` and `terms` are where they differ. Both
are asked for all eight lanes and need to be right inside the cutoff only.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt
from numba.core import types
from numba.extending import overload

from sampler.compiled import piece
from sampler.fluid import Fluid
from sampler.vector import OCTAVE_BITS, gather, held, interval, reciprocal, square_root

__all__ = [
    "ForceShifted",
    "PairFunction",
    "Tabulated",
    "Truncated",
    "curvature",
    "pair_function",
    "strength",
    "tabulated",
    "terms",
]


class Truncated(NamedTuple):
    """Lennard-Jones, the force cut at a distance: the truncations whose force is that of the bare potential."""

    cutoff: float


class ForceShifted(NamedTuple):
    """Lennard-Jones, the force less its value at the cutoff."""

    cutoff: float
    slope: float


class Tabulated(NamedTuple):
    """Any pair energy, as a cubic spline in r^2; for float32 the force as straight lines on finer intervals.

    first, short_first : numbers of the intervals of r^2 the tables start with; each octave is divided evenly
    energy : (4 n,), coefficients of u in powers 0 to 3 of the distance from the interval's lower end
    short_strength : (2 m,), the same of -u'/r
    """

    cutoff: float
    first: int
    energy: npt.NDArray[np.float64]
    short_first: int
    short_strength: npt.NDArray[np.float32]


PairFunction = Truncated | ForceShifted | Tabulated


def tabulated(r: npt.NDArray[np.float64], energy: npt.NDArray[np.float64], *, cutoff: float) -> Tabulated:
    """The spline through pair energies at ascending distances r, (n,), sigma, that reach the cutoff."""
    from scipy.interpolate import CubicSpline

    first, ends = _ends(r[0] ** 2, cutoff**2, np.float64)
    spline = CubicSpline(ends, CubicSpline(r, energy)(np.sqrt(ends)))
    short_first, ends = _ends(r[0] ** 2, cutoff**2, np.float32)
    # lines through the two points where the best line crosses a parabola: they err on neither side on average
    width, apart = np.diff(ends), 3.0**-0.5
    low, high = (-2.0 * spline(ends[:-1] + 0.5 * (1.0 + side * apart) * width, 1) for side in (-1.0, 1.0))
    slope = (high - low) / (apart * width)
    lines = np.stack([0.5 * (low + high - slope * width), slope], axis=1)
    coefficients = np.ascontiguousarray(spline.c[::-1].T)
    return Tabulated(cutoff, first, coefficients.ravel(), short_first, lines.astype(np.float32).ravel())


def _ends(low: float, high: float, kind: type[np.floating[Any]]) -> tuple[int, npt.NDArray[np.float64]]:
    """Number of the interval that holds `low`, as `interval` gives it, and the ends of all from there to `high`."""
    size = 8 * np.dtype(kind).itemsize
    rest = np.finfo(kind).nmant - OCTAVE_BITS[size]
    numbers = np.array([low, high], kind).view(f"i{size // 8}") >> rest
    between = np.arange(numbers[0], numbers[1] + 2)
    return int(numbers[0]), (between << rest).astype(f"i{size // 8}").view(kind).astype(np.float64)


def pair_function(fluid: Fluid) -> PairFunction:
    """What the kernels need of a fluid."""
    if fluid.truncation == "force-shifted":
        return ForceShifted(float(fluid.cutoff), fluid.slope_at_cutoff)
    return Truncated(float(fluid.cutoff))


def strength(pair, square):  # type: ignore[no-untyped-def]
    """-u'(r)/r from r^2."""
    raise TypeError("compiled code only")


def terms(pair, square):  # type: ignore[no-untyped-def]
    """Three numbers of each pair whose sums are recorded, from r^2.

    Lennard-Jones : r^-12, r^-6, and r where the force is shifted
    Tabulated : u, w, x
    """
    raise TypeError("compiled code only")


@piece
def _powers(square):  # type: ignore[no-untyped-def]
    """r^-2 and r^-6."""
    inverse = reciprocal(square)
    return inverse, inverse * inverse * inverse


def _truncated_strength(pair, square):  # type: ignore[no-untyped-def]
    inverse, sixth = _powers(square)
    return (48.0 * sixth - 24.0) * sixth * inverse


def _truncated_terms(pair, square):  # type: ignore[no-untyped-def]
    _, sixth = _powers(square)
    return sixth * sixth, sixth, 0.0 * sixth


def _shifted_strength(pair, square):  # type: ignore[no-untyped-def]
    inverse, sixth = _powers(square)
    return (48.0 * sixth - 24.0) * sixth * inverse + pair.slope * square_root(inverse)


def _shifted_terms(pair, square):  # type: ignore[no-untyped-def]
    inverse, sixth = _powers(square)
    return sixth * sixth, sixth, square * square_root(inverse)


@piece
def _row(pair, square):  # type: ignore[no-untyped-def]
    """Place in `energy` of the interval of r^2, and how far beyond its lower end."""
    number, beyond = interval(square)
    return 4 * held(number - pair.first, 0, pair.energy.size // 4 - 1), beyond


def _tabulated_strength(pair, square):  # type: ignore[no-untyped-def]
    row, t = _row(pair, square)
    b, c, d = gather(pair.energy, row + 1), gather(pair.energy, row + 2), gather(pair.energy, row + 3)
    return -2.0 * b - t * (4.0 * c + 6.0 * t * d)


def _short_tabulated_strength(pair, square):  # type: ignore[no-untyped-def]
    number, beyond = interval(square)
    row = 2 * held(number - pair.short_first, 0, pair.short_strength.size // 2 - 1)
    return gather(pair.short_strength, row) + beyond * gather(pair.short_strength, row + 1)


def _tabulated_terms(pair, square):  # type: ignore[no-untyped-def]
    row, t = _row(pair, square)
    a, b = gather(pair.energy, row), gather(pair.energy, row + 1)
    c, d = gather(pair.energy, row + 2), gather(pair.energy, row + 3)
    slope, bend = b + t * (2.0 * c + 3.0 * t * d), 2.0 * c + 6.0 * t * d
    return a + t * (b + t * (c + t * d)), 2.0 * square * slope, 4.0 * square * (slope + square * bend)


def curvature(pair, square):  # type: ignore[no-untyped-def]
    """u'' + 2 u'/r, the Laplacian of the pair energy, from r^2; without what a jump of the force at the cutoff adds."""
    raise TypeError("compiled code only")


def _truncated_curvature(pair, square):  # type: ignore[no-untyped-def]
    inverse, sixth = _powers(square)
    return (528.0 * sixth - 120.0) * sixth * inverse


def _shifted_curvature(pair, square):  # type: ignore[no-untyped-def]
    inverse, sixth = _powers(square)
    return (528.0 * sixth - 120.0) * sixth * inverse - 2.0 * pair.slope * square_root(inverse)


_terms_of_a_table = piece(_tabulated_terms)


def _tabulated_curvature(pair, square):  # type: ignore[no-untyped-def]
    _, virial, hypervirial = _terms_of_a_table(pair, square)
    return (virial + hypervirial) * reciprocal(square)


@overload(strength, jit_options={"forceinline": True})
def _strength(pair, square):  # type: ignore[no-untyped-def]
    tabulated = _tabulated_strength if square.element == types.float64 else _short_tabulated_strength
    functions = {Truncated: _truncated_strength, ForceShifted: _shifted_strength, Tabulated: tabulated}
    return functions[pair.instance_class]


@overload(terms, jit_options={"forceinline": True})
def _terms(pair, square):  # type: ignore[no-untyped-def]
    functions = {Truncated: _truncated_terms, ForceShifted: _shifted_terms, Tabulated: _tabulated_terms}
    return functions[pair.instance_class]


@overload(curvature, jit_options={"forceinline": True})
def _curvature(pair, square):  # type: ignore[no-untyped-def]
    functions = {
        Truncated: _truncated_curvature,
        ForceShifted: _shifted_curvature,
        Tabulated: _tabulated_curvature,
    }
    return functions[pair.instance_class]
