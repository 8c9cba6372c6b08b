"""What this study's reader must know beyond what holds for every study of such a model, one sentence each."""

from __future__ import annotations

import math
from collections import defaultdict
from collections.abc import Iterator, Sequence

import numpy as np

from canonry.attainment import words
from canonry.border import Border
from canonry.findings import Findings
from canonry.risks import risks
from canonry.study import Study
from canonry.until import decide
from estimators.estimate import Estimate
from sampler.fluid import State

__all__ = ["caveats"]

_FEW = 0.8  # accepted steps
_ROUGH = 1.5  # combined standard errors, on the average, between rungs and a surface that does not know them


def caveats(study: Study, findings: Findings, border: Border) -> list[str]:
    """The sentences, in the units of the border."""
    return [
        *(study.adopted.notes if study.adopted else ()),
        *_unfinished(findings, border),
        *_precision(study, findings, border),
        *risks(study, border),
        *_measured_temperatures(findings),
        *_acceptance(findings),
        *_surface(findings),
    ]


def _unfinished(findings: Findings, border: Border) -> Iterator[str]:
    if findings.unfinished:
        yield f"Not all samples asked for are there yet: {_listed(findings.unfinished, border)}."


def _precision(study: Study, findings: Findings, border: Border) -> Iterator[str]:
    """Whether what [until] asks for is met, and what stopping there does (benchmark `stopping.py`)."""
    if study.until is None:
        return
    values: dict[State, dict[str, Estimate | None]] = defaultdict(dict)
    for finding in findings.headlines:
        values[finding.state][finding.property] = finding.estimate
    shortest = sorted(findings.cuts, key=lambda cut: -cut.samples)
    steps = {cut.state: cut.samples * study.sampling.record_every for cut in shortest}
    yield words(study.until, decide(study, values, steps), border)
    yield (
        "Sampling stops at small error bars, which go with small fluctuations: heat capacity, thermal pressure and "
        "bulk modulus come out low by about a tenth of their error."
    )


def _measured_temperatures(findings: Findings) -> Iterator[str]:
    if any(finding.temperature is not None for finding in findings.properties):
        yield "No bath acts while samples are taken: temperatures are those of the mean kinetic energy, not those set."


def _surface(findings: Findings) -> Iterator[str]:
    """How rungs that are left out agree with the surface through the others."""
    if findings.no_surface:
        yield f"No surface is laid through the isochores: {findings.no_surface}."
    if findings.held_out:
        deviations = np.array([each.z for each in findings.held_out])
        root, largest = math.sqrt(float(np.mean(deviations**2))), float(np.max(np.abs(deviations)))
        advice = "" if root < _ROUGH else "; values between the isochores are in doubt, set isochores or rungs closer"
        yield (
            f"The surface between the isochores is held against each rung without using it: {len(deviations)} values "
            f"deviate by {root:.2f} combined standard errors on the average, by {largest:.1f} at most{advice}."
        )


def _acceptance(findings: Findings) -> Iterator[str]:
    shares = [cut.acceptance for cut in findings.cuts if cut.acceptance is not None]
    if shares:
        low, high = (f"{100.0 * share:.1f}" for share in (min(shares), max(shares)))
        advice = "; a smaller time step wastes fewer" if min(shares) < _FEW else ""
        yield f"The Metropolis test passed {low if low == high else f'{low} to {high}'} % of the steps{advice}."


def _listed(states: Sequence[State], border: Border) -> str:
    shown = "; ".join(border.state(state) for state in states[:3])
    return f"{shown}; and {len(states) - 3} more states" if len(states) > 3 else shown
