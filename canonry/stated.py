"""What is stated of samples that were taken elsewhere, key by key; nothing is guessed, what is needed is asked for."""

from __future__ import annotations

from collections.abc import Collection, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any, TypeVar

from canonry.errors import UserError
from canonry.keys import Reader, Table, choice, quantity, whole
from canonry.quantities import NotAccepted, from_text
from canonry.units import Scale
from sampler.fluid import Fluid

__all__ = [
    "COLUMNS",
    "STATED",
    "Frames",
    "Layers",
    "Source",
    "columns",
    "factors",
    "frames",
    "interval",
    "intramolecular",
    "is_per_molecule",
    "kinetic_freedom",
    "kinetic_part",
    "long_range",
    "repeats",
]

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

STATED = (
    *("molecules", "columns", "units", "energy", "long_range", "pressure_kinetic", "kinetic_freedom"),
    *("intramolecular", "interval"),
)
"""Keys that a rung may have, or all rungs share."""

_SAYS = ("potential", "pressure", "virial")  # columns without which nothing can be said
_UNITS = {"time": "ps", "energy": "kJ/mol", "pressure": "MPa", "length": "angstrom", "volume": "nm3"}


@dataclass(frozen=True)
class Layers:
    """A rung's own keys, and those of the file that hold for every rung which does not say otherwise."""

    rung: Table
    top: Table

    def __contains__(self, key: str) -> bool:
        return key in self.at(key)

    def at(self, key: str) -> Table:
        """The table in which a key stands."""
        return self.rung if key in self.rung else self.top

    def read(self, key: str, reader: Reader[T], why: str = "") -> T:
        """The value of a key; `why` says what makes it necessary, for where it is missing."""
        if key in self:
            return self.at(key).read(key, reader)
        try:
            reader(None)
        except NotAccepted as problem:
            raise self.refusal(key, f"missing; {why}{'; ' if why else ''}{problem}") from None
        raise self.refusal(key, "missing")

    def refusal(self, key: str, reason: str) -> UserError:
        """The error for a key, or for one within its table such as units.pressure."""
        outer, _, inner = key.partition(".")
        table = self.at(outer)
        told = reason if table is self.rung else f"in {self.rung.name}, {reason}"
        if inner and isinstance(table.content.get(outer), dict):
            return table.table(outer).refusal(inner, told)
        return table.refusal(outer, told)


@dataclass(frozen=True)
class Frames:
    """Positions of each repeat: the row of samples that the first belongs to, from 1 on, and rows from one to the next.

    factor : sigma in one unit of length of the positions
    """

    repeats: tuple[tuple[Source, ...], ...]
    first: int
    every: int
    factor: float


def columns(keys: Layers) -> dict[str, str | int]:
    """What a column holds -> its name, or its number from 1 on."""
    table = keys.at("columns")
    if "columns" not in table:
        raise keys.refusal("columns", f"missing; what is needed is a table of what columns hold: {_listed(COLUMNS)}")
    found = table.table("columns").only(tuple(COLUMNS))
    named = {holds: found.read(holds, _column) for holds in found.content}
    if not {*_SAYS} & {*named}:
        raise keys.refusal("columns", f"what is needed is at least one of {_listed(_SAYS)}")
    if "pressure" in named and "virial" in named:
        raise keys.refusal("columns.virial", "pressure is given too; what is needed is either, not both")
    return named


def _column(value: object) -> str | int:
    if isinstance(value, str) and value.strip() and value.isprintable():
        return value
    try:
        return whole(1, 10_000)(value)
    except NotAccepted:
        raise NotAccepted("what is needed is the name of a column, or its number from 1 on") from None


def repeats(table: Table, home: Path) -> tuple[tuple[Source, ...], ...]:
    """Under `files` or `samples`, an entry for each repeat: a source, or a list of sources that follow one another."""
    wanted = "what is needed is a list with a file for each repeat, or with a list of files for one that goes on"

    def source(value: object) -> Source:
        if isinstance(value, str) and value.strip():
            return home / value
        if hasattr(value, "keys") or hasattr(value, "shape"):
            return value
        raise NotAccepted(wanted)

    def read(value: object) -> tuple[tuple[Source, ...], ...]:
        if value is None or (isinstance(value, list) and not value):
            raise NotAccepted(wanted)
        entries = value if isinstance(value, list) else [value]
        return tuple(tuple(map(source, each if isinstance(each, list) and each else [each])) for each in entries)

    return table.read("samples" if "samples" in table else "files", read)


