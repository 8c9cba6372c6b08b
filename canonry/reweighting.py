"""Properties at states that were never sampled, from all rungs and isochores together."""

from __future__ import annotations

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
from canonry.tables import estimates_table
from canonry.targets import Asked, Target, targets
from canonry.units import Kind
from estimators.derived import derived
from estimators.field import Field, field
from estimators.reweight import Reweighted
from estimators.trust import FEWEST_SAMPLES
from sampler.errors import BadRequest
from sampler.fluid import State
from sampler.series import Series

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["Answer", "answers", "reweight"]

Floats = npt.NDArray[np.float64]

_THINNED = 20_000  # samples of a rung that are enough to see where support ends
_HALVINGS = 10  # of the way to a state without support
_NAMES = ("residual_energy", "residual_heat_capacity", "pressure", "compressibility_factor", "thermal_pressure")


@dataclass(frozen=True)
class Answer:
    """What samples say at a target.

    found : at the corresponding state of the study's own fluid, in its reduced units
    refused : in words for the reader, empty where there are properties
    """

    target: Target
    found: Reweighted
    refused: str


def reweight(
    directory: str | Path,
    *,
    temperatures: Sequence[Asked] = (),
    densities: Sequence[Asked] = (),
    epsilon: Asked | None = None,
    sigma: Asked | None = None,
    units: Kind | None = None,
    watch: Callable[[str], None] | None = None,
) -> pd.DataFrame:
    """Properties at every temperature and density asked for, by default those of the study; writes nothing.

    temperatures, densities : numbers in reduced units, or texts with a unit
    epsilon, sigma : of another fluid: multiples of the study's, or texts with a unit; its cutoff is as many sigma
    Returns rows as in curve.csv, with epsilon and sigma (over the study's) before them; where samples do not support a
    state, value is empty and reason says how far they reach, and what sampling the state would cost.
    Raises UserError for what cannot be asked, BadSeries or NotSolved where samples cannot be used.
    """
    directory = Path(directory)
    study = stored(directory)
    border = Border.of(study, units)
    wanted = targets(study, temperatures=temperatures, densities=densities, epsilon=epsilon, sigma=sigma)
    found = list(answers(study, directory, wanted, border, watch=watch))
    table = estimates_table((finding for answer in found for finding in _findings(study, answer)), border)
    changes = [(a.target.epsilon, a.target.sigma) for a in found for _ in _findings(study, a)]
    table.insert(0, "epsilon", [change for change, _ in changes])
    table.insert(1, "sigma", [change for _, change in changes])
    return table


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
    sources = _Sources(series)
    for target in wanted:
        tell(f"reweighting to {border.text('temperature', target.temperature)}")
        yield _answer(study, directory, sources, target, border)


@dataclass(frozen=True)
class _Sources:
    """Settled samples, and the fields that are made of them where they are needed."""

    series: Sequence[Series]

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
        return _Sources([each.every(-(-len(each) // _THINNED)) for each in self.series]) if self.scales else self

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


def _answer(study: Study, directory: Path, sources: _Sources, target: Target, border: Border) -> Answer:
    state = target.corresponding(study.states[0].particles)
    try:
        found = sources.at(state.density).at(state.temperature, state.density)
    except BadRequest as problem:
        return Answer(target, Reweighted(state.temperature, 0.0, {}, "refused"), f"{problem}")
    if not found.refused:
        return Answer(target, found, "")
    reached = _reached(sources, state)
    price = state.particles * (study.sampling.settling + study.sampling.steps) * study.sampling.repeats
    speed = rate(directory)
    time = f", about {duration(max(price / speed, 1.0))} here" if speed else ""
    words = [
        f"{found.effective_samples:.2g} effective samples support this state, {FEWEST_SAMPLES:.0f} are needed",
        *([f"the nearest supported state is {_told(reached, target, border)}"] if reached else []),
        *(
            [f"sampling it as the study samples its rungs costs {price:.2g} particle-steps{time}"]
            if not study.adopted
            else []
        ),
    ]
    return Answer(target, found, "; ".join(words))


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


def _findings(study: Study, answer: Answer) -> Iterator[Finding]:
    """In the study's reduced units."""
    target, found = answer.target, answer.found
    own = target.corresponding(study.states[0].particles)
    state = State(target.temperature, target.density, own.particles)
    if answer.refused:
        for name in _NAMES:
            yield Finding(state, name, "reweighted", None, found.effective_samples, "no", answer.refused, headline=True)
        return
    more = derived(
        found.properties,
        temperature=own.temperature,
        density=own.density,
        ideal_heat_capacity=study.ideal_heat_capacity,
    )
    uncertain = doubt(own, guide(study.fluid)) if study.fluid.has_pairs else ""
    for name, estimate in {**found.properties, **more}.items():
        value = estimate * target.factor(name)
        finding = Finding(
            state, name, "reweighted", value, found.effective_samples, value.trust, value.reason, headline=True
        )
        yield finding.doubted(uncertain)
