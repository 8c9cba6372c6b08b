"""How many steps each rung of a study has been given: all the same, and under [until] more, round by round.

The file of the rounds lies in the study directory, in reduced units. A round is decided from samples alone, so it would
be decided so again: losing the file loses time only.
"""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import astuple, dataclass, fields, replace
from pathlib import Path

from canonry.directory import write
from canonry.errors import UserError
from canonry.study import Study
from sampler.fluid import State
from sampler.protocol import Protocol

__all__ = ["FILE", "Share", "append", "decided", "is_settled", "protocols"]

FILE = "allotment.csv"


@dataclass(frozen=True)
class Share:
    """Why a rung was given more steps in a round, or none, for one property asked for; reduced units.

    repeats, steps : of the rung when the round was decided
    name : of the property
    limit : of the standard error, as the study writes it in reduced units: "1 %" of the value, or "0.01"
    excess : standard error over its limit; infinite where the samples tell no error that can be believed
    more : steps that each repeat was given on top
    """

    temperature: float
    density: float
    particles: int
    repeats: int
    steps: int
    name: str
    limit: str
    standard_error: float
    excess: float
    more: int

    @property
    def is_met(self) -> bool:
        """Whether the error is as small as asked."""
        return self.excess <= 1.0

    @property
    def state(self) -> State:
        """Of the rung."""
        return State(self.temperature, self.density, self.particles)


_COLUMNS = ("round", *("property" if entry.name == "name" else entry.name for entry in fields(Share)))
_READERS = (float, float, int, int, int, str, str, float, float, int)


def decided(directory: Path) -> list[tuple[Share, ...]]:
    """Every round so far, the last of which may have given nothing. Raises UserError where the file is damaged."""
    file = directory / FILE
    if not file.exists():
        return []
    made: list[list[Share]] = []
    try:
        with file.open(encoding="utf-8", newline="") as stream:
            head, *rows = csv.reader(stream, strict=True)
        if tuple(head) != _COLUMNS:
            raise ValueError("other columns")
        for number, *cells in rows:
            if int(number) == len(made) + 1:
                made.append([])
            made[int(number) - 1].append(Share(*(reader(cell) for reader, cell in zip(_READERS, cells, strict=True))))
    except (ValueError, IndexError, csv.Error) as problem:
        raise UserError(
            f"{file}: it is damaged ({problem}); what is accepted is no such file: delete it, and the same rounds are "
            "decided again from the samples, none of which is lost"
        ) from None
    return [tuple(each) for each in made]


def append(directory: Path, shares: Iterable[Share]) -> None:
    """Add a round, the file is written whole or not at all. Raises OSError."""
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(_COLUMNS)
    for number, each in enumerate([*decided(directory), tuple(shares)], start=1):
        writer.writerows((number, *astuple(share)) for share in each)
    write(directory / FILE, text.getvalue())


def protocols(study: Study, directory: Path) -> dict[State, Protocol]:
    """How each rung is sampled in a directory: as the study says, under [until] as long as the rounds have made it."""
    given = _given(decided(directory)) if study.until else {}
    most = study.until.steps_at_most if study.until else study.sampling.steps
    return {
        state: replace(
            study.sampling,
            steps=min(most, max(study.sampling.steps, given.get(state, 0))),
        )
        for state in study.states
    }


def is_settled(study: Study, directory: Path) -> bool:
    """Whether the last round was decided for what the study asks now, and nothing more is to be given."""
    if study.until is None:
        return True
    made = decided(directory)
    asked = {
        (state, study.sampling.repeats, protocol.steps, name, limit.text)
        for state, protocol in protocols(study, directory).items()
        for name, limit in study.until.limits.items()
    }
    answered = {(each.state, each.repeats, each.steps, each.name, each.limit) for each in (made or [()])[-1]}
    return answered == asked and all(
        share.more == 0 and (share.is_met or share.steps >= study.until.steps_at_most) for share in made[-1]
    )


def _given(made: Sequence[Sequence[Share]]) -> Mapping[State, int]:
    """Steps of every rung that a round was decided for."""
    return {share.state: share.steps + share.more for each in made for share in each}
