"""From text with a unit to reduced values, and back to the shortest text that reads the same."""

from __future__ import annotations

import re
from collections.abc import Sequence
from functools import cache
from typing import TYPE_CHECKING

from canonry.units import UNITS, Scale

if TYPE_CHECKING:
    import pint

__all__ = ["NotAccepted", "example", "from_text", "percent", "rounded", "shortest_text"]

_SIGNIFICANT_DIGITS = 12  # kept of any value read, so that a value survives being written in another unit
_NUMBER = r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?"
_UNIT = r"[A-Za-zµμÅ°]+(?:(?:\^|\*\*)?-?\d)?"
_UNITS = rf"(?:1/)?{_UNIT}(?:[/* ]{_UNIT})*"
_EXAMPLES = {
    "epsilon": "119.8 K",
    "sigma": "3.405 angstrom",
    "mass": "39.948 u",
    "temperature": "120 K",
    "density": "1.36 g/cm3",
    "length": "1.02 nm",
    "time": "10.8 fs",
    "friction": "0.9 1/ps",
}


class NotAccepted(ValueError):
    """A value that does not mean what its place asks for; the text says what would."""


def rounded(value: float) -> float:
    """The value to twelve significant digits, the precision at which two values are the same."""
    return float(f"{value:.{_SIGNIFICANT_DIGITS - 1}e}")


def example(quantity: str) -> str:
    """A text that `from_text` takes for this quantity."""
    return _EXAMPLES.get(quantity) or f"1.5 {UNITS[quantity].SI}"


def from_text(text: str, quantity: str, scale: Scale | None) -> float:
    """Reduced value of a text such as "1.36 g/cm3"; without a scale, epsilon in J, sigma in m, mass in kg.

    Not rounded. Raises NotAccepted when the text is no number with a unit of this quantity.
    """
    from pint.errors import PintError

    name = quantity.replace("_", " ")
    wanted = f'what is needed is a number with a unit of {name}, such as "{example(quantity)}"'
    match = re.fullmatch(rf"({_NUMBER}) ?({_UNITS})", _plain(text))
    if match is None:
        raise NotAccepted(wanted)
    number, unit = match.groups()
    try:
        found = _registry().Quantity(float(number), re.sub(r"([A-Za-zµμÅ°])(-?\d)", r"\1**\2", unit))
        for accepted, factor in _meanings(quantity, scale).items():
            target = _registry().Unit(accepted)
            if found.check(target.dimensionality):
                return float(found.to(target).magnitude) * factor
    except (PintError, ArithmeticError):
        raise NotAccepted(f"'{unit}' is not a unit known here; {wanted}") from None
    raise NotAccepted(f"'{unit}' is not a unit of {name}; {wanted}")


def percent(text: str) -> float:
    """The fraction that a text such as "2 %" means, from 1e-12 to 1. Raises NotAccepted."""
    match = re.fullmatch(rf"\s*({_NUMBER})\s*%\s*", text)
    if match is None or not 1e-12 <= float(match[1]) / 100 <= 1.0:
        raise NotAccepted('what is needed is a share up to 100 %, such as "2 %"')
    return rounded(float(match[1]) / 100)


def shortest_text(value: float, quantity: str, scale: Scale | None, units: Sequence[str]) -> str:
    """The text with the fewest digits, in one of the units, whose value rounds to the (rounded) value given."""
    in_units = {unit: value / from_text(f"1 {unit}", quantity, scale) for unit in units}
    for digits in range(1, 18):
        for unit, number in in_units.items():
            text = f"{float(f'{number:.{digits}g}')!r}".removesuffix(".0") + f" {unit}"
            if rounded(from_text(text, quantity, scale)) == value:
                return text
    raise ValueError(f"{value!r} has more digits than are kept of any value")


def _plain(text: str) -> str:
    """One space between words, none beside operators, "/(a b)" as "/a/b"."""
    text = " ".join(text.replace("·", " ").split())
    text = re.sub(r"/ ?\(([^()]*)\)", lambda match: "/" + "/".join(match[1].replace("*", " ").split()), text)
    return re.sub(r" ?(/|\*\*|\*|\^) ?", r"\1", text)


@cache
def _registry() -> pint.UnitRegistry[float]:
    import pint

    return pint.UnitRegistry()


def _meanings(quantity: str, scale: Scale | None) -> dict[str, float]:
    """Units that a quantity may be given in, for their dimension only, and what one of them amounts to."""
    from scipy.constants import Avogadro, Boltzmann

    if scale is None:
        return {
            "epsilon": {"J": 1.0, "J/mol": 1.0 / Avogadro, "K": Boltzmann},
            "sigma": {"m": 1.0},
            "mass": {"kg": 1.0, "kg/mol": 1.0 / Avogadro},
        }[quantity]
    label = re.sub(r"([A-Za-z])(\d)", r"\1**\2", _plain(UNITS[quantity].SI))
    meanings = {label: 1.0 / scale.factor(quantity)}
    if quantity == "density":
        meanings |= {"1/m**3": scale.sigma**3, "mol/m**3": Avogadro * scale.sigma**3}
    return meanings
