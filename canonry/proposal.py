"""The time step that keeps the shift of the energy below a stated bias, one proposal a density."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

from canonry.errors import UserError
from canonry.keys import quantity
from canonry.pilot import Pilot, pilot
from canonry.quantities import NotAccepted
from canonry.study import Study

if TYPE_CHECKING:
    from estimators.estimate import Estimate
    from sampler.fluid import State

__all__ = ["SHIFTED", "Proposal", "Shift", "bias_of", "proposals"]

SHIFTED = ("baoab", "obabo")
"""Schemes with a bath whose averages the time step shifts."""
_PARTICLE_STEPS = 5_000_000  # of a short run: shifts of obabo to some 5 %, those of baoab to a third
_STEPS = 4_000  # at least
_FEW = 256  # particles
_RESOLVED = 3.0  # standard errors
_SURE = 2.0  # standard errors


@dataclass(frozen=True)
class Shift:
    """Sampled minus exact, reduced units, with its standard error."""

    value: float
    standard_error: float

    @property
    def is_resolved(self) -> bool:
        """Whether it is seen beyond its error."""
        return abs(self.value) > _RESOLVED * self.standard_error


_Shifts = Mapping[str, Shift]


@dataclass(frozen=True)
class Proposal:
    """The time step that serves all states of a density.

    state : that which allows the smallest time step
    shifts : of residual_energy and pressure there, at the time step of the study
    time_step : at most; at it the shift of the residual energy is the bias when it is two standard errors larger
    measured : whether shifts were seen against exact sampling; else they are predicted from a short run
    is_limit : whether the bias would allow longer ones, at which shifts are unknown and runs may fly apart
    """

    state: State
    shifts: Mapping[str, Shift]
    time_step: float
    measured: bool
    is_limit: bool


def bias_of(text: str, study: Study) -> float:
    """A bias of the residual energy per particle as given on the command line, reduced. Raises UserError."""
    try:
        given: object = float(text)
    except ValueError:
        given = text
    try:
        return quantity("residual_energy", 1e-9, 1e3, study.scale)(given)
    except NotAccepted as problem:
        raise UserError(f"--bias {text}: {problem}") from None


def proposals(
    study: Study, *, bias: float, workers: int | None = None, directory: Path | None = None
) -> tuple[Proposal, ...]:
    """For each density, from short runs at its ends; none where the study's scheme is not of SHIFTED.

    bias : of the residual energy per particle, reduced
    directory : of the study; where a shift was resolved there against exact sampling, it is used
    Shifts grow with the square of the time step, and do not depend on the number of particles: large systems are tried
    small.
    """
    if study.sampling.scheme not in SHIFTED:
        return ()
    seen = _measured(study, directory) if directory is not None else {}
    ends = {_small(study, state): state for states in study.isochores.values() for state in (states[0], states[-1])}
    effort = max(_PARTICLE_STEPS, _STEPS * max(state.particles for state in ends))
    runs = pilot(study, [*ends], particle_steps=effort, workers=workers)
    found: dict[float, Proposal] = {}
    for small, state in ends.items():
        each = _proposal(study, state, runs[small], seen.get(state), bias)
        if state.density not in found or each.time_step < found[state.density].time_step:
            found[state.density] = each
    return tuple(found.values())


def _small(study: Study, state: State) -> State:
    """The state with a few hundred particles, or as many as the cutoff needs."""
    needed = math.ceil(state.density * (2.0 * study.fluid.cutoff) ** 3) + 1
    return replace(state, particles=min(state.particles, max(_FEW, needed)))


def _proposal(study: Study, state: State, run: Pilot, seen: _Shifts | None, bias: float) -> Proposal:
    from estimators.step_shift import longest_step

    shifts = seen or _predicted(study, run)
    energy, time_step = shifts["residual_energy"], study.sampling.time_step
    allowed = time_step * math.sqrt(bias / (abs(energy.value) + _SURE * energy.standard_error))
    longest = longest_step([run.series])
    return Proposal(state, shifts, min(allowed, longest), seen is not None, allowed > longest)


def _predicted(study: Study, run: Pilot) -> _Shifts:
    from estimators.step_shift import step_shift

    found = step_shift([run.series], time_step=study.sampling.time_step, scheme=study.sampling.scheme)
    return {name: Shift(each.value, each.standard_error) for name, each in found.items()}


def _measured(study: Study, directory: Path) -> dict[State, _Shifts]:
    """Shifts from exact sampling at each state where that of the energy is resolved."""
    from canonry.beside import exactly, found
    from canonry.directory import continues
    from canonry.estimation import settled
    from canonry.sampling import recorded
    from estimators.canonical import rung_properties

    shifts = {}
    there = found(study, directory) if continues(study, directory) else []
    for state, exact in exactly(there).items():
        series = [settled(each) for each in recorded(study, directory, state)]
        if series:
            own = rung_properties(series)
            shifts[state] = {name: _difference(own[name], exact[name]) for name in ("residual_energy", "pressure")}
    return {state: each for state, each in shifts.items() if each["residual_energy"].is_resolved}


def _difference(sampled: Estimate, exact: Estimate) -> Shift:
    return Shift(sampled.value - exact.value, math.hypot(sampled.standard_error, exact.standard_error))
