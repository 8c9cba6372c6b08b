"""The temperatures of a study file: a list, a number of rungs over a range, or a range whose rungs a pilot chooses."""

from __future__ import annotations

from dataclasses import dataclass

from canonry.keys import Reader, Table, one_or_more, quantity, whole
from canonry.quantities import NotAccepted, rounded
from canonry.units import Scale

__all__ = ["Ladder", "temperature", "temperatures"]

_OVERLAPS = (0.05, 0.5)  # below, curves have gaps; two rungs alone that are alike share one half

Temperatures = tuple[float, ...]


@dataclass(frozen=True)
class Ladder:
    """A range of temperatures (epsilon/k_B) and the least overlap of the rungs that are to cover it.

    is_chosen : whether the study has these rungs; else its states are the ends of the range, for want of better
    """

    start: float
    end: float
    overlap: float
    is_chosen: bool = False


def temperature(scale: Scale | None) -> Reader[float]:
    """Reads one temperature."""
    return quantity("temperature", 0.01, 100.0, scale)


def temperatures(table: Table, scale: Scale | None, *, densities: int) -> tuple[list[Temperatures], Ladder | None]:
    """Those at each of the densities of [state], and the ladder they are of where a pilot chooses.

    A list stands as it is; rungs are evenly spaced in 1/T, so that neighbours overlap about equally.
    """
    if not isinstance(table.content.get("temperatures"), dict):
        return [table.read("temperatures", one_or_more(temperature(scale)))] * densities, None
    asked = table.table("temperatures").only(("from", "to", "rungs", "overlap", "chosen"))
    first, last = (asked.read(name, temperature(scale)) for name in ("from", "to"))
    if "overlap" not in asked:
        if "chosen" in asked:
            raise asked.refusal(
                "chosen", "these go with an overlap; what is accepted without is a list of temperatures"
            )
        return [_evenly(asked, first, last)] * densities, None
    if "rungs" in asked:
        raise asked.refusal("rungs", "overlap is given too; what is needed is either, not both")
    if not first < last:
        raise asked.refusal("to", "what is needed is a higher temperature than from")
    overlap = asked.read("overlap", _overlap)
    if "chosen" not in asked:
        return [(first, last)] * densities, Ladder(first, last, overlap)
    return asked.read("chosen", _chosen(scale, densities)), Ladder(first, last, overlap, is_chosen=True)


def _evenly(asked: Table, first: float, last: float) -> Temperatures:
    rungs = asked.read("rungs", whole(2, 1000))
    shares = (k / (rungs - 1) for k in range(rungs))
    found = tuple(rounded(1.0 / ((1.0 - share) / first + share / last)) for share in shares)
    if len(set(found)) < rungs:
        raise asked.refusal("to", "too close to from; what is needed are different temperatures for all rungs")
    return found


def _overlap(value: object) -> float:
    low, high = _OVERLAPS
    if isinstance(value, bool) or not isinstance(value, int | float) or not low <= value <= high:
        raise NotAccepted(
            f"what is needed is a number from {low:g} to {high:g}: the share of samples that neighbours have in common"
        )
    return rounded(float(value))


def _chosen(scale: Scale | None, densities: int) -> Reader[list[Temperatures]]:
    """One list, or one for each density."""
    one = one_or_more(temperature(scale))

    def read(value: object) -> list[Temperatures]:
        lists = value if densities > 1 else [value]
        if not isinstance(lists, list) or len(lists) != densities or not all(isinstance(each, list) for each in lists):
            wanted = "a list of temperatures" if densities == 1 else f"{densities} lists, one for each density"
            raise NotAccepted(f"what is needed is {wanted}, as `canonry run` writes it, or to leave it out")
        return [one(each) for each in lists]

    return read
