"""What a study directory still lacks, and sampling it."""

from __future__ import annotations

import time
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING

from canonry.allotment import is_settled, protocols
from canonry.directory import STUDY, claim
from canonry.study import Study

if TYPE_CHECKING:
    from sampler.fluid import State
    from sampler.ladder import Progress
    from sampler.series import Series
    from sampler.store import Chain

__all__ = ["Outstanding", "is_complete", "left", "outstanding", "recorded", "sample"]


@dataclass(frozen=True)
class Outstanding:
    """Repeats with the numbers of the segments they lack, and where damaged segments were put aside."""

    work: tuple[tuple[Chain, list[int]], ...]
    aside: tuple[Path, ...]

    @property
    def particle_steps(self) -> int:
        """Particle-steps still to be made."""
        return sum(
            chain.state.particles * (chain.segments[index][1] - chain.segments[index][0])
            for chain, missing in self.work
            for index in missing
        )


def outstanding(study: Study, directory: Path) -> Outstanding:
    """What is missing of a study, and of the rounds decided under [until]; damaged segments are put aside.

    Raises ForeignDirectory.
    """
    from sampler.ladder import unfinished

    work, aside = [], []
    for chain in _chains(study, directory, study.states):
        missing, damaged = unfinished(chain)
        work.append((chain, missing))
        aside += damaged
    return Outstanding(tuple(work), tuple(aside))


def left(study: Study, directory: Path) -> int:
    """Particle-steps that a directory lacks; writes nothing, and reads the last segment of each repeat only."""
    work = _chains(study, directory, study.states)
    return Outstanding(tuple((chain, _lacking(chain)) for chain in work), ()).particle_steps


def sample(
    study: Study,
    directory: Path,
    *,
    workers: int | None = None,
    watch: Callable[[Progress], None] | None = None,
    todo: Outstanding | None = None,
) -> Outstanding:
    """Sample what a study directory lacks, and make it the study's if it is new; returns what was lacking.

    One round under [until], see `canonry.until.rounds`.
    workers : threads, by default one for every core; the samples do not depend on it
    watch : called after every segment
    Raises UserError if the directory belongs to another study, DivergedRun, OSError; finished segments stay.
    """
    from canonry.provenance import book
    from sampler import ladder

    claim(study, directory)
    todo = todo or outstanding(study, directory)
    made = 0

    def count(progress: Progress) -> None:
        nonlocal made
        made += progress.chain.state.particles * (progress.segment.last - progress.segment.first)
        if watch is not None:
            watch(progress)

    started, clock = datetime.now(UTC), time.monotonic()
    try:
        ladder.sample([each for each in todo.work if each[1]], workers=workers, watch=count)
    finally:
        if made:
            book(directory, started=started, seconds=time.monotonic() - clock, particle_steps=made)
    return todo


def recorded(study: Study, directory: Path, state: State) -> list[Series]:
    """The repeats of one rung as far as they are there, none longer than the study asks; empty ones left out."""
    from canonry.adopted import load as load_adopted
    from sampler.ladder import load

    if study.adopted is not None:
        return load_adopted(study, directory, state)
    series = [load(chain) for chain in _chains(study, directory, [state])]
    return [each for each in series if len(each)]


def is_complete(study: Study, directory: Path, results: Sequence[str]) -> bool:
    """Whether a directory holds all of a study, with no round of [until] to come, and result files newer than that.

    Looks at file times and at the last segment of each repeat; nothing is sampled or checked in full.
    """
    toml = directory / STUDY
    made = [directory / name for name in results]
    if not all(file.exists() for file in [toml, *made]) or toml.read_text(encoding="utf-8") != study.to_toml():
        return False
    oldest = min(file.stat().st_mtime_ns for file in made)
    for chain in _chains(study, directory, study.states):
        paths = [chain.path(index) for index in range(len(chain.segments))]
        if _lacking(chain) or any(path.stat().st_mtime_ns > oldest for path in paths):
            return False
    return toml.stat().st_mtime_ns <= oldest and is_settled(study, directory)


def _chains(study: Study, directory: Path, states: Sequence[State]) -> list[Chain]:
    """Every repeat of some rungs, each as long as it is asked to be."""
    from sampler.ladder import chains

    asked = protocols(study, directory)
    return [chain for state in states for chain in chains(directory, study.fluid, [state], asked[state])]


def _lacking(chain: Chain) -> list[int]:
    """Numbers of the segments that are not there; of the last one there also if it is too short or damaged."""
    from sampler.errors import DamagedSegment
    from sampler.store import read

    numbers = range(len(chain.segments))
    there = [index for index in numbers if chain.path(index).exists()]
    try:
        if there and read(chain.path(there[-1]), chain.identity).last < chain.segments[there[-1]][1]:
            there.pop()
    except DamagedSegment:
        there.pop()
    return [index for index in numbers if index not in {*there}]
