"""Tables of a TOML file whose keys are all known, and readers that say what a value should have been."""

from __future__ import annotations

import difflib
import json
import re
import tomllib
from collections.abc import Callable, Collection
from dataclasses import dataclass
from pathlib import Path
from types import EllipsisType
from typing import TypeVar

from canonry.errors import UserError
from canonry.quantities import NotAccepted, example, from_text, rounded
from canonry.units import UNITS, Scale

__all__ = ["Reader", "Table", "choice", "line", "one_or_more", "open_table", "parameter", "quantity", "shown", "whole"]

T = TypeVar("T")
Word = TypeVar("Word", bound=str)
Reader = Callable[[object], T]


@dataclass(frozen=True)
class Table:
    """One table of a file: its dotted name (empty for the file itself) and its content."""

    file: str
    name: str
    content: dict[str, object]

    def __contains__(self, key: str) -> bool:
        return key in self.content

    def refusal(self, key: str, reason: str) -> UserError:
        """The error for a key: the file, the dotted key, the value found if there is one, and the reason."""
        found = f" = {shown(self.content[key])}" if key in self.content else ""
        return UserError(f"{self.file}: {self._dotted(key)}{found}: {reason}")

    def only(self, known: Collection[str], later: Collection[str] = ()) -> Table:
        """The table itself, when it has no key but the known ones; those that are to come later are refused as such."""
        for key in self.content:
            if key in later:
                raise self.refusal(key, "not available in this version; leave it out")
            if key not in known:
                near = difflib.get_close_matches(key, known, n=1)
                offer = f"did you mean {near[0]}? " if near else ""
                raise self.refusal(key, f"unknown key; {offer}the keys here are {', '.join(known)}")
        return self

    def table(self, key: str) -> Table:
        """The table under a key, empty when there is none."""
        content = self.content.get(key, {})
        if not isinstance(content, dict):
            raise self.refusal(key, "what is needed is a table")
        return Table(self.file, self._dotted(key), content)

    def read(self, key: str, reader: Reader[T], default: T | EllipsisType = ...) -> T:
        """The value under a key as the reader understands it; without a default the key must be there."""
        if key not in self.content and not isinstance(default, EllipsisType):
            return default
        try:
            return reader(self.content.get(key))
        except NotAccepted as problem:
            raise self.refusal(key, str(problem) if key in self.content else f"missing; {problem}") from None

    def _dotted(self, key: str) -> str:
        return f"{self.name}.{_bare(key)}" if self.name else _bare(key)


def open_table(path: Path) -> Table:
    """The content of a TOML file. Raises UserError when it cannot be read as one."""
    try:
        with path.open("rb") as file:
            return Table(str(path), "", tomllib.load(file))
    except FileNotFoundError:
        raise UserError(f"{path}: no such file; what is needed is a study file, and `canonry new` writes one") from None
    except IsADirectoryError:
        raise UserError(f"{path}: this is a directory; what is needed is a study file") from None
    except OSError as problem:
        raise UserError(f"{path}: cannot be read ({problem.strerror}); what is needed is a study file") from None
    except UnicodeDecodeError:
        raise UserError(f"{path}: this is not text in UTF-8; what is needed is a study file in TOML") from None
    except (ValueError, RecursionError) as problem:
        raise UserError(f"{path}: this is not TOML: {problem}; what is needed is a study file in TOML") from None


def shown(value: object) -> str:
    """A value much as TOML writes it, on one line and at most about 60 characters long."""
    if isinstance(value, str):
        text = json.dumps(value, ensure_ascii=False) if value.isprintable() else json.dumps(value)
    elif isinstance(value, bool):
        text = str(value).lower()
    elif isinstance(value, int):
        text = str(value) if abs(value) < 10**60 else "a whole number of more than 60 digits"
    elif isinstance(value, list):
        text = f"[{', '.join(map(shown, value))}]"
    elif isinstance(value, dict):
        text = f"{{ {', '.join(f'{_bare(key)} = {shown(entry)}' for key, entry in value.items())} }}"
    else:
        text = str(value)
    return text if len(text) <= 60 else f"{text[:57]}..."


def whole(low: int, high: int) -> Reader[int]:
    """Reads a whole number from low to high."""

    def read(value: object) -> int:
        if isinstance(value, bool) or not isinstance(value, int) or not low <= value <= high:
            raise NotAccepted(f"what is needed is a whole number from {low} to {high}")
        return value

    return read


def line(value: object) -> str:
    """Reads one line of printable text."""
    if not (isinstance(value, str) and value.strip() and value.isprintable() and len(value) <= 200):
        raise NotAccepted("what is needed is one line of text, at most 200 characters")
    return value


def choice(options: Collection[Word]) -> Reader[Word]:
    """Reads one of several words."""

    def read(value: object) -> Word:
        for option in options:
            if value == option:
                return option
        near = difflib.get_close_matches(value, options, n=1) if isinstance(value, str) else []
        offer = f'did you mean "{near[0]}"? ' if near else ""
        raise NotAccepted(f"{offer}what is accepted is {_either(options)}")

    return read


def parameter(name: str, low: float, high: float) -> Reader[float]:
    """Reads epsilon (J), sigma (m) or mass (kg), text with a unit, from low to high."""

    def read(value: object) -> float:
        if not isinstance(value, str):
            raise NotAccepted(f'what is needed is a text with a unit, such as "{example(name)}"')
        found = rounded(from_text(value, name, None))
        if not low <= found <= high:
            raise NotAccepted(
                f'what is needed is a value of the size of an atom or molecule, such as "{example(name)}"'
            )
        return found

    return read


def quantity(name: str, low: float, high: float, scale: Scale | None) -> Reader[float]:
    """Reads a reduced value, rounded, from low to high: a bare number, or with a scale also text with a unit."""
    label = UNITS[name].reduced
    wanted = f"what is needed is a number from {low:g} to {high:g} ({label}), or a text with a unit such as"
    wanted = f'{wanted} "{example(name)}"'

    def read(value: object) -> float:
        if isinstance(value, bool) or not isinstance(value, int | float | str):
            raise NotAccepted(wanted)
        if isinstance(value, str):
            if scale is None:
                raise NotAccepted(
                    "a value with a unit needs fluid.epsilon, fluid.sigma and fluid.mass; "
                    f"without them what is needed is a bare number ({label})"
                )
            value = rounded(from_text(value, name, scale))
            if not low <= value <= high:
                raise NotAccepted(f"this is {value:.6g} {label}; {wanted}")
        if not low <= value <= high:
            raise NotAccepted(wanted)
        return rounded(float(value))

    return read


def one_or_more(reader: Reader[T]) -> Reader[tuple[T, ...]]:
    """Reads a value or a list of values, all different, at least one."""

    def read(value: object) -> tuple[T, ...]:
        entries = value if isinstance(value, list) else [value]
        if not entries:
            raise NotAccepted("the list is empty; what is needed is at least one entry")
        found: list[T] = []
        for number, entry in enumerate(entries, start=1):
            try:
                found.append(reader(entry))
            except NotAccepted as problem:
                if len(entries) == 1:
                    raise
                raise NotAccepted(f"entry {number}, {shown(entry)}: {problem}") from None
            if found[-1] in found[:-1]:
                raise NotAccepted(
                    f"entry {number}, {shown(entry)}, stands there twice; what is needed are different values"
                )
        return tuple(found)

    return read


def _bare(key: str) -> str:
    return key if re.fullmatch(r"[A-Za-z0-9_-]+", key) else shown(key)


def _either(options: Collection[str]) -> str:
    return " or ".join(f'"{option}"' for option in options)
