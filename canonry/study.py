"""The study: everything one study file asks for, fully checked."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass, field, fields, replace
from pathlib import Path
from typing import get_args

from canonry.keys import Reader, Table, choice, line, one_or_more, open_table, parameter, quantity, whole
from canonry.quantities import NotAccepted, percent
from canonry.temperatures import Ladder, temperature, temperatures
from canonry.units import PROPERTIES, Kind, Scale
from canonry.writing import study_text
from sampler.fluid import ELSEWHERE, Fluid, State, Truncation
from sampler.protocol import Precision, Protocol, Scheme

__all__ = ["COMPARED", "LIMITED", "Adopted", "Compare", "Study", "Tolerance", "Until", "load", "study_of"]

_BY_INSERTION = ("residual_chemical_potential", "residual_helmholtz_energy", "residual_entropy")
COMPARED = (
    "residual_energy",
    "residual_heat_capacity",
    "heat_capacity",
    "pressure",
    "compressibility_factor",
    "thermal_pressure",
    "bulk_modulus",
    "isobaric_heat_capacity",
    "thermal_expansion",
    "sound_speed",
    "joule_thomson",
    "grueneisen",
    "enthalpy",
    *_BY_INSERTION,
)
LIMITED = tuple(name for name in COMPARED if name not in _BY_INSERTION)
"""Of them, those whose error falls as sampling goes on; test particles are put into a fixed number of frames."""
_WITH_IDEAL = ("heat_capacity", "isobaric_heat_capacity", "sound_speed", "joule_thomson", "grueneisen", "enthalpy")
_LONGEST = 20  # times `steps`, under [until] where the file does not say
_SMALLEST_CUTOFF = 1.0  # sigma
_LIQUID = 0.5  # sigma^-3: at and above this density the defaults are those of a liquid
_CUTOFFS = (5.0, 3.0)  # sigma, defaults of a gas and of a liquid
_FRICTIONS = (1.0, 2.0)


@dataclass(frozen=True)
class Tolerance:
    """A difference or an error that does not matter: a fraction of the value it is held against, or a reduced value."""

    value: float
    relative: bool

    @property
    def text(self) -> str:
        """As a study file in reduced units has it: '1 %' or '0.01'."""
        return f"{self.value * 100:.12g} %" if self.relative else repr(self.value)


@dataclass(frozen=True)
class Compare:
    """Names of the references to hold the estimates against, and tolerances by property."""

    against: tuple[str, ...] = ()
    tolerance: Mapping[str, Tolerance] = field(default_factory=dict)


@dataclass(frozen=True)
class Until:
    """Sampling goes on until the standard errors of the headline values of every rung are within these limits.

    steps_at_most : of each repeat, after equilibration
    """

    limits: Mapping[str, Tolerance]
    steps_at_most: int


@dataclass(frozen=True)
class Adopted:
    """Samples that were taken elsewhere: the file that described them, and what its reader must know of them."""

    source: str
    notes: tuple[str, ...] = ()


@dataclass(frozen=True)
class Study:
    """One study file, in reduced units.

    units : the kind the file was written in: SI when a temperature or a density carries a unit
    scale : SI size of the reduced units, None in a study that has none
    ideal_heat_capacity : c_v of the ideal gas, k_B per particle; None when the file says it is unknown
    states : every rung, by density, then by temperature
    ladder : what range the rungs are to cover and how they are to overlap, where that chooses them; see
        `canonry.ladder.resolved`
    sampling : how samples are taken; of no meaning where they were adopted
    """

    title: str
    units: Kind
    fluid: Fluid
    scale: Scale | None
    ideal_heat_capacity: float | None
    states: tuple[State, ...]
    sampling: Protocol
    compare: Compare
    adopted: Adopted | None = None
    ladder: Ladder | None = None
    until: Until | None = None

    @property
    def epsilon(self) -> float | None:
        """J; None in a study that has no SI scale."""
        return None if self.scale is None else self.scale.epsilon

    @property
    def sigma(self) -> float | None:
        """m; None in a study that has no SI scale."""
        return None if self.scale is None else self.scale.sigma

    @property
    def mass(self) -> float | None:
        """Of one particle, kg; None in a study that has no SI scale."""
        return None if self.scale is None else self.scale.mass

    @property
    def isochores(self) -> dict[float, tuple[State, ...]]:
        """The states of each density, by temperature."""
        densities = dict.fromkeys(state.density for state in self.states)
        return {rho: tuple(state for state in self.states if state.density == rho) for rho in densities}

    def to_toml(self) -> str:
        """The study file, complete with defaults; loading it gives an equal study."""
        return study_text(self)


def load(path: str | Path, *, earlier: Study | None = None) -> Study:
    """The study a file asks for. Raises UserError, which names the file, the key and what is accepted.

    earlier : the study that samples were taken for already; defaults that depend on the states are as they were there
    """
    return study_of(open_table(Path(path)), earlier=earlier)


def study_of(top: Table, *, earlier: Study | None = None) -> Study:
    """The study that the content of a file asks for; see `load`."""
    top.only(("title", "fluid", "state", "sampling", "compare", "adopted", "until"))
    adopted = _adopted(top)
    fluid = top.table("fluid").only(
        ("potential", "epsilon", "sigma", "mass", "cutoff", "truncation", "ideal_heat_capacity")
    )
    scale = _scale(fluid)
    state = top.table("state")
    states, ladder = _states(state, scale) if adopted is None else (_adopted_states(state, scale), None)
    cutoff = _default(_CUTOFFS, states, earlier.fluid.cutoff if earlier else None)
    sampled = _fluid(fluid, scale, cutoff, states, adopted=adopted is not None)
    sampling = _sampling(
        top.table("sampling"), scale, _default(_FRICTIONS, states, earlier.sampling.friction if earlier else None)
    )
    ideal_heat_capacity = _ideal_heat_capacity(fluid, scale)
    return Study(
        title=top.read("title", line, "".join(filter(str.isprintable, Path(top.file).stem))[:200].strip() or "study"),
        units=_kind(state),
        fluid=sampled,
        scale=scale,
        ideal_heat_capacity=ideal_heat_capacity,
        states=states,
        sampling=sampling,
        compare=_compare(top.table("compare"), scale, sampled),
        adopted=adopted,
        ladder=ladder,
        until=_until(top, scale, sampling, total=ideal_heat_capacity is not None),
    )


def _adopted(top: Table) -> Adopted | None:
    if "adopted" not in top:
        return None
    for name in ("sampling", "until"):
        if name in top:
            raise top.refusal(name, "the samples of this study were adopted; what is accepted is no such table")
    table = top.table("adopted").only(("source", "notes"))
    notes = () if table.content.get("notes", []) == [] else table.read("notes", one_or_more(_sentence))
    return Adopted(table.read("source", line), notes)


def _sentence(value: object) -> str:
    if not (isinstance(value, str) and value.strip() and value.isprintable()):
        raise NotAccepted("what is needed is a sentence")
    return value


def _adopted_states(table: Table, scale: Scale | None) -> tuple[State, ...]:
    """Points with one number of particles for all, or one for each."""
    table.only(("points", "particles"))
    points = table.read("points", one_or_more(_point(scale)))
    counts = table.read("particles", _counts(len(points)))
    states = (State(*point, count) for point, count in zip(points, counts, strict=True))
    return tuple(sorted(states, key=lambda state: (state.density, state.temperature)))


def _counts(number: int) -> Reader[tuple[int, ...]]:
    one = whole(2, 10_000_000)

    def read(value: object) -> tuple[int, ...]:
        if not isinstance(value, list):
            return (one(value),) * number
        if len(value) != number:
            raise NotAccepted(f"what is needed is a whole number, or one for each of the {number} points")
        return tuple(map(one, value))

    return read


def _scale(table: Table) -> Scale | None:
    names = ("epsilon", "sigma", "mass")
    given = [name for name in names if name in table]
    if not given:
        return None
    for name in names:
        if name not in given:
            reason = "missing; epsilon, sigma and mass are given all three, or none to work in reduced units only"
            raise table.refusal(name, reason)
    return Scale(
        epsilon=table.read("epsilon", parameter("epsilon", 1e-24, 1e-17)),
        sigma=table.read("sigma", parameter("sigma", 1e-11, 1e-6)),
        mass=table.read("mass", parameter("mass", 1e-28, 1e-15)),
    )


def _states(table: Table, scale: Scale | None) -> tuple[tuple[State, ...], Ladder | None]:
    """The states, and the ladder they are of where a pilot chooses its rungs."""
    table.only(("density", "temperatures", "points", "particles"))
    particles = table.read("particles", whole(2, 10_000_000), 500)
    ladder = None
    if "points" in table:
        for name in ("density", "temperatures"):
            if name in table:
                raise table.refusal(name, "points are given too; what is needed is either, not both")
        points = table.read("points", one_or_more(_point(scale)))
    else:
        densities = table.read("density", one_or_more(_density(scale)))
        rungs, ladder = temperatures(table, scale, densities=len(densities))
        points = tuple((each, density) for density, own in zip(densities, rungs, strict=True) for each in own)
    states = (State(*point, particles) for point in sorted(points, key=lambda point: (point[1], point[0])))
    return tuple(states), ladder


def _density(scale: Scale | None) -> Reader[float]:
    return quantity("density", 1e-6, 2.0, scale)


def _point(scale: Scale | None) -> Reader[tuple[float, float]]:
    def read(value: object) -> tuple[float, float]:
        if not (isinstance(value, list) and len(value) == 2):
            raise NotAccepted("what is needed is a pair [temperature, density]")
        return temperature(scale)(value[0]), _density(scale)(value[1])

    return read


def _kind(table: Table) -> Kind:
    def has_unit(value: object) -> bool:
        if isinstance(value, list | dict):
            return any(map(has_unit, value.values() if isinstance(value, dict) else value))
        return isinstance(value, str)

    return "SI" if any(has_unit(table.content.get(key)) for key in ("density", "temperatures", "points")) else "reduced"


def _default(defaults: tuple[float, float], states: tuple[State, ...], earlier: float | None) -> float:
    """That of a gas or of a liquid, by the lowest density; the earlier value if it is one of them."""
    if earlier is not None and earlier in defaults:
        return earlier
    return defaults[min(state.density for state in states) >= _LIQUID]


def _fluid(
    table: Table, scale: Scale | None, default_cutoff: float, states: tuple[State, ...], *, adopted: bool
) -> Fluid:
    if adopted and table.content.get("potential") == ELSEWHERE:
        table.only(("potential", "epsilon", "sigma", "mass", "ideal_heat_capacity"))
        return Fluid(potential=ELSEWHERE)
    potential = table.read("potential", choice(("lennard-jones", ELSEWHERE) if adopted else ("lennard-jones",)))
    cutoff = table.read("cutoff", quantity("length", _SMALLEST_CUTOFF, 100.0, scale), default_cutoff)
    truncation: Truncation = table.read("truncation", choice(get_args(Truncation)), "corrected")
    _check_box(table, cutoff, states)
    return Fluid(cutoff=cutoff, truncation=truncation, potential=potential)


def _check_box(table: Table, cutoff: float, states: tuple[State, ...]) -> None:
    tightest = min(states, key=lambda state: state.box)
    if cutoff <= tightest.box / 2:
        return
    enough = math.ceil((2 * cutoff) ** 3 * tightest.density)
    while replace(tightest, particles=enough).box / 2 < cutoff:
        enough += 1
    largest = math.floor(tightest.box / 2 * 1000) / 1000
    smaller = f"a cutoff of at most {largest:g} sigma, or " if largest >= _SMALLEST_CUTOFF else ""
    raise table.refusal(
        "cutoff",
        f"the {'' if 'cutoff' in table else 'default '}cutoff {cutoff:g} sigma is beyond half the box of "
        f"{tightest.particles} particles at density {tightest.density:g} sigma^-3; what is accepted is {smaller}"
        f"state.particles of at least {enough}",
    )


def _ideal_heat_capacity(table: Table, scale: Scale | None) -> float | None:
    if table.content.get("ideal_heat_capacity") == "unknown":
        return None
    return table.read("ideal_heat_capacity", quantity("heat_capacity", 1.5, 1000.0, scale), 1.5)


def _sampling(table: Table, scale: Scale | None, default_friction: float) -> Protocol:
    table.only(tuple(entry.name for entry in fields(Protocol)))
    record_every = table.read("record_every", whole(1, 1_000_000), 10)
    counts = {
        "record_every": record_every,
        "frame_every": table.read("frame_every", whole(1, 10**9), math.ceil(500 / record_every) * record_every),
        "steps": table.read("steps", whole(1, 10**12), math.ceil(200_000 / record_every) * record_every),
    }
    for name, count in counts.items():
        if count % record_every:
            raise table.refusal(name, f"what is needed is a multiple of record_every, which is {record_every}")
    return Protocol(
        seed=table.read("seed", whole(0, 2**32 - 1), 1),
        repeats=table.read("repeats", whole(1, 10_000), 1),
        time_step=table.read("time_step", quantity("time", 1e-6, 0.1, scale), 0.005),
        friction=table.read("friction", quantity("friction", 1e-3, 1e3, scale), default_friction),
        scheme=table.read("scheme", choice(get_args(Scheme)), "baoab"),
        precision=table.read("precision", choice(get_args(Precision)), "mixed"),
        equilibration=table.read("equilibration", whole(0, 10**12), 20_000),
        **counts,
    )


def _compare(table: Table, scale: Scale | None, fluid: Fluid) -> Compare:
    table.only(("against", "tolerance"))
    tolerance = table.table("tolerance").only(COMPARED, later=[name for name in PROPERTIES if name not in COMPARED])
    return Compare(
        against=_against(table, fluid),
        tolerance={name: tolerance.read(name, _tolerance(name, scale)) for name in tolerance.content},
    )


def _until(top: Table, scale: Scale | None, sampling: Protocol, *, total: bool) -> Until | None:
    """total : whether the ideal part of the heat capacity is known"""
    if "until" not in top:
        return None
    later = [name for name in PROPERTIES if name not in LIMITED]
    table = top.table("until").only((*LIMITED, "steps_at_most"), later=later)
    limits = {name: table.read(name, _tolerance(name, scale)) for name in LIMITED if name in table}
    if not limits:
        raise top.refusal("until", 'what is needed is a property and its largest error, such as heat_capacity = "1 %"')
    for name in limits:
        if name in _WITH_IDEAL and not total:
            raise table.refusal(name, 'it needs fluid.ideal_heat_capacity, which is "unknown"')
    steps, every = sampling.steps, sampling.record_every
    most = table.read("steps_at_most", whole(steps, 10**14), _LONGEST * steps)
    if most % every:
        raise table.refusal("steps_at_most", f"what is needed is a multiple of record_every, which is {every}")
    return Until(limits, most)


def _against(table: Table, fluid: Fluid) -> tuple[str, ...]:
    from reference import find, names

    if table.content.get("against", []) == []:
        return ()
    against = table.read("against", one_or_more(choice(names())))
    if not fluid.has_pairs:
        raise table.refusal("against", "no reference describes a fluid sampled elsewhere; what is accepted is []")
    fitting = [name for name in names() if find(name).same_model(fluid.truncation, fluid.cutoff)]
    for name in against:
        if name not in fitting:
            raise table.refusal(
                "against",
                f'{name} describes another fluid than truncation "{fluid.truncation}", cutoff {fluid.cutoff:g} sigma; '
                f"what is accepted for this one is {' or '.join(fitting) or 'an empty list'}",
            )
    return against


def _tolerance(name: str, scale: Scale | None) -> Reader[Tolerance]:
    absolute = quantity(name, 1e-12, 1e6, scale)

    def read(value: object) -> Tolerance:
        if isinstance(value, str) and value.strip().endswith("%"):
            return Tolerance(percent(value), relative=True)
        return Tolerance(absolute(value), relative=False)

    return read
