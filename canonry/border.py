"""From reduced values to those a reader sees: the units that tables and messages are written in."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

from canonry.errors import UserError
from canonry.notation import unit_text
from canonry.numbers import plain
from canonry.study import Study
from canonry.units import Kind, Scale, unit_label

if TYPE_CHECKING:
    from sampler.fluid import State

__all__ = ["Border"]

_DIGITS = 10  # of a temperature or density: fewer than are kept of a value read, so that 112 K comes back as 112 K
_TOLD_DIGITS = 5  # of a temperature within a sentence


@dataclass(frozen=True)
class Border:
    """Units of one kind; `scale` is None where only reduced units are known."""

    kind: Kind
    scale: Scale | None

    @classmethod
    def of(cls, study: Study, kind: Kind | None = None) -> Border:
        """The kind asked for, or that of the study. Raises UserError for SI where the study has no SI scale."""
        if kind == "SI" and study.scale is None:
            raise UserError(
                "--units SI: the study gives no fluid.epsilon, fluid.sigma and fluid.mass; what is accepted without "
                "them is --units reduced"
            )
        return cls(kind or study.units, study.scale)

    def value(self, quantity: str, reduced: float) -> float:
        """A reduced value of a property or of temperature, density, length or time."""
        return reduced if self.kind == "reduced" or self.scale is None else reduced * self.scale.factor(quantity)

    def coordinate(self, quantity: str, reduced: float) -> float:
        """The same to ten digits: what marks a state in every table."""
        return float(f"{self.value(quantity, reduced):.{_DIGITS}g}")

    def label(self, quantity: str) -> str:
        """The unit's label as in tables."""
        return unit_label(quantity, self.kind)

    def text(self, quantity: str, reduced: float) -> str:
        """A value with its unit: '112 K', '1.2 ε/k_B'."""
        return f"{plain(self.coordinate(quantity, reduced))} {unit_text(self.label(quantity))}".strip()

    def temperature(self, reduced: float) -> str:
        """A temperature with its unit, short enough for a sentence in a table: '109.61 K'."""
        return f"{plain(self.value('temperature', reduced), _TOLD_DIGITS)} {self.label('temperature')}"

    def state(self, state: State) -> str:
        """A state in words: 'T = 112 K, density 1320 kg/m³'."""
        return f"T = {self.text('temperature', state.temperature)}, density {self.text('density', state.density)}"
