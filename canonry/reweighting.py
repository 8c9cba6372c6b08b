"""Properties at states that were never sampled, from all rungs and isochores together."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np

from canonry.border import Border
from canonry.directory import stored
from canonry.errors import UserError
from canonry.estimation import settled
from canonry.failures import failed_at
from canonry.findings import Finding
from canonry.health import CHECKS, blame
from canonry.provenance import duration, rate
from canonry.risks import doubt, guide
from canonry.sampling import recorded
from canonry.sources import Sources
from canonry.study import Study
from canonry.tables import estimates_table
from canonry.targets import Asked, Target, targets
from canonry.units import Kind
from estimators.derived import derived
from estimators.estimate import Estimate
from estimators.reweight import Reweighted
from estimators.trust import FEWEST_SAMPLES
from sampler.errors import BadRequest
from sampler.fluid import State

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["Answer", "answers", "reweight"]

_FEW = 0.5  # share that survives; 95 % intervals then hold in 86 to 95 % of cases (benchmarks/transfer.py)
_REFUSED = ("residual_energy", "residual_heat_capacity", "pressure", "compressibility_factor", "thermal_pressure")


@dataclass(frozen=True)
class Answer:
    """What samples say at a target, at the corresponding state of the study's own fluid and in its reduced units.

    method : "reweighted", or "surface" where too few samples support the state and it lies between isochores
    properties : none where refused
    refused : in words for the reader, empty where there are properties
    surviving : share of the samples of the best rung that still counts
    """

    target: Target
    method: str
    properties: Mapping[str, Estimate]
    effective_samples: float = 0.0
    refused: str = ""
    surviving: float = 1.0


def reweight(
    directory: str | Path,
    *,
    temperatures: Sequence[Asked] = (),
    densities: Sequence[Asked] = (),
    pressure: Asked | None = None,
    epsilon: Asked | None = None,
    sigma: Asked | None = None,
    units: Kind | None = None,
    watch: Callable[[str], None] | None = None,
) -> pd.DataFrame:
    """Properties at every temperature and density asked for, by default those of the study; writes nothing.

    temperatures, densities : numbers in reduced units, or texts with a unit
    pressure : in place of densities, which are then found, and their error is part of all error bars
    epsilon, sigma : of another fluid: multiples of the study's, or texts with a unit; its cutoff is as many sigma
    Returns rows as in curve.csv, with epsilon and sigma (over the study's) before them. Where samples hardly support a
    state, the surface through all isochores answers between them (method); elsewhere value is empty, and reason says
    how far the samples reach and what sampling the state would cost.
    Raises UserError for what cannot be asked, BadSeries or NotSolved where samples cannot be used.
    """
    import pandas as pd

    directory = Path(directory)
    study = stored(directory)
    border = Border.of(study, units)
    wanted = targets(
        study, temperatures=temperatures, densities=densities, pressure=pressure, epsilon=epsilon, sigma=sigma
    )
    failed = failed_at(study, directory)
    tables = [
        _table(study, answer, border, failed) for answer in answers(study, directory, wanted, border, watch=watch)
    ]
    return pd.concat(tables, ignore_index=True)


def answers(
    study: Study,
    directory: Path,
    wanted: Sequence[Target],
    border: Border,
    *,
    watch: Callable[[str], None] | None = None,
) -> Iterator[Answer]:
    """What the samples of a directory say at each target."""
    tell = watch or (lambda words: None)
    if not study.sampling.bath and study.adopted is None:
        raise UserError(f"{directory}: sampled at constant energy; what can be reweighted are samples with a bath")
    tell("reading the samples")
    series = [settled(each) for state in study.states for each in recorded(study, directory, state)]
    if not series:
        raise UserError(f"{directory}: there are no samples yet; what is needed is `canonry run` or `canonry sample`")
    sources = Sources(study, series, border)
    for target in wanted:
        tell(f"reweighting to {border.text('temperature', target.temperature)}")
        if target.pressure is None:
            yield _answer(directory, sources, target)
        else:
            yield _at_pressure(sources, target)


def _answer(directory: Path, sources: Sources, target: Target) -> Answer:
    study = sources.study
    state = target.corresponding(study.states[0].particles)
    try:
        found = sources.at(state.density).at(state.temperature, state.density)
    except BadRequest as problem:
        return _between(sources, target, state) or Answer(target, "reweighted", {}, refused=str(problem))
    between = _between(sources, target, state) if found.refused or found.surviving < _FEW else None
    if between is not None:
        return between
    if not found.refused:
        more = derived(
            found.properties,
            temperature=state.temperature,
            density=state.density,
            ideal_heat_capacity=study.ideal_heat_capacity,
        )
        properties = {**found.properties, **more}
        return Answer(target, "reweighted", properties, found.effective_samples, surviving=found.surviving)
    return Answer(target, "reweighted", {}, found.effective_samples, _refusal(directory, sources, target, found))


def _refusal(directory: Path, sources: Sources, target: Target, found: Reweighted) -> str:
    """How little supports a target, how far the samples reach, and what sampling it would cost."""
    study = sources.study
    state = target.corresponding(study.states[0].particles)
    words = [f"{found.effective_samples:.2g} effective samples support this state, {FEWEST_SAMPLES:.0f} are needed"]
    reached = sources.reached(state)
    if reached is not None:
        words.append(f"the nearest supported state is {_told(reached, target, sources.border)}")
    if study.adopted is None:
        price = state.particles * (study.sampling.settling + study.sampling.steps) * study.sampling.repeats
        speed = rate(directory)
        time = f", about {duration(max(price / speed, 1.0))} here" if speed else ""
        words.append(f"sampling it as the study samples its rungs costs {price:.2g} particle-steps{time}")
    return "; ".join(words)


def _between(sources: Sources, target: Target, state: State) -> Answer | None:
    """What the surface says; None where it says nothing."""
    found = sources.surface and sources.surface.at(state.temperature, state.density)
    return Answer(target, "surface", found.properties) if found and found.properties else None


def _at_pressure(sources: Sources, target: Target) -> Answer:
    if sources.surface is None:
        raise UserError(
            "--pressure: the density at a pressure comes from a surface through several isochores; what is needed is a "
            "study of two densities or more and two temperatures or more, of a fluid whose pair potential is known"
        )
    own = (target.pressure or 0.0) / target.factor("pressure")
    (found,) = sources.surface.isobar(own, [target.temperature / target.epsilon])
    if not found.properties:
        return Answer(target, "surface", {}, refused=found.refused)
    return Answer(target.at_density(found.density), "surface", found.properties)


def _told(state: State, target: Target, border: Border) -> str:
    """The state of the target's fluid that corresponds to one of the study's own."""
    there = replace(state, temperature=state.temperature * target.epsilon, density=state.density / target.sigma**3)
    return border.state(there)


def _table(study: Study, answer: Answer, border: Border, failed: Sequence[tuple[str, State]]) -> pd.DataFrame:
    """Rows of an answer, in the units of the border."""
    target = answer.target
    table = estimates_table(_findings(study, answer, failed), border)
    if target.density is None:
        table["density"] = np.nan
    table.insert(0, "epsilon", target.epsilon)
    table.insert(1, "sigma", target.sigma)
    return table


def _findings(study: Study, answer: Answer, failed: Sequence[tuple[str, State]]) -> Iterator[Finding]:
    """In the study's reduced units, with less trust where a check failed at a rung behind the answer."""
    target, particles = answer.target, study.states[0].particles
    state = State(target.temperature, target.density or 1.0, particles)
    for name in _REFUSED if answer.refused else ():
        yield Finding(state, name, answer.method, None, answer.effective_samples, "no", answer.refused, True)
    doubtful = ""
    if study.fluid.has_pairs and not answer.refused:
        doubtful = doubt(target.corresponding(particles), guide(study.fluid))
    thin = ""
    if answer.surviving < _FEW:
        thin = (
            f"only {answer.surviving:.0%} of the samples of the nearest rung still count here; of 95 % intervals "
            "at such states 86 to 95 % hold"
        )
    behind = _behind(study, answer)
    for name, estimate in answer.properties.items():
        value = estimate * target.factor(name)
        samples = answer.effective_samples or value.effective_samples
        finding = Finding(state, name, answer.method, value, samples, value.trust, value.reason, True)
        finding = finding.doubted(doubtful).doubted(thin)
        for check in dict.fromkeys(check for check, state in failed if state in behind):
            if name in CHECKS[check].touches:
                finding = finding.doubted(blame(check), CHECKS[check].trust)
        yield finding


def _behind(study: Study, answer: Answer) -> list[State]:
    """Rungs that an answer rests on: all under a surface, else those beside it at the nearest density."""
    if answer.method == "surface" or answer.refused:
        return list(study.states)
    own = answer.target.corresponding(study.states[0].particles)
    nearest = min(study.isochores, key=lambda density: abs(math.log(density / own.density)))
    ladder = study.isochores[nearest]
    above = sum(state.temperature < own.temperature for state in ladder)
    return list(ladder[max(above - 1, 0) : above + 1])
