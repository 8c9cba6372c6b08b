"""Properties at states that were never sampled, from all rungs and isochores together."""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from canonry.border import Border
from canonry.directory import stored
from canonry.errors import UserError
from canonry.estimation import settled
from canonry.findings import Finding
from canonry.provenance import duration, rate
from canonry.risks import doubt, guide
from canonry.sampling import recorded
from canonry.study import Study
from canonry.surface import of_states
from canonry.tables import estimates_table
from canonry.targets import Asked, Target, targets
from canonry.units import Kind
from estimators.canonical import rung_properties
from estimators.derived import derived
from estimators.estimate import Estimate
from estimators.field import Field, field
from estimators.reweight import Reweighted
from estimators.surface.helmholtz import Surface
from estimators.trust import FEWEST_SAMPLES
from sampler.errors import BadRequest
from sampler.fluid import State
from sampler.series import Series

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["Answer", "answers", "reweight"]

Floats = npt.NDArray[np.float64]

_THINNED = 20_000  # samples of a rung that are enough to see where support ends
_FEW = 0.5  # share that survives; 95 % intervals then hold in 86 to 95 % of cases (benchmarks/transfer.py)
_HALVINGS = 10  # of the way to a state without support
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
    tables = [_table(study, answer, border) for answer in answers(study, directory, wanted, border, watch=watch)]
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
    sources = _Sources(study, series, border)
    for target in wanted:
        tell(f"reweighting to {border.text('temperature', target.temperature)}")
        if target.pressure is None:
            yield _answer(directory, sources, target)
        else:
            yield _at_pressure(sources, target)


@dataclass(frozen=True)
class _Sources:
    """Settled samples, and the fields and the surface that are made of them where they are needed."""

    study: Study
    series: Sequence[Series]
    border: Border

    @cached_property
    def densities(self) -> frozenset[float]:
        return frozenset(each.state.density for each in self.series)

    @cached_property
    def scales(self) -> bool:
        """Whether samples can be scaled to another density as they are."""
        first = self.series[0]
        names = ("energy", "sampled_energy", "virial")
        return first.fluid.has_pairs and first.fluid.truncation == "corrected" and first.has(*names)

    @cached_property
    def whole(self) -> Field:
        return field(self.series) if self.scales else field(self.series, look=_evaluated)

    @cached_property
    def framed(self) -> Field:
        """Of the samples that a frame belongs to, with the frames, to be evaluated again."""
        frames = [each.at_frames() for each in self.series if len(each.frames)]
        if not frames:
            raise BadRequest("no positions are stored to evaluate again at another density")
        return field(frames, look=_evaluated)

    def at(self, density: float) -> Field:
        """The field that answers at a density."""
        return self.whole if self.scales or density in self.densities else self.framed

    @cached_property
    def sparse(self) -> _Sources:
        """The same with as many samples as tell where support ends."""
        if not self.scales:
            return self
        return replace(self, series=[each.every(-(-len(each) // _THINNED)) for each in self.series])

    @cached_property
    def surface(self) -> Surface | None:
        """Through what each rung says alone."""
        by_state: dict[State, list[Series]] = defaultdict(list)
        for each in self.series:
            by_state[each.state].append(each)
        return of_states(
            {state: rung_properties(own) for state, own in by_state.items()},
            self.study.fluid,
            ideal_heat_capacity=self.study.ideal_heat_capacity,
            spoken=self.border.text,
        )

    @cached_property
    def changes(self) -> Mapping[State, Floats]:
        """By state: covariance of the changes of the reduced potential with ln T and ln rho."""
        found = {}
        for each in self.series:
            virial = each.column("virial") if each.has("virial") else np.zeros(len(each))
            both = np.stack([-each.column("sampled_energy"), virial]) / each.state.temperature
            found[each.state] = np.cov(both)
        return found


def _evaluated(series: Series, density: float) -> Series:
    """Frames of a series evaluated again in the box of another density, with the fluid's own cutoff."""
    from sampler.frames import totals_at

    return series.moved(density, totals_at(series.fluid, series.frames, state=series.state, density=density))


def _answer(directory: Path, sources: _Sources, target: Target) -> Answer:
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


def _refusal(directory: Path, sources: _Sources, target: Target, found: Reweighted) -> str:
    """How little supports a target, how far the samples reach, and what sampling it would cost."""
    study = sources.study
    state = target.corresponding(study.states[0].particles)
    words = [f"{found.effective_samples:.2g} effective samples support this state, {FEWEST_SAMPLES:.0f} are needed"]
    reached = _reached(sources, state)
    if reached is not None:
        words.append(f"the nearest supported state is {_told(reached, target, sources.border)}")
    if study.adopted is None:
        price = state.particles * (study.sampling.settling + study.sampling.steps) * study.sampling.repeats
        speed = rate(directory)
        time = f", about {duration(max(price / speed, 1.0))} here" if speed else ""
        words.append(f"sampling it as the study samples its rungs costs {price:.2g} particle-steps{time}")
    return "; ".join(words)


def _between(sources: _Sources, target: Target, state: State) -> Answer | None:
    """What the surface says; None where it says nothing."""
    found = sources.surface and sources.surface.at(state.temperature, state.density)
    return Answer(target, "surface", found.properties) if found and found.properties else None


def _at_pressure(sources: _Sources, target: Target) -> Answer:
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


def _reached(sources: _Sources, wanted: State) -> State | None:
    """The last state with support on the way to a target from the rung that is nearest in what changes."""

    def step(state: State) -> Floats:
        return np.log([wanted.temperature / state.temperature, wanted.density / state.density])

    nearest = min(sources.changes, key=lambda state: float(step(state) @ sources.changes[state] @ step(state)))
    whole = step(nearest)

    def on_the_way(share: float) -> State:
        t, rho = np.exp(share * whole) * (nearest.temperature, nearest.density)
        return State(float(t), float(rho), nearest.particles)

    low, high = 0.0, 1.0
    for _ in range(_HALVINGS):
        middle = on_the_way(0.5 * (low + high))
        supported = not sources.sparse.at(middle.density).at(middle.temperature, middle.density).refused
        low, high = (0.5 * (low + high), high) if supported else (low, 0.5 * (low + high))
    reached = on_the_way(low)
    there = sources.at(reached.density).at(reached.temperature, reached.density)
    return None if there.refused else reached


def _table(study: Study, answer: Answer, border: Border) -> pd.DataFrame:
    """Rows of an answer, in the units of the border."""
    target = answer.target
    table = estimates_table(_findings(study, answer), border)
    if target.density is None:
        table["density"] = np.nan
    table.insert(0, "epsilon", target.epsilon)
    table.insert(1, "sigma", target.sigma)
    return table


def _findings(study: Study, answer: Answer) -> Iterator[Finding]:
    """In the study's reduced units."""
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
    for name, estimate in answer.properties.items():
        value = estimate * target.factor(name)
        samples = answer.effective_samples or value.effective_samples
        finding = Finding(state, name, answer.method, value, samples, value.trust, value.reason, True)
        yield finding.doubted(doubtful).doubted(thin)
