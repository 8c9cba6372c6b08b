"""Sampling in rounds: who gets more steps, until every standard error asked for is reached or steps run out.

All rungs first get what the study says. At the barrier after each round the headline values are estimated, and every
rung where one is less precise than asked is given more: as many samples as bring its worst error down, which falls with
their root, but no more than it has. Decisions follow from samples alone, and not on who sampled them when.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from canonry.allotment import Share, append, decided, protocols
from canonry.border import Border
from canonry.directory import claim
from canonry.estimation import settled, without_frames
from canonry.isochore import assemble
from canonry.sampling import Outstanding, outstanding, recorded, sample
from canonry.study import Study, Tolerance
from estimators.canonical import kinetic_temperature, rung_properties
from estimators.estimate import Estimate
from estimators.structure import pair_structure
from sampler.fluid import State
from sampler.forces import evaluate
from sampler.series import Series

__all__ = ["Round", "complete", "decide", "headlines", "rounds"]

_MARGIN = 1.1  # times the samples that the error asks for: a small lack costs one more round, not many
_GROWTH = 2.0  # of a rung in one round, at most: an error bar is known roughly at first
_AT_CONTACT = ("bulk_modulus", "isobaric_heat_capacity", "thermal_expansion", "sound_speed", "joule_thomson")

Values = Mapping[State, Mapping[str, Estimate | None]]


@dataclass(frozen=True)
class Round:
    """What is to be sampled before the next decision; the first round, of number 0, is what the study says.

    shares : the decision that it follows from
    """

    number: int
    todo: Outstanding
    shares: tuple[Share, ...] = ()


def rounds(study: Study, directory: Path) -> Iterator[Round]:
    """Each round that a directory still lacks, possibly with nothing to do; sample it, then ask for the next.

    Every decision is on disk before its round is handed out. Raises as `canonry.sampling.outstanding` does, BadSeries
    or NotSolved if samples cannot be used.
    """
    while True:
        made = decided(directory) if study.until else []
        yield Round(len(made), outstanding(study, directory), made[-1] if made else ())
        if study.until is None:
            return
        steps = {state: protocol.steps for state, protocol in protocols(study, directory).items()}
        shares = decide(study, headlines(study, directory), steps)
        if not made or shares != made[-1]:
            append(directory, shares)
        if not any(share.more for share in shares):
            return


def complete(study: Study, directory: Path, *, workers: int | None = None) -> None:
    """Sample all that a directory lacks, round by round; raises as `canonry.sampling.sample` and `rounds` do."""
    claim(study, directory)
    for each in rounds(study, directory):
        sample(study, directory, workers=workers, todo=each.todo)


def decide(study: Study, values: Values, steps: Mapping[State, int]) -> tuple[Share, ...]:
    """Every property asked for at every rung: how large its error is, and how many more steps its rung is given.

    values : headline values by rung and property
    steps : of each repeat of a rung, so far
    """
    until = _asked(study)
    shares = []
    for state, own in values.items():
        found = {name: (own.get(name), limit) for name, limit in until.items()}
        excess = {name: _excess(*both) for name, both in found.items()}
        more = _more(study, state, steps[state], max(excess.values()))
        shares += [
            Share(
                state.temperature,
                state.density,
                state.particles,
                study.sampling.repeats,
                steps[state],
                name,
                limit.text,
                math.inf if value is None else value.standard_error,
                excess[name],
                more,
            )
            for name, (value, limit) in found.items()
        ]
    return tuple(shares)


def _asked(study: Study) -> Mapping[str, Tolerance]:
    return study.until.limits if study.until else {}


def _excess(value: Estimate | None, limit: Tolerance) -> float:
    """Standard error over its limit; infinite where there is none that can be believed."""
    if value is None or value.trust == "no":
        return math.inf
    allowed = limit.value * abs(value.value) if limit.relative else limit.value
    return value.standard_error / allowed if allowed else math.inf


def _more(study: Study, state: State, steps: int, excess: float) -> int:
    """Steps that a rung is given: whole segments, as far as `steps_at_most`."""
    most = study.until.steps_at_most if study.until else steps
    if excess <= 1.0 or steps >= most:
        return 0
    wanted = steps * min(_GROWTH, _MARGIN * excess**2)
    length = study.sampling.segment_length(state.particles)
    return min(math.ceil(wanted / length) * length, most) - steps


def headlines(study: Study, directory: Path) -> dict[State, dict[str, Estimate | None]]:
    """Headline values of every rung, by property, as `canonry.estimation.findings` has them; no structure, no health.

    Raises BadSeries or NotSolved if samples cannot be used.
    """
    found: dict[State, dict[str, Estimate | None]] = {}
    for states in study.isochores.values():
        own, series, temperatures, asked = {}, [], {}, {}
        for state in states:
            repeats = [settled(each) for each in recorded(study, directory, state)]
            contact = _contact(study, repeats)
            repeats = [without_frames(each) for each in repeats]
            there = state
            if not study.sampling.bath:
                temperature = kinetic_temperature(repeats)
                there = replace(state, temperature=temperature.value)
                temperatures[there] = temperature
            own[there], asked[there] = rung_properties(repeats, contact=contact), state
            series += repeats
        isochore = assemble(
            dict(sorted(own.items())),
            series,
            temperatures=temperatures,
            ideal_heat_capacity=study.ideal_heat_capacity,
            spoken=Border.of(study).temperature,
        )
        found |= {state: {} for state in states}
        for finding in isochore.properties():
            if finding.headline:
                found[asked[finding.state]][finding.property] = finding.estimate
    return found


def _contact(study: Study, repeats: Sequence[Series]) -> Estimate | None:
    """g at the cutoff, where a property asked for needs it."""
    if not any(name in _AT_CONTACT for name in _asked(study)) or not study.fluid.surface_hypervirial(1.0):
        return None
    structure = pair_structure(repeats, evaluate=evaluate)
    return structure.contact if structure else None
