"""What is noticed of samples as they are adopted, and which values that leaves in doubt."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

from canonry.units import PROPERTIES

__all__ = ["DOUBTS", "Doubt", "Note"]


@dataclass(frozen=True)
class Note:
    """One sentence for the reader, and the name of the doubt that follows from it; empty where none does."""

    says: str
    doubt: str = ""


@dataclass(frozen=True)
class Doubt:
    """Why trust in some properties is lowered to "caution"."""

    reason: str
    touches: tuple[str, ...]


DOUBTS: Mapping[str, Doubt] = {
    "times-again": Doubt(
        "rows carry the same times as later ones and were left out, as if a run had been taken up again", (*PROPERTIES,)
    ),
    "times-uneven": Doubt("rows are not even in time, as its error bar takes them to be", (*PROPERTIES,)),
}
"""By name. Other notes name what is absent, or what moves values by much less than their error bars: energies for those
of the ensemble drawn shift heat capacities of a liquid at cutoff 3 by 0.07 %, a thirtieth of the error bar of a rung at
default effort."""
