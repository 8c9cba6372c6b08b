"""Which health checks failed, where, and what that means: from the rows of health.csv."""

from __future__ import annotations

import csv
import math
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from canonry.border import Border

if TYPE_CHECKING:
    from canonry.study import Study
    from sampler.fluid import State

__all__ = ["Failure", "failed_at", "failures", "passed"]

Row = Mapping[Any, Any]


@dataclass(frozen=True)
class Failure:
    """One check that failed.

    states : temperature and density, each once, the worst first
    meaning : what the worst of its readings means
    """

    check: str
    states: tuple[tuple[float, float], ...]
    meaning: str


def passed(row: Row) -> bool:
    """Of one reading, from a file or from a table."""
    return str(row["passed"]) == "True"


def failures(rows: Iterable[Row]) -> list[Failure]:
    """One for each check that failed anywhere, the worst first: the farthest beyond its limit."""
    by_check: dict[str, list[Row]] = {}
    for row in sorted((row for row in rows if not passed(row)), key=_excess, reverse=True):
        by_check.setdefault(row["check"], []).append(row)
    return [
        Failure(
            check,
            tuple(dict.fromkeys((float(row["temperature"]), float(row["density"])) for row in own)),
            str(own[0]["meaning"]),
        )
        for check, own in by_check.items()
    ]


def failed_at(study: Study, directory: Path) -> list[tuple[str, State]]:
    """Checks that failed by the health.csv of a study directory, and where; none where there is no such table yet.

    The table may be in either kind of units.
    """
    path = directory / "health.csv"
    if not path.exists():
        return []
    borders = [Border("reduced", None), *([Border("SI", study.scale)] if study.scale else [])]
    states = {
        (border.coordinate("temperature", state.temperature), border.coordinate("density", state.density)): state
        for border in borders
        for state in study.states
    }
    with path.open(encoding="utf-8", newline="") as file:
        found = [
            (row["check"], states.get((float(row["temperature"]), float(row["density"]))))
            for row in csv.DictReader(file)
            if not passed(row)
        ]
    return list(dict.fromkeys((check, state) for check, state in found if state is not None))


def _excess(row: Row) -> float:
    """Statistic over limit; infinite where the statistic is no number or the limit is zero."""
    statistic, limit = (
        float(row[name]) if row[name] not in ("", None) else math.nan for name in ("statistic", "threshold")
    )
    return statistic / limit if limit > 0.0 and math.isfinite(statistic) else math.inf