def frames(keys: Layers, number: int, scale: Scale | None, home: Path) -> Frames | None:
    """Positions of the rung's repeats, of which there are `number`; None where there are none."""
    if "frames" not in keys.rung:
        return None
    table = keys.rung.table("frames").only(("files", "samples", "first", "every"))
    found = repeats(table, home)
    if len(found) != number:
        raise keys.refusal("frames", f"what is needed is an entry for each of the {number} repeats")
    first, every = (table.read(name, whole(1, 10**9)) for name in ("first", "every"))
    if first > every:
        raise table.refusal("first", f"what is needed is a row from 1 to {every}, which is every")
    return Frames(found, first, every, factors(keys, {"length"}, scale)["length"])


def factors(keys: Layers, quantities: Collection[str], scale: Scale | None) -> dict[str, float]:
    """One unit of each quantity in reduced units."""
    units = keys.at("units").content.get("units")
    if units == "reduced":
        return dict.fromkeys(quantities, 1.0)
    if not isinstance(units, dict):
        wanted = f'what is needed is "reduced", or a table with the units of {_listed(sorted(quantities))}'
        raise keys.refusal("units", wanted if "units" in keys else f"missing; {wanted}")
    table = keys.at("units").table("units").only(tuple(_UNITS))
    return {name: table.read(name, _unit(name, scale)) for name in sorted(quantities)}


def _unit(name: str, scale: Scale | None) -> Reader[float]:
    wanted = f'what is needed is a unit of {name}, such as "{_UNITS[name]}", or "reduced"'

    def read(value: object) -> float:
        if value == "reduced":
            return 1.0
        if not isinstance(value, str):
            raise NotAccepted(wanted)
        if scale is None:
            raise NotAccepted(f'{wanted}; a unit needs fluid.epsilon, fluid.sigma and fluid.mass, "reduced" does not')
        try:
            if name == "energy":
                return from_text(f"1 {value}", "epsilon", None) / scale.epsilon
            return from_text(f"1 {value}", name, scale)
        except NotAccepted:
            raise NotAccepted(wanted) from None

    return read


def interval(keys: Layers, holds: Collection[str], scale: Scale | None) -> float | None:
    """Time from one row to the next, where no column holds the time."""
    if "time" in holds:
        return None
    return keys.read("interval", quantity("time", 1e-12, 1e12, scale), "columns has no time")


def is_per_molecule(keys: Layers, holds: Collection[str]) -> bool:
    """Whether energies are those of one molecule."""
    energies = [name for name in holds if COLUMNS[name] == "energy"]
    if not energies:
        return False
    return keys.read("energy", choice(("total", "per molecule")), f"{_listed(energies)} need it") == "per molecule"


def kinetic_part(keys: Layers, holds: Collection[str]) -> str | None:
    """Of the pressure column, "instantaneous" or "set"; None without such a column."""
    if "pressure" not in holds:
        return None
    why = "the kinetic part of the pressure is that of the moment or that of the set temperature"
    return keys.read("pressure_kinetic", choice(("instantaneous", "set")), why)


def kinetic_freedom(keys: Layers, molecules: int, why: str) -> int | None:
    """Kinetic degrees of freedom: a whole number, "3N" or "3N-3" with N molecules; None where no reason needs them."""
    known = {"3N": 3 * molecules, "3N-3": 3 * molecules - 3}

    def read(value: object) -> int:
        if isinstance(value, str) and value.replace(" ", "") in known:
            return known[value.replace(" ", "")]
        try:
            return whole(1, 10**9)(value)
        except NotAccepted:
            raise NotAccepted('what is needed is a whole number, or "3N" or "3N-3" for N molecules') from None

    return keys.read("kinetic_freedom", read, why) if why else None


def long_range(keys: Layers, fluid: Fluid) -> bool:
    """Whether energy, pressure and virial hold a part from beyond the cutoff."""
    why = "energy, pressure and virial hold a part from beyond the cutoff or they do not"
    found = keys.read("long_range", _flag, why)
    if found and fluid.has_pairs and fluid.truncation != "corrected":
        reason = f'truncation "{fluid.truncation}" has no such part; what is accepted is false, or another truncation'
        raise keys.refusal("long_range", reason)
    return found


def _flag(value: object) -> bool:
    if not isinstance(value, bool):
        raise NotAccepted("what is accepted is true or false")
    return value


def intramolecular(keys: Layers, fluid: Fluid, holds: Collection[str]) -> str:
    """Whether the potential energy holds a part from within molecules: "none" (none exists), "included", "left out"."""
    if "potential" not in holds or (fluid.has_pairs and "intramolecular" not in keys):
        return "none"

    def read(value: object) -> str:
        if isinstance(value, bool):
            return "included" if value else "none"
        if value == "left out":
            return value
        raise NotAccepted('what is accepted is false (there is none), true (it is included) or "left out"')

    found = keys.read("intramolecular", read, "the potential energy may hold a part from within molecules")
    if fluid.has_pairs and found != "none":
        raise keys.refusal("intramolecular", "single spheres have no such part; what is accepted is false")
    return found


def _listed(words: Collection[str]) -> str:
    return ", ".join(words)
