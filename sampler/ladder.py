"""All repeats of all rungs of a study: which there are, who is next, and the threads that sample them."""

from __future__ import annotations

import os
import queue
import threading
from collections.abc import Callable, Sequence
from concurrent.futures import Future, ThreadPoolExecutor, wait
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from sampler.errors import DamagedSegment
from sampler.fluid import Fluid, State
from sampler.protocol import Protocol
from sampler.rung import advance, assemble, sampled_segments
from sampler.series import Series
from sampler.store import Chain, Segment, read, set_aside, write

__all__ = ["Progress", "chains", "load", "sample", "unfinished"]


@dataclass(frozen=True)
class Progress:
    """A segment was finished: what it is and how far its repeat has come."""

    chain: Chain
    segment: Segment
    steps_done: int
    steps_in_all: int


@dataclass
class _Work:
    """A repeat that still lacks segments."""

    chain: Chain
    missing: list[int]
    before: Segment | None = None
    writing: Future[None] | None = None
    taken: bool = False


def chains(study: Path, fluid: Fluid, states: Sequence[State], protocol: Protocol) -> list[Chain]:
    """Every repeat of every rung. Raises BadRequest if the cutoff is beyond half the box of one."""
    for state in states:
        fluid.check_box(state.box)
    return [Chain(study, fluid, state, protocol, repeat) for state in states for repeat in range(protocol.repeats)]


def load(chain: Chain) -> Series:
    """The series of one repeat as far as it has been sampled; empty if nothing has."""
    return assemble(chain, sampled_segments(chain))


def unfinished(chain: Chain) -> tuple[list[int], list[Path]]:
    """Numbers of the segments that are missing, too short or damaged; and where damaged ones were set aside.

    Raises ForeignDirectory if a segment is of another study.
    """
    missing, aside = [], []
    for index, (_, last) in enumerate(chain.segments):
        path = chain.path(index)
        if not path.exists():
            missing.append(index)
            continue
        try:
            if read(path, chain.identity).last < last:
                missing.append(index)
        except DamagedSegment:
            aside.append(set_aside(path))
            missing.append(index)
    return missing, aside


def sample(
    work: Sequence[tuple[Chain, list[int]]],
    *,
    workers: int | None = None,
    watch: Callable[[Progress], None] | None = None,
) -> None:
    """Sample the missing segments of each repeat, on all cores unless `workers` says otherwise.

    work : repeats with the numbers of the segments they lack, as `unfinished` gives them
    watch : called in this thread after every segment
    The samples do not depend on `workers`. An interrupt stops the threads at once; finished segments are on disk.
    Raises DivergedRun, after all other repeats are finished, and OSError if a segment cannot be written.
    """
    crew = _Crew([_Work(chain, list(missing)) for chain, missing in work if missing])
    threads = [
        threading.Thread(target=crew.labour, daemon=True)
        for _ in range(min(workers or os.cpu_count() or 1, len(crew.pending)))
    ]
    for thread in threads:
        thread.start()
    try:
        while any(thread.is_alive() for thread in threads) or not crew.news.empty():
            try:
                progress = crew.news.get(timeout=0.1)
            except queue.Empty:
                continue
            if watch is not None:
                watch(progress)
    finally:
        crew.stop[0] = 1
        for thread in threads:
            thread.join()
        crew.writer.shutdown()
    if crew.failures:
        raise crew.failures[0]


class _Crew:
    """Threads that take turns, whoever is free advances the repeat that has come least far; one more writes."""

    def __init__(self, pending: list[_Work]) -> None:
        self.pending = pending
        self.lock = threading.Lock()
        self.news: queue.Queue[Progress] = queue.Queue()
        self.stop = np.zeros(1, np.uint8)
        self.failures: list[Exception] = []
        self.writer = ThreadPoolExecutor(1)

    def _next(self) -> _Work | None:
        with self.lock:
            free = [work for work in self.pending if work.missing and not work.taken]
            if not free or self.stop[0]:
                return None
            work = min(free, key=lambda each: each.chain.segments[each.missing[0]][0])
            work.taken = True
            return work

    def labour(self) -> None:
        """Advance repeats, a segment at a time, until none is left and all are written."""
        while (work := self._next()) is not None:
            try:
                advanced = self._advance(work)
            except (ArithmeticError, ValueError, OSError) as error:
                self._fail(work, error)
                continue
            if not advanced:
                break
            with self.lock:
                work.taken = False
        wait([work.writing for work in self.pending if work.writing is not None])

    def _advance(self, work: _Work) -> bool:
        """Sample the next segment and hand it to the writer; False if stopped before it was finished."""
        chain, index = work.chain, work.missing[0]
        before = work.before
        if index > 0 and (before is None or before.last != chain.segments[index][0]):
            before = read(chain.path(index - 1), chain.identity)
        segment = advance(chain, index, before, self.stop)
        if segment is None:
            return False
        if work.writing is not None:
            work.writing.result()
        if self.stop[0]:
            return False
        work.writing = self.writer.submit(self._write, work, index, segment)
        work.before = segment
        del work.missing[0]
        return True

    def _write(self, work: _Work, index: int, segment: Segment) -> None:
        chain = work.chain
        try:
            write(chain.path(index), segment, chain.identity)
        except OSError as error:
            self._fail(work, error)
        else:
            self.news.put(Progress(chain, segment, segment.last, chain.segments[-1][1]))

    def _fail(self, work: _Work, error: Exception) -> None:
        """Give up a repeat; where the disk refuses, all of them."""
        with self.lock:
            self.failures.append(error)
            work.missing.clear()
        if isinstance(error, OSError):
            self.stop[0] = 1
