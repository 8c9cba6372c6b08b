"""Samplings that stand beside a study: the ends of each isochore altered in one respect, and what they are held for.

Each is a study directory of its own inside that of the study, and is looked at whenever it is there.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import cached_property, reduce
from operator import add
from pathlib import Path

from canonry.budget import finite_size
from canonry.errors import UserError
from canonry.findings import Check
from canonry.health import LEVEL
from canonry.risks import guide
from canonry.study import Study
from estimators.canonical import kinetic_temperature, rung_properties
from estimators.estimate import Estimate
from estimators.health.box import two_sizes
from estimators.health.heat_routes import AT_CONSTANT_ENERGY, heat_routes
from estimators.health.reading import Reading
from estimators.health.step_bias import step_bias as held_against_exact
from estimators.reweight import Pooled, pool
from sampler.fluid import State
from sampler.series import Series

__all__ = ["Beside", "Rung", "Samples", "asked", "exactly", "found", "other_sizes"]

STEP_BIAS = "step-bias"
SIZE = "size-"
CONSTANT_ENERGY = "constant-energy"
LARGEST = 10_000_000

Properties = Mapping[str, Estimate]


@dataclass(frozen=True, eq=False)
class Rung:
    """A rung of the study as it is held against what stands beside it.

    own : what it says alone
    series : its repeats, already cut; pooled : those of its density, where they are reweighted together
    """

    state: State
    own: Properties
    series: Sequence[Series]
    pooled: Pooled | None


@dataclass(frozen=True, eq=False)
class Samples:
    """What one altered rung says.

    repeats : temperature measured (epsilon/k_B) and number of samples of each repeat
    """

    state: State
    properties: Properties
    repeats: tuple[tuple[float, int], ...]

    @classmethod
    def of(cls, state: State, series: Sequence[Series]) -> Samples:
        """Of the repeats of one rung, already cut.

        Those of constant energy go by the temperature measured: they are others than the study's at the one set.
        """
        repeats = tuple((kinetic_temperature([each]).value, len(each)) for each in series)
        if not series[0].bath:
            own = replace(state, temperature=kinetic_temperature(series).value)
            series = [replace(each, state=own) for each in series]
        return cls(state, rung_properties(series), repeats)


Compare = Callable[[Rung, Samples], Sequence[Reading] | None]


@dataclass(frozen=True, eq=False)
class Beside:
    """One such sampling.

    place : its study directory
    study : what is sampled there
    compare : what the check it is for reads at a rung; None where too few samples are behind it
    """

    place: Path
    study: Study
    compare: Compare

    @cached_property
    def samples(self) -> dict[State, Samples]:
        """By the state of the altered rung, of those that have been sampled."""
        from canonry.estimation import settled
        from canonry.sampling import recorded

        found = {state: [settled(each) for each in recorded(self.study, self.place, state)] for state in self._states}
        return {state: Samples.of(state, series) for state, series in found.items() if series}

    @property
    def _states(self) -> tuple[State, ...]:
        from canonry.directory import STUDY

        return self.study.states if (self.place / STUDY).exists() else ()

    @property
    def properties(self) -> dict[State, Properties]:
        """Estimates of each altered rung, from its samples alone."""
        return {state: samples.properties for state, samples in self.samples.items()}

    def checks(self, rungs: Iterable[Rung]) -> Iterator[Check]:
        """What the check reads at each rung that has been sampled here too."""
        particles = self.study.states[0].particles
        for rung in rungs:
            samples = self.samples.get(replace(rung.state, particles=particles))
            if samples is not None:
                yield from (Check(rung.state, each) for each in self.compare(rung, samples) or ())


def asked(
    study: Study,
    directory: Path,
    *,
    step_bias: bool = False,
    second_size: int | None = None,
    constant_energy: bool = False,
) -> list[Beside]:
    """The samplings asked for, in a study directory; raises UserError where one cannot be had or would say nothing."""
    wanted = []
    if step_bias:
        if study.sampling.scheme == "metropolised":
            raise UserError(
                "sampling.scheme = metropolised: it has no time step's bias; what is accepted with --step-bias is "
                "baoab or obabo"
            )
        _need_bath(study, "--step-bias: the time step's bias is looked for at a set temperature", "baoab or obabo")
        wanted.append(_exact(study, directory))
    if second_size is not None:
        _need_bath(study, f"--second-size {second_size}: sizes are compared at a set temperature")
        _check_size(study, second_size)
        wanted.append(_of_size(study, directory, second_size))
    if constant_energy:
        _need_bath(study, "--constant-energy: the study's own samples are of constant energy")
        wanted.append(_at_constant_energy(study, directory))
    return wanted


def found(study: Study, directory: Path) -> list[Beside]:
    """The samplings that there are in a study directory, each as the study is now."""
    from canonry.directory import STUDY, stored

    if study.adopted is not None:
        return []
    there = [_exact(study, directory), _at_constant_energy(study, directory)]
    for file in sorted(directory.glob(f"{SIZE}*/{STUDY}")):
        particles = stored(file.parent).states[0].particles
        if particles != study.states[0].particles:
            there.append(replace(_of_size(study, directory, particles), place=file.parent))
    return [each for each in there if (each.place / STUDY).exists()]


def exactly(beside: Iterable[Beside]) -> dict[State, Properties]:
    """Estimates of each rung that has been sampled exactly too, from those samples alone."""
    return {state: own for each in beside if each.place.name == STEP_BIAS for state, own in each.properties.items()}


def other_sizes(beside: Iterable[Beside]) -> dict[State, Properties]:
    """Estimates of each rung sampled with another number of particles, by the state with that number."""
    return {state: own for each in beside if each.place.name.startswith(SIZE) for state, own in each.properties.items()}


def _ends(study: Study) -> Study:
    ends = {state: None for states in study.isochores.values() for state in (states[0], states[-1])}
    return replace(study, states=tuple(ends), ladder=None, until=None)


def _exact(study: Study, directory: Path) -> Beside:
    """With a Metropolis test a step."""
    altered = replace(_ends(study), sampling=replace(study.sampling, scheme="metropolised"))
    return Beside(
        directory / STEP_BIAS,
        altered,
        lambda rung, samples: held_against_exact(rung.own, samples.properties, level=LEVEL),
    )


def _of_size(study: Study, directory: Path, particles: int) -> Beside:
    ends = _ends(study)
    altered = replace(ends, states=tuple(replace(state, particles=particles) for state in ends.states))
    return Beside(directory / f"{SIZE}{particles}", altered, _compared_in_size)


def _at_constant_energy(study: Study, directory: Path) -> Beside:
    altered = replace(_ends(study), sampling=replace(study.sampling, scheme="velocity-verlet"))
    return Beside(directory / CONSTANT_ENERGY, altered, _compared_in_heat_capacity)


def _compared_in_size(rung: Rung, samples: Samples) -> Sequence[Reading] | None:
    reference = guide(rung.series[0].fluid)
    sizes = (rung.state.particles, samples.state.particles)
    shifts = [finite_size(state, reference) for state in (rung.state, samples.state)]
    known = {name: shift - shifts[1][name] for name, shift in shifts[0].items()}
    reading = two_sizes(rung.own, samples.properties, known, particles=sizes, level=LEVEL)
    return None if reading is None else [reading]


def _compared_in_heat_capacity(rung: Rung, samples: Samples) -> Sequence[Reading] | None:
    """With the mean of the study's at the temperatures of the repeats, as these differ in energy by some percent.

    That mean is free of their spread to second order, and a temperature measured is too sharp to add to the error.
    """
    name = "residual_heat_capacity"
    if not rung.series[0].has("energy") or name not in samples.properties:
        return None
    pooled = rung.pooled or pool(rung.series)
    number = sum(length for _, length in samples.repeats)
    parts = []
    for at, (_, length) in zip(pooled.curve([each for each, _ in samples.repeats]), samples.repeats, strict=True):
        if at.refused:
            return None
        parts.append(at.properties[name] * (length / number))
    reading = heat_routes(reduce(add, parts), samples.properties[name], level=LEVEL, routes=AT_CONSTANT_ENERGY)
    return None if reading is None else [reading]


def _need_bath(study: Study, reason: str, accepted: str = "baoab, obabo or metropolised") -> None:
    if not study.sampling.bath:
        raise UserError(f"{reason}, and sampling.scheme = {study.sampling.scheme} has no bath; accepted is {accepted}")


def _check_size(study: Study, particles: int) -> None:
    own, cutoff = study.states[0].particles, study.fluid.cutoff
    tightest = max(study.isochores)
    fewest = next(
        number
        for number in range(max(int((2.0 * cutoff) ** 3 * tightest), 2), LARGEST)
        if State(1.0, tightest, number).box >= 2.0 * cutoff
    )
    accepted = f"what is accepted is another whole number from {fewest} to {LARGEST}"
    if particles == own:
        raise UserError(
            f"--second-size {particles}: that is the size of the study itself; {accepted}, such as {2 * own}"
        )
    if not (isinstance(particles, int) and fewest <= particles <= LARGEST):
        raise UserError(
            f"--second-size {particles}: the cutoff of {cutoff:g} sigma needs {fewest} particles at density "
            f"{tightest:g} sigma^-3, to lie within half the box; {accepted}"
        )
