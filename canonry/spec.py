"""The description of samples that were taken elsewhere: what they are of, where they lie, how they were recorded.

Its keys stand in DEVELOPERS.md. Nothing about the samples is guessed: what is needed and not stated is asked for.
"""

from __future__ import annotations

from collections.abc import Collection, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, TypeVar

from canonry.keys import Reader, Table, choice, open_table, quantity, whole
from canonry.quantities import NotAccepted, from_text, rounded
from canonry.study import Study, study_of
from canonry.units import Kind, Scale
from sampler.fluid import ELSEWHERE, State

__all__ = ["COLUMNS", "Frames", "Rung", "Source", "Spec", "read", "understood"]

T = TypeVar("T")
Source = Any
"""A file (Path), or in its place what a caller hands over: a data frame, a mapping of arrays, an array of frames."""

COLUMNS: Mapping[str, str] = {
    "time": "time",
    "potential": "energy",
    "dynamical": "energy",
    "kinetic": "energy",
    "pressure": "pressure",
    "virial": "energy",
    "hypervirial": "energy",
    "volume": "volume",
}
"""What a column may hold, and the quantity whose unit it has."""

_QUANTITIES = ("time", "energy", "pressure", "length", "volume")
_STATED = (
    *("molecules", "columns", "units", "energy", "long_range", "pressure_kinetic", "kinetic_freedom"),
    *("intramolecular", "interval"),
)
_RUNG = ("temperature", "density", "volume", "files", "samples", "frames", *_STATED)
_NVT = "samples at a set pressure, whose volume varies, are not taken: what is accepted is constant volume (NVT)"
_UNIT_OF_MEASURE = {"epsilon": "100 K", "sigma": "0.25 nm"}
"""Reduced units of a fluid that has none of its own: its temperatures and densities are then of the order of one."""


@dataclass(frozen=True)
class Frames:
    """Positions of each repeat: the row of samples that the first belongs to, from 1 on, and rows from one to the next.

    factor : sigma in one unit of length of the positions
    """

    repeats: tuple[tuple[Source, ...], ...]
    first: int
    every: int
    factor: float


@dataclass(frozen=True)
class Rung:
    """One state with its samples, and what was stated about them.

    table : its own keys, for refusals
    repeats : sources of each repeat, to be read one after the other
    columns : what a column holds -> its name, or its number from 1 on
    factors : quantity -> one unit of it, in reduced units
    kinetic_part : of the pressure column, "instantaneous" or "set"; None without that column
    freedom : kinetic degrees of freedom; None where nothing needs them
    intramolecular : whether the potential energy holds such a part: "none" (there is none), "included", "left out"
    interval : between samples, where there is no time column
    """

    table: Table
    state: State
    repeats: tuple[tuple[Source, ...], ...]
    columns: Mapping[str, str | int]
    factors: Mapping[str, float]
    per_molecule: bool
    long_range: bool
    kinetic_part: str | None
    freedom: int | None
    intramolecular: str
    interval: float | None
    frames: Frames | None


@dataclass(frozen=True)
class Spec:
    """A study of adopted samples, and where the samples of its rungs lie."""

    study: Study
    rungs: tuple[Rung, ...]


def read(path: Path) -> Spec:
    """The description in a TOML file; names of files in it are relative to its folder. Raises UserError."""
    return understood(open_table(path), home=path.parent)


def understood(top: Table, *, home: Path) -> Spec:
    """The description in the content of a file. Raises UserError, which names the key and what is accepted."""
    top.only(("title", "fluid", "compare", "rungs", *_STATED))
    tables = _tables(top)
    fluid = _fluid(top, in_units=any(_has_unit(table.content) for table in (top, *tables)))
    scale = _scale(top, fluid)
    layers = [_Layers(table.only((*_RUNG, "pressure")), top) for table in tables]
    states = [_state(each, scale) for each in layers]
    study = _study(top, fluid, states, "SI" if any(map(_is_in_si, tables)) else "reduced")
    rungs = [_rung(each, state, study, home) for each, state in zip(layers, states, strict=True)]
    return Spec(study, tuple(sorted(rungs, key=lambda rung: (rung.state.density, rung.state.temperature))))


