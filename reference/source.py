"""Where a reference comes from, which fluid it describes and how far it can be trusted."""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["Accuracy", "DescribedFluid", "Source", "beside_simulation", "beside_slopes"]


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


_DEVIATION = "from the deviation of the equation from published simulation, not from a statement of its authors: covers"
_DYNAMICS = "molecular dynamics of G. Chaparro and E. A. Mueller, J. Chem. Phys. 158, 184505 (2023), temperature 1 to 9"
_MONTE_CARLO = "Monte Carlo of the NIST Standard Reference Simulation Website at temperature 0.85"


def beside_simulation(absolute: float, order: int, relative: float, *, covered: int) -> Accuracy:
    """The accuracy that covers so many of 302 simulated states and all of 9 others."""
    return Accuracy(
        absolute,
        order,
        relative,
        f"{_DEVIATION} {covered} of 302 states of the {_DYNAMICS}, and 9 of 9 of the {_MONTE_CARLO}",
    )


def beside_slopes(absolute: float, order: int, relative: float, *, covered: str) -> Accuracy:
    """The accuracy that covers so many slopes between simulated states."""
    return Accuracy(absolute, order, relative, f"{_DEVIATION} {covered}, of the {_DYNAMICS}")
