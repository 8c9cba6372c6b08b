"""Where a reference comes from, which fluid it describes and how far it can be trusted."""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["Accuracy", "DescribedFluid", "Source"]


@dataclass(frozen=True)
class Source:
    """A publication, and how its numbers came here: `read`, `from memory` or `computed`, each word with its object."""

    authors: str
    journal: str
    year: int
    how: str

    def __str__(self) -> str:
        return f"{self.authors}, {self.journal} ({self.year})"


@dataclass(frozen=True)
class DescribedFluid:
    """The fluid a reference describes; `truncation` is "full" (no cutoff) or "shifted" at `cutoff` (sigma)."""

    potential: str
    truncation: str
    cutoff: float | None = None

    def same_model(self, truncation: str, cutoff: float) -> bool:
        """Whether a sampled fluid of that truncation is this one: `corrected` stands for the full potential."""
        if self.truncation == "full":
            return truncation == "corrected"
        return truncation == self.truncation and cutoff == self.cutoff


@dataclass(frozen=True)
class Accuracy:
    """Half the width of the interval that holds the true value of a property in 95 % of all cases.

    absolute : same unit as the property; applies from density 0.1 upwards and falls to zero with the dilute gas
    order : power of the density with which the residual part vanishes, 1 or 2
    relative : fraction of the residual part of the property
    origin : whose statement or deviation the two figures are
    """

    absolute: float
    order: int
    relative: float
    origin: str

    def half_width(self, residual: float, *, density: float) -> float:
        """The larger of both figures at a state; `residual` is the property without its ideal-gas part."""
        return max(self.absolute * min(1.0, density / 0.1) ** self.order, self.relative * abs(residual))