@dataclass(frozen=True)
class _Layers:
    """A rung's own keys, and those of the file that hold for every rung that does not say otherwise."""

    rung: Table
    top: Table

    def at(self, key: str) -> Table:
        return self.rung if key in self.rung else self.top

    def __contains__(self, key: str) -> bool:
        return key in self.at(key)

    def read(self, key: str, reader: Reader[T]) -> T:
        return self.at(key).read(key, reader)

    def needed(self, key: str, reader: Reader[T], why: str) -> T:
        """The value of a key that something else makes necessary."""
        if key not in self:
            try:
                reader(None)
            except NotAccepted as problem:
                raise self.top.refusal(key, f"missing; {why}. {_capital(str(problem))}") from None
        return self.read(key, reader)


def _capital(text: str) -> str:
    return text[:1].upper() + text[1:]


def _tables(top: Table) -> list[Table]:
    found = top.content.get("rungs")
    if not (isinstance(found, list) and found and all(isinstance(each, dict) for each in found)):
        reason = "what is needed is a table [[rungs]] for every temperature and density"
        raise top.refusal("rungs", reason if "rungs" in top else f"missing; {reason}")
    return [Table(top.file, f"rungs[{number}]", each) for number, each in enumerate(found, start=1)]


def _has_unit(content: Mapping[str, object]) -> bool:
    """Whether a state or the samples are given in units."""
    units = content.get("units", "reduced")
    values = [*units.values()] if isinstance(units, dict) else [units]
    return any(isinstance(content.get(key), str) for key in ("temperature", "density", "volume", "interval")) or any(
        each != "reduced" for each in values
    )


def _is_in_si(table: Table) -> bool:
    return any(isinstance(table.content.get(key), str) for key in ("temperature", "density", "volume"))


def _fluid(top: Table, *, in_units: bool) -> dict[str, object]:
    """The table of the fluid; one sampled elsewhere is given units of measure where it needs them and has none."""
    table = top.table("fluid")
    fluid = dict(table.content)
    if fluid.get("potential") != ELSEWHERE:
        for key in ("cutoff", "truncation") if "potential" in fluid else ():
            if key not in fluid:
                raise table.refusal(key, "missing; what is needed is that with which the samples were taken")
        return fluid
    fluid.setdefault("ideal_heat_capacity", "unknown")
    if not (in_units or "mass" in fluid):
        return fluid
    if "mass" not in fluid:
        raise table.refusal("mass", 'missing; what is needed is that of a molecule, such as "18.015 u"')
    return _UNIT_OF_MEASURE | fluid


def _scale(top: Table, fluid: dict[str, object]) -> Scale | None:
    """From a study of no state in particular: the reader of studies knows what a fluid may be."""
    return _study(top, fluid, [State(1.0, 1e-5, 1000)], "reduced").scale


def _study(top: Table, fluid: dict[str, object], states: list[State], kind: Kind) -> Study:
    state = {
        "points": [[each.temperature, each.density] for each in states],
        "particles": [each.particles for each in states],
    }
    shared = {key: top.content[key] for key in ("title", "compare") if key in top}
    adopted = {"source": Path(top.file).name}
    return replace(
        study_of(Table(top.file, "", {"fluid": fluid, "state": state, "adopted": adopted} | shared)), units=kind
    )


def _state(layers: _Layers, scale: Scale | None) -> State:
    rung = layers.rung
    if "pressure" in rung:
        raise rung.refusal("pressure", _NVT)
    molecules = layers.read("molecules", whole(2, 10_000_000))
    temperature = rung.read("temperature", quantity("temperature", 0.01, 100.0, scale))
    if "density" in rung and "volume" in rung:
        raise rung.refusal("volume", "density is given too; what is needed is either, not both")
    if "volume" in rung:
        density = rounded(molecules / rung.read("volume", quantity("volume", molecules / 2.0, molecules / 1e-6, scale)))
    else:
        density = rung.read("density", quantity("density", 1e-6, 2.0, scale))
    return State(temperature, density, molecules)


