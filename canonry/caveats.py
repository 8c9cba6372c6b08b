"""What this study's reader must know beyond what holds for every study of such a model, one sentence each."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

from canonry.border import Border
from canonry.findings import Findings
from canonry.risks import risks
from canonry.study import Study
from sampler.fluid import State

__all__ = ["caveats"]


def caveats(study: Study, findings: Findings, border: Border) -> list[str]:
    """The sentences, in the units of the border."""
    return [
        *(study.adopted.notes if study.adopted else ()),
        *_unfinished(findings, border),
        *risks(study, border),
        *_measured_temperatures(findings),
    ]


def _unfinished(findings: Findings, border: Border) -> Iterator[str]:
    if findings.unfinished:
        yield f"Not all samples asked for are there yet: {_listed(findings.unfinished, border)}."


def _measured_temperatures(findings: Findings) -> Iterator[str]:
    if any(finding.temperature is not None for finding in findings.properties):
        yield "No bath acts while samples are taken: temperatures are those of the mean kinetic energy, not those set."


def _listed(states: Sequence[State], border: Border) -> str:
    shown = "; ".join(border.state(state) for state in states[:3])
    return f"{shown}; and {len(states) - 3} more states" if len(states) > 3 else shown
