"""Sampling that is exact at any time step, at the ends of a study: what its values are held against."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import replace
from pathlib import Path

from canonry.errors import UserError
from canonry.findings import Check
from canonry.health import LEVEL
from canonry.study import Study
from estimators.estimate import Estimate
from sampler.fluid import State

__all__ = ["checks", "exact", "exactly", "folder"]

Properties = Mapping[str, Estimate]


def exact(study: Study) -> Study:
    """The coldest and the warmest rung of each density, sampled as the study is but with a Metropolis test a step.

    Raises UserError where the study's own scheme has no bath, or the test already.
    """
    if study.sampling.scheme not in ("baoab", "obabo"):
        raise UserError(
            f"sampling.scheme = {study.sampling.scheme}: the time step's bias is that of a scheme with a bath and "
            "without a Metropolis test; what is accepted with --step-bias is baoab or obabo"
        )
    ends = {state: None for states in study.isochores.values() for state in (states[0], states[-1])}
    return replace(study, states=tuple(ends), sampling=replace(study.sampling, scheme="metropolised"))


def folder(directory: Path) -> Path:
    """The study directory of these samples, inside that of the study."""
    return directory / "step-bias"


def exactly(study: Study, directory: Path) -> dict[State, Properties]:
    """Estimates of each rung that has been sampled exactly too, from those samples alone."""
    from canonry.directory import STUDY
    from canonry.estimation import settled
    from canonry.sampling import recorded
    from estimators.canonical import rung_properties

    if not (folder(directory) / STUDY).exists():
        return {}
    with_test = exact(study)
    found = {
        state: [settled(each) for each in recorded(with_test, folder(directory), state)] for state in with_test.states
    }
    return {state: rung_properties(series) for state, series in found.items() if series}


def checks(own: Mapping[State, Properties], exactly: Mapping[State, Properties]) -> Iterator[Check]:
    """What the check of the time step reads at each rung that has been sampled exactly too.

    own : estimates of each rung alone
    """
    from estimators.health.step_bias import step_bias

    for state, properties in exactly.items():
        if state in own:
            yield from (Check(state, each) for each in step_bias(own[state], properties, level=LEVEL) or ())