def _rung(layers: _Layers, state: State, study: Study, home: Path) -> Rung:
    columns = _columns(layers)
    frames = _frames(layers, study.scale, home)
    quantities = {COLUMNS[name] for name in columns}
    energies = [name for name in columns if COLUMNS[name] == "energy"]
    within = _intramolecular(layers, study) if "potential" in columns else "none"
    follows = "pressure" in columns and _kinetic_part(layers) == "instantaneous"
    needs_freedom = follows or "kinetic" in columns or within == "included"
    if "time" not in columns and "interval" not in layers:
        raise layers.top.refusal(
            "interval", "missing; what is needed is a column of the time, or the time between rows"
        )
    repeats = _repeats(layers.rung, "samples" if "samples" in layers.rung else "files", home)
    if frames is not None and len(frames.repeats) != len(repeats):
        raise layers.rung.refusal("frames", f"what is needed is an entry for each of the {len(repeats)} repeats")
    return Rung(
        table=layers.rung,
        state=state,
        repeats=repeats,
        columns=columns,
        factors=_factors(layers, quantities, study.scale),
        per_molecule=bool(energies)
        and layers.needed("energy", choice(("total", "per molecule")), f"column {energies[0]} needs it")
        == "per molecule",
        long_range=_long_range(layers, study),
        kinetic_part=_kinetic_part(layers) if "pressure" in columns else None,
        freedom=layers.needed("kinetic_freedom", _freedom(state.particles), "the kinetic energy needs it")
        if needs_freedom
        else None,
        intramolecular=within,
        interval=layers.read("interval", quantity("time", 1e-12, 1e12, study.scale)) if "interval" in layers else None,
        frames=frames,
    )


def _columns(layers: _Layers) -> dict[str, str | int]:
    table = layers.at("columns")
    if "columns" not in table:
        raise table.refusal("columns", f"missing; what is needed is a table of what each column holds: {_or(COLUMNS)}")
    found = table.table("columns").only(tuple(COLUMNS))
    columns = {name: found.read(name, _column) for name in found.content}
    if not {"potential", "pressure", "virial"} & set(columns):
        raise table.refusal("columns", "what is needed is at least one of potential, pressure, virial")
    if "pressure" in columns and "virial" in columns:
        raise found.refusal("virial", "pressure is given too; what is needed is either, not both")
    return columns


def _column(value: object) -> str | int:
    if isinstance(value, str) and value.strip() and value.isprintable():
        return value
    try:
        return whole(1, 10_000)(value)
    except NotAccepted:
        raise NotAccepted("what is needed is the name of a column, or its number from 1 on") from None


def _repeats(table: Table, key: str, home: Path) -> tuple[tuple[Source, ...], ...]:
    """One entry a repeat: a source, or a list of sources that follow one another."""
    wanted = "what is needed is a list with a file for each repeat, or a list of files for one that goes on"

    def source(value: object) -> Source:
        if isinstance(value, str) and value.strip():
            return home / value
        if hasattr(value, "keys") or hasattr(value, "shape"):
            return value
        raise NotAccepted(wanted)

    def read(value: object) -> tuple[tuple[Source, ...], ...]:
        if value is None or (isinstance(value, list) and not value):
            raise NotAccepted(wanted)
        repeats = [each if isinstance(each, list) and each else [each] for each in _listed(value)]
        return tuple(tuple(map(source, each)) for each in repeats)

    return table.read(key, read)


def _listed(value: object) -> list[Any]:
    return [*value] if isinstance(value, list | tuple) else [value]


