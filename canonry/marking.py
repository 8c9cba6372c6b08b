"""Less trust in values where a health check failed, or where something was noticed as their samples were adopted."""

from __future__ import annotations

from collections.abc import Collection, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass

from canonry.findings import Check, Finding
from canonry.health import CHECKS, blame
from canonry.notes import DOUBTS
from sampler.fluid import State

__all__ = ["marked"]


@dataclass(frozen=True)
class _Blame:
    """Why properties at some states, and on the curve between two temperatures, are in doubt."""

    reason: str
    trust: str
    touches: Collection[str]
    at: tuple[State, ...]
    between: tuple[float, float]

    def concerns(self, finding: Finding) -> bool:
        if finding.estimate is None or finding.property not in self.touches:
            return False
        low, high = self.between
        is_between = finding.state.density == self.at[0].density and low < finding.state.temperature < high
        return is_between or finding.state in self.at


def marked(
    findings: Iterable[Finding],
    checks: Iterable[Check],
    states: Sequence[State],
    noticed: Mapping[State, Collection[str]],
) -> Iterator[Finding]:
    """With less trust in what a failed check touches: at its own states, and on the curve up to the rungs beside them.

    states : of all rungs
    noticed : names of the doubts that notes of adoption leave, which reach as far
    """
    blames = [_failed(check, states) for check in checks if not check.reading.passed]
    blames += [_noticed(name, state, states) for state, names in noticed.items() for name in names]
    for finding in findings:
        trusts = {blame.reason: blame.trust for blame in blames if blame.concerns(finding)}
        for reason, trust in trusts.items():
            finding = finding.doubted(reason, trust)
        yield finding


def _failed(check: Check, states: Sequence[State]) -> _Blame:
    kind, name = CHECKS[check.reading.check], check.reading.check
    at = (check.state, check.warmer) if check.warmer else (check.state,)
    between = (at[0].temperature, at[1].temperature) if len(at) == 2 else _beside(check.state, states)
    return _Blame(blame(name), kind.trust, kind.touches, at, between)


def _noticed(name: str, state: State, states: Sequence[State]) -> _Blame:
    return _Blame(DOUBTS[name].reason, "caution", DOUBTS[name].touches, (state,), _beside(state, states))


def _beside(state: State, states: Sequence[State]) -> tuple[float, float]:
    """Temperatures of the rungs beside a state, between which a curve rests on it."""
    ladder = sorted(each.temperature for each in states if each.density == state.density)
    at = ladder.index(state.temperature)
    return ladder[max(at - 1, 0)], ladder[min(at + 1, len(ladder) - 1)]
