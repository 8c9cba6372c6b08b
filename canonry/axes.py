"""The axes of a figure: which ticks, and where a value lies in pixels."""

from __future__ import annotations

import math
from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from canonry.notation import unit_text

__all__ = ["Axis", "Scale", "round_ticks", "scale"]

Floats = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Axis:
    """What an axis shows, in which unit ('' if none), and the values it must reach in any case."""

    name: str
    unit: str = ""
    reach: tuple[float, ...] = ()


@dataclass(frozen=True)
class Scale:
    """Data to pixels along one axis, with its ticks; the labels are in units of 10^exponent."""

    low: float
    high: float
    start: float
    end: float
    ticks: list[float]

    @property
    def exponent(self) -> int:
        largest = max((abs(tick) for tick in self.ticks), default=0.0)
        return 0 if largest == 0.0 or 1e-2 <= largest < 1e5 else math.floor(math.log10(largest))

    def __call__(self, values: Floats | float) -> Floats:
        share = (np.asarray(values, dtype=float) - self.low) / (self.high - self.low)
        return np.asarray(self.start + share * (self.end - self.start))

    def labels(self) -> Iterable[tuple[float, str]]:
        unit = 10.0**self.exponent
        step = (self.ticks[1] - self.ticks[0]) / unit if len(self.ticks) > 1 else 1.0
        decimals = next((n for n in range(9) if abs(step * 10**n - round(step * 10**n)) < 1e-6), 9)
        for tick in self.ticks:
            yield float(self(tick)), f"{tick / unit + 0.0:.{decimals}f}".replace("-", "−")

    def caption(self, axis: Axis) -> str:
        factor = unit_text(f"10^{self.exponent}") if self.exponent else ""
        unit = " ".join(part for part in (factor, axis.unit) if part)
        return f"{axis.name}, {unit}" if unit else axis.name


def round_ticks(low: float, high: float, at_most: int) -> list[float]:
    """Multiples of 1, 2, 2.5 or 5 times a power of ten inside [low, high], never more than `at_most`."""
    rough = (high - low) / at_most
    power = 10.0 ** math.floor(math.log10(rough))
    for factor in (1.0, 2.0, 2.5, 5.0, 10.0, 20.0):
        step = factor * power
        first, last = math.ceil(low / step - 1e-9), math.floor(high / step + 1e-9)
        if last - first < at_most:
            break
    return [step * n for n in range(first, last + 1)]


def scale(extent: tuple[float, float], start: float, end: float, ticks: int, *, margin: float) -> Scale:
    """Map an extent of the data, widened by a share `margin` on both sides, to pixels from start to end."""
    low, high = extent
    if high - low <= 1e-12 * max(abs(low), abs(high), 1e-300):
        half = 0.05 * abs(low) or 0.5
        low, high = low - half, high + half
    low, high = low - margin * (high - low), high + margin * (high - low)
    return Scale(low, high, start, end, round_ticks(low, high, ticks))