def _frames(layers: _Layers, scale: Scale | None, home: Path) -> Frames | None:
    if "frames" not in layers.rung:
        return None
    table = layers.rung.table("frames").only(("files", "samples", "first", "every"))
    return Frames(
        _repeats(table, "samples" if "samples" in table else "files", home),
        table.read("first", whole(1, 10**9)),
        table.read("every", whole(1, 10**9)),
        _factors(layers, {"length"}, scale)["length"],
    )


def _factors(layers: _Layers, quantities: Collection[str], scale: Scale | None) -> dict[str, float]:
    """One unit of each quantity in reduced units, as far as they are needed."""
    table = layers.at("units")
    if table.content.get("units") == "reduced":
        return dict.fromkeys(quantities, 1.0)
    if not isinstance(table.content.get("units"), dict):
        reason = f'what is needed is "reduced", or a table with the units of {_or(sorted(quantities))}'
        raise table.refusal("units", reason if "units" in table else f"missing; {reason}")
    units = table.table("units").only(_QUANTITIES)
    return {name: units.read(name, _unit(name, scale)) for name in sorted(quantities)}


def _unit(name: str, scale: Scale | None) -> Reader[float]:
    examples = {"time": "ps", "energy": "kJ/mol", "pressure": "MPa", "length": "angstrom", "volume": "nm3"}
    wanted = f'what is needed is a unit of {name}, such as "{examples[name]}", or "reduced"'

    def read(value: object) -> float:
        if value == "reduced":
            return 1.0
        if not isinstance(value, str):
            raise NotAccepted(wanted)
        if scale is None:
            raise NotAccepted(
                'a unit needs fluid.epsilon, fluid.sigma and fluid.mass; without them what is accepted is "reduced"'
            )
        try:
            if name == "energy":
                return from_text(f"1 {value}", "epsilon", None) / scale.epsilon
            return from_text(f"1 {value}", name, scale)
        except NotAccepted:
            raise NotAccepted(wanted) from None

    return read


def _kinetic_part(layers: _Layers) -> str:
    why = "the pressure column needs it: whether its kinetic part is that of each moment or of the set temperature"
    return layers.needed("pressure_kinetic", choice(("instantaneous", "set")), why)


def _freedom(molecules: int) -> Reader[int]:
    """Reads a whole number, or "3N" or "3N-3" with N the number of molecules."""
    known = {"3N": 3 * molecules, "3N-3": 3 * molecules - 3}

    def read(value: object) -> int:
        if isinstance(value, str) and value.replace(" ", "") in known:
            return known[value.replace(" ", "")]
        try:
            return whole(1, 10**9)(value)
        except NotAccepted:
            raise NotAccepted('what is needed is a whole number, or "3N" or "3N-3" for N molecules') from None

    return read


def _flag(value: object) -> bool:
    if not isinstance(value, bool):
        raise NotAccepted("what is accepted is true or false")
    return value


def _long_range(layers: _Layers, study: Study) -> bool:
    found = layers.needed("long_range", _flag, "whether energy and pressure hold a part from beyond the cutoff")
    if found and study.fluid.has_pairs and study.fluid.truncation != "corrected":
        raise layers.at("long_range").refusal(
            "long_range",
            f'truncation "{study.fluid.truncation}" has no such part; what is accepted is false, or truncation '
            '"corrected"',
        )
    return found


def _intramolecular(layers: _Layers, study: Study) -> str:
    if study.fluid.has_pairs and "intramolecular" not in layers:
        return "none"  # single spheres
    wanted = 'what is accepted is false (there is none), true (it is included) or "left out"'

    def read(value: object) -> str:
        for known, word in ((False, "none"), (True, "included"), ("left out", "left out")):
            if value is known or value == known:
                return word
        raise NotAccepted(wanted)

    found = layers.needed("intramolecular", read, "whether the potential energy holds a part from within molecules")
    if study.fluid.has_pairs and found != "none":
        raise layers.at("intramolecular").refusal("intramolecular", "single spheres have none; what is needed is false")
    return found


def _or(words: Collection[str]) -> str:
    return ", ".join(words)
