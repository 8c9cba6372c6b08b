"""The health section: which checks failed, what that means, and how every check fared."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING

from canonry.failures import Failure, failures
from canonry.health import CHECKS
from canonry.notation import unit_text
from canonry.numbers import plain
from canonry.results import Results
from canonry.units import unit_label

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["checked", "fared", "told"]

_NAMED, _DIGITS = 3, 5  # temperatures of a cell


def checked(results: Results) -> str:
    """One sentence: what the checks mark, or that they mark nothing."""
    found, looked = _failures(results), results.health["check"].nunique()
    if results.health.empty:
        return "No health check could look at this study."
    if not found:
        readings = f"all {len(results.health)} readings of {_counted(looked, 'health check')} are within their limits"
        return f"The checks mark no value of this study as doubtful: {readings}. The caveats below still hold."
    names = ", ".join(f"{each.check} ({_counted(len(each.states), 'state')})" for each in found)
    return (
        f"The checks mark values of this study as doubtful: {len(found)} of {looked} failed, {names}. The section on "
        "health says what was found and what to do."
    )


def told(results: Results) -> list[str]:
    """Every check that failed, worst first: where, and the sentence of its worst reading."""
    return [
        f"{each.check} at {_where(results, each)}: {each.meaning.replace('+-', '±')}." for each in _failures(results)
    ]


def fared(results: Results, sets: Sequence[Results]) -> Iterator[list[str]]:
    """Every check that looked at anything, what it asks, and how it fared at the states of each set, in words."""
    looked = set(results.health["check"])
    for name, kind in CHECKS.items():
        if name in looked:
            readings = (own.health[own.health["check"] == name] for own in sets)
            yield [name, kind.asks, *(_in_words(each) for each in readings)]


def _failures(results: Results) -> list[Failure]:
    return failures(results.health.to_dict("records"))


def _in_words(readings: pd.DataFrame) -> str:
    states = readings.groupby(["density", "temperature"], as_index=False).agg(passed=("passed", "all"))
    failed = sorted(states["temperature"][~states["passed"]])
    if states.empty:
        return "– nothing to check"
    if not failed:
        return f"✓ all {len(states)} pass" if len(states) > 1 else "✓ passes"
    if len(states) == 1:
        return "✗ fails"
    shown = [plain(temperature, _DIGITS) for temperature in dict.fromkeys(failed)]
    where = ", ".join(shown) if len(shown) <= _NAMED else f"{shown[0]} to {shown[-1]}"
    return f"✗ {len(failed)} of {len(states)} fail: T = {where}"


def _where(results: Results, failure: Failure) -> str:
    temperature, density = failure.states[0]
    units = (unit_text(unit_label(name, results.units)) for name in ("temperature", "density"))
    at = f"T = {plain(temperature)} {next(units)}, density {plain(density)} {next(units)}"
    more = len(failure.states) - 1
    return f"{at} and {_counted(more, 'more state')}" if more else at


def _counted(number: int, noun: str) -> str:
    return f"{number} {noun if number == 1 else noun + 's'}"
