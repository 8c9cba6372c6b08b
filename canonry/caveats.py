"""What this study's reader must know beyond what holds for every study of such a model, one sentence each."""

from __future__ import annotations

from collections.abc import Iterator, Sequence

import numpy as np

from canonry.border import Border
from canonry.findings import Findings
from canonry.notation import name_of
from canonry.numbers import with_error
from canonry.risks import risks
from canonry.study import Study
from estimators.estimate import Estimate
from sampler.fluid import State

__all__ = ["caveats"]

_CROSS_CHECK = 4.0  # combined standard errors between a value from g(r) and the same from the pair sums
_UNSETTLED = 0.45  # share of a series cut off from which on even half of it may not have been enough


def caveats(study: Study, findings: Findings, border: Border) -> list[str]:
    """The sentences, in the units of the border."""
    return [
        *_unfinished(findings, border),
        *risks(study, border),
        *_measured_temperatures(findings),
        *_unsettled(findings, border),
        *_cross_checks(findings, border),
    ]


def _unfinished(findings: Findings, border: Border) -> Iterator[str]:
    if findings.unfinished:
        yield f"Not all samples asked for are there yet: {_listed(findings.unfinished, border)}."


def _measured_temperatures(findings: Findings) -> Iterator[str]:
    if any(finding.temperature is not None for finding in findings.properties):
        yield "No bath acts while samples are taken: temperatures are those of the mean kinetic energy, not those set."


def _unsettled(findings: Findings, border: Border) -> Iterator[str]:
    states = dict.fromkeys(cut.state for cut in findings.cuts if cut.cut > _UNSETTLED * cut.samples)
    if states:
        where = _listed([*states], border)
        yield f"About half of a series was cut off, and it may not have settled even then: {where}."


def _cross_checks(findings: Findings, border: Border) -> Iterator[str]:
    own = {
        (finding.state, finding.property): finding.estimate
        for finding in findings.properties
        if finding.method != "reweighted"
    }
    for state, structure in findings.structures.items():
        for name, again in (("residual_energy", structure.energy), ("pressure", structure.pressure)):
            value = own.get((state, name))
            if value is not None and _apart(value, again):
                yield (
                    f"At {border.state(state)} the {name_of(name)} recomputed from g(r), "
                    f"{_shown(again, name, border)}, is more than four combined standard errors from that of the "
                    f"pair sums, {_shown(value, name, border)}."
                )


def _apart(first: Estimate, second: Estimate) -> bool:
    error = float(np.hypot(first.standard_error, second.standard_error))
    return abs(first.value - second.value) > _CROSS_CHECK * error


def _shown(estimate: Estimate, name: str, border: Border) -> str:
    return with_error(border.value(name, estimate.value), border.value(name, estimate.standard_error))


def _listed(states: Sequence[State], border: Border) -> str:
    shown = "; ".join(border.state(state) for state in states[:3])
    return f"{shown}; and {len(states) - 3} more states" if len(states) > 3 else shown
