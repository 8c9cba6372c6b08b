"""Whether the precision that a study asks for is reached, in words."""

from __future__ import annotations

import math
from collections.abc import Sequence
from pathlib import Path

from canonry.allotment import Share, decided
from canonry.border import Border
from canonry.notation import symbol_of
from canonry.numbers import plain
from canonry.study import Study, Until

__all__ = ["announced", "outcome", "words"]

_TOLD = 3  # rungs named in a sentence


def announced(number: int, shares: Sequence[Share], particle_steps: int, border: Border) -> str:
    """In a sentence, what a round beyond the first is for."""
    failing = [share for share in shares if share.more]
    some = f" for {len({share.state for share in failing})} of {len({share.state for share in shares})} rungs"
    why = _listed([share for share in failing if not share.is_met], border)
    return f"Round {number}: {particle_steps:.3g} particle-steps{f'{some}, as {why}' if failing else ''}."


def outcome(study: Study, directory: Path, border: Border) -> str:
    """In a sentence, whether the precision asked for is met, by the last decision; empty where none is asked for."""
    made = decided(directory) if study.until else []
    return words(study.until, made[-1], border) if study.until and made else ""


def words(until: Until, shares: Sequence[Share], border: Border) -> str:
    """The same of any decision."""
    missed = [share for share in shares if not share.is_met]
    if not missed:
        return "Every precision asked for is met."
    ended = all(share.steps >= until.steps_at_most for share in missed)
    when = f"within {until.steps_at_most} steps (steps_at_most)" if ended else "so far"
    return f"Not every precision asked for is met {when}: {_listed(missed, border)}."


def _listed(missed: Sequence[Share], border: Border) -> str:
    """By property, the worst first."""
    worst = sorted(missed, key=lambda share: -share.excess)
    told = "; ".join(_told(share, border) for share in worst[:_TOLD])
    return told if len(worst) <= _TOLD else f"{told}; and {len(worst) - _TOLD} more"


def _told(share: Share, border: Border) -> str:
    what = f"{symbol_of(share.name)} at {border.state(share.state)}"
    if math.isinf(share.excess):
        return f"{what} has no error bar that can be believed"
    return f"the error of {what} is {plain(share.excess, 3)} times what is asked for"
