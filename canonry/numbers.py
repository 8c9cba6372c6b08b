"""Numbers as people read them."""

from __future__ import annotations

import math

__all__ = ["plain", "with_error"]

_SMALLEST_PLAIN = 1e-4
_LARGEST_PLAIN = 1e7


def plain(value: float, digits: int = 6) -> str:
    """A value without uncertainty to `digits` significant digits, no trailing zeros: '0.8', '1.25e-07'; '-' if none."""
    return f"{value:.{digits}g}" if math.isfinite(value) else "-"


def with_error(value: float, error: float) -> str:
    """Value with its standard error, two digits of it, in units of the value's last digits: '1.2345(67)'.

    An error of one or more that reaches past the decimal point carries the point: '12.3(4.5)'. Very large or small
    numbers take a power of ten: '1.234(56)e-07'. Error zero: the value is exact and stands alone. No finite error:
    '1.23(?)'. No finite value: '-'.
    """
    if not math.isfinite(value):
        return "-"
    if error == 0.0:
        return plain(value)
    if not math.isfinite(error):
        return f"{plain(value, 3)}(?)"
    error = abs(error)
    largest = max(abs(value), error)
    if _SMALLEST_PLAIN <= largest < _LARGEST_PLAIN:
        return _pair(value, error)
    exponent = math.floor(math.log10(largest))
    return f"{_pair(value / 10.0**exponent, error / 10.0**exponent)}e{exponent:+03d}"


def _pair(value: float, error: float) -> str:
    exponent = int(f"{error:.1e}".split("e")[1])
    decimals = 1 - exponent
    if decimals <= 0:
        return f"{round(value, decimals):.0f}({round(error, decimals):.0f})"
    shown = f"{error:.{decimals}f}" if exponent >= 0 else f"{round(error * 10.0**decimals)}"
    return f"{value:.{decimals}f}({shown})"
