"""What is shown while a study is sampled: per rung how far, how long still, and the error bars so far."""

from __future__ import annotations

import sys
import time
from collections import defaultdict
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING, TextIO

from canonry.border import Border
from canonry.notation import symbol_of, unit_text
from canonry.numbers import plain, with_error
from canonry.provenance import duration
from canonry.study import Study

if TYPE_CHECKING:
    from rich.table import Table

    from canonry.sampling import Outstanding
    from sampler.fluid import State
    from sampler.ladder import Progress
    from sampler.store import Chain

__all__ = ["display"]

_SHARE = 0.05  # of the time, at most, that goes into error bars
_LEAST_PAUSE = 3.0  # s between two looks at the error bars
_LINE_EVERY = 15.0  # s between plain lines
_BAR = 20  # characters

Watch = Callable[["Progress"], None]


@contextmanager
def display(
    study: Study, todo: Outstanding, border: Border, stream: TextIO | None = None, *, round_number: int = 0
) -> Iterator[Watch]:
    """A watcher for the sampling: a live table on a terminal, else a line now and then; by default on stderr.

    round_number : under [until], of the rounds beyond what the study asks of all rungs
    """
    stream = stream or sys.stderr
    tally = _Tally(study, todo, border, round_number)
    if stream.isatty():
        from rich.console import Console
        from rich.live import Live

        with Live(get_renderable=tally.table, console=Console(file=stream), refresh_per_second=2, transient=True):
            yield tally.add
        return
    last = time.monotonic()

    def line(progress: Progress) -> None:
        nonlocal last
        tally.add(progress)
        if time.monotonic() - last >= _LINE_EVERY or tally.left == 0:
            print(tally.line(), file=stream, flush=True)
            last = time.monotonic()

    yield line


class _Tally:
    """How far each rung is, and what its samples say so far."""

    def __init__(self, study: Study, todo: Outstanding, border: Border, round_number: int = 0) -> None:
        self._study, self._border = study, border
        self._what = f"sampling round {round_number}" if round_number else "sampling"
        self._chains: dict[State, list[Chain]] = defaultdict(list)
        self._whole: dict[State, int] = defaultdict(int)
        self._lacking: dict[State, int] = defaultdict(int)
        for chain, missing in todo.work:
            lengths = [last - first for first, last in chain.segments]
            self._chains[chain.state].append(chain)
            self._whole[chain.state] += sum(lengths) * chain.state.particles
            self._lacking[chain.state] += sum(lengths[index] for index in missing) * chain.state.particles
        self._values = {state: ("", "") for state in self._chains}
        self._stale: set[State] = set()
        self._start = time.monotonic()
        self._next_look = self._start + _LEAST_PAUSE
        self._at_start = self.left

    @property
    def left(self) -> int:
        """Particle-steps still to be made."""
        return sum(self._lacking.values())

    @property
    def _rate(self) -> float:
        """Particle-steps a second."""
        return (self._at_start - self.left) / max(time.monotonic() - self._start, 1e-9)

    def add(self, progress: Progress) -> None:
        """Count a segment, and look at the error bars if that is due and cheap."""
        state, segment = progress.chain.state, progress.segment
        self._lacking[state] -= (segment.last - segment.first) * state.particles
        if segment.first >= progress.chain.protocol.settling:
            self._stale.add(state)
        started = time.monotonic()
        if started >= self._next_look and self._stale:
            for each in sorted(self._stale):
                self._values[each] = self._look(each)
            self._stale.clear()
            now = time.monotonic()
            self._next_look = now + max(_LEAST_PAUSE, (now - started) / _SHARE)

    def _look(self, state: State) -> tuple[str, str]:
        """Heat capacity and pressure of a rung from its samples so far, with their error bars."""
        from estimators.canonical import rung_properties
        from sampler.ladder import load

        series = [each for each in map(load, self._chains[state]) if len(each)]
        if not series:
            return "", ""
        properties = rung_properties(series)
        heat_capacity = properties["residual_heat_capacity"] + (self._study.ideal_heat_capacity or 0.0)
        named = (("heat_capacity", heat_capacity), ("pressure", properties["pressure"]))
        value = self._border.value
        shown = [with_error(value(name, each.value), value(name, each.standard_error)) for name, each in named]
        return shown[0], shown[1]

    def _remaining(self) -> str:
        rate = self._rate
        if rate <= 0.0:
            return "starting"
        return f"{duration(self.left / rate)} left, {rate / 1e6:.1f} million particle-steps a second"

    def line(self) -> str:
        """One line on the whole."""
        whole = sum(self._whole.values())
        return f"{self._what} {100 * (whole - self.left) / whole:.0f} %: {self._remaining()}"

    def table(self) -> Table:
        """One row a rung."""
        from rich.table import Table

        table = Table(box=None, title=self.line(), title_justify="left", title_style="", pad_edge=False)
        for heading in self._headings():
            table.add_column(heading, justify="right")
        for state, values in self._values.items():
            done = 1.0 - self._lacking[state] / self._whole[state]
            full = round(done * _BAR)
            bar = f"{'━' * full}{'·' * (_BAR - full)} {100 * done:3.0f} %"
            coordinates = (self._border.coordinate(name, getattr(state, name)) for name in ("temperature", "density"))
            table.add_row(*(plain(each) for each in coordinates), bar, *values)
        return table

    def _headings(self) -> list[str]:
        heat = "residual_heat_capacity" if self._study.ideal_heat_capacity is None else "heat_capacity"
        units = {"T": "temperature", "density": "density", symbol_of(heat): heat, "P": "pressure"}
        labels = [f"{name} {unit_text(self._border.label(quantity))}" for name, quantity in units.items()]
        return [*labels[:2], "", *labels[2:]]
