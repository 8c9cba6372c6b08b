"""Files and tables that hold samples: delimited text, Parquet, data frames, arrays by name; and XYZ for positions."""

from __future__ import annotations

import csv
import difflib
import math
from collections.abc import Mapping, Sequence
from itertools import islice
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from canonry.errors import UserError

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["columns", "positions"]

Floats = npt.NDArray[np.float64]
_HEAD = 1000  # lines that may stand before the first row of numbers
_COMMENT = "#@;!%"
_PARQUET = (".parquet", ".pq")


def columns(sources: Sequence[Any], wanted: Mapping[str, str | int]) -> dict[str, Floats]:
    """Columns of sources that follow one another, as numbers: what they hold -> (n,).

    sources : paths, data frames or mappings of arrays
    wanted : what a column holds -> its name, or its number from 1 on
    Raises UserError, which names the source and what is needed, where one cannot be read or holds no number.
    """
    parts = [_read(source, wanted) for source in sources]
    return {name: np.concatenate([part[name] for part in parts]) for name in wanted}


def _read(source: Any, wanted: Mapping[str, str | int]) -> dict[str, Floats]:
    where = str(source) if isinstance(source, Path) else "the table given"
    if not (isinstance(source, Path) or hasattr(source, "keys")):
        raise UserError(
            f"samples: {type(source).__name__} found; what is needed is a data frame or a mapping of arrays"
        )
    table = _table(source, wanted) if isinstance(source, Path) else source
    found = {}
    for holds, name in wanted.items():
        column = _named(name, list(table.keys()), where, holds)
        found[holds] = _numbers(table[column], f"{where}: column {name!r} ({holds})")
    if len({len(values) for values in found.values()}) > 1:
        raise UserError(f"{where}: its columns differ in length; what is needed is one entry in each for every sample")
    return found


def _named(name: str | int, names: Sequence[Any], where: str, holds: str) -> Any:
    """The key of a column; a number counts from 1."""
    if isinstance(name, int) and 1 <= name <= len(names):
        return names[name - 1]
    if names.count(name) == 1:
        return name
    if name in names:
        raise UserError(f"{where}: several columns are named {name!r} ({holds}); what is needed is the column's number")
    near = difflib.get_close_matches(str(name), list(map(str, names)), n=1)
    offer = f"did you mean {near[0]!r}? " if near else ""
    raise UserError(
        f"{where}: there is no column {name!r} ({holds}); {offer}the {len(names)} columns are "
        f"{', '.join(map(str, names))}"
    )


def _numbers(values: Any, what: str) -> Floats:
    try:
        found = np.asarray(values, dtype=float)
    except (TypeError, ValueError) as problem:
        raise UserError(f"{what}: not all its entries are numbers ({problem}); what is needed are numbers") from None
    if found.ndim != 1 or len(found) == 0:
        raise UserError(f"{what}: its shape is {found.shape}; what is needed is one number for every sample")
    wrong = np.flatnonzero(~np.isfinite(found))
    if len(wrong):
        raise UserError(
            f"{what}: row {wrong[0] + 1} of {len(found)} holds no finite number; what is needed is one in every row"
        )
    return found


def _table(path: Path, wanted: Mapping[str, str | int]) -> pd.DataFrame:
    import pandas as pd

    try:
        if path.suffix.lower() in _PARQUET:
            return pd.read_parquet(path)
        return _delimited(path, wanted)
    except ImportError:
        raise UserError(
            f"{path}: reading Parquet needs the package pyarrow, which is not installed here; what is needed is "
            "`pip install pyarrow`, or the same table as delimited text"
        ) from None
    except OSError as problem:
        raise UserError(f"{path}: {problem.strerror or problem}; what is needed is a file with samples") from None
    except (UnicodeDecodeError, ValueError) as problem:
        reason = " ".join(str(problem).split())
        raise UserError(f"{path}: it cannot be read as a table ({reason}); what is needed is {_WANTED}") from None


_WANTED = "delimited text with one row for each sample, or Parquet"


def _delimited(path: Path, wanted: Mapping[str, str | int]) -> pd.DataFrame:
    """A table of text: commas, semicolons, tabs or blanks between cells, names in the last line before the numbers."""
    import pandas as pd

    with path.open(encoding="utf-8") as file:
        head = list(islice(file, _HEAD))
    first = next((number for number, text in enumerate(head) if _is_row(text)), None)
    if first is None:
        raise UserError(f"{path}: no row of numbers stands in its first {len(head)} lines; what is needed is {_WANTED}")
    mark = _delimiter(head[first])
    width = len(_cells(head[first], mark))
    header = next((text for text in reversed(head[:first]) if text.strip(_COMMENT + " \t\r\n")), "")
    names: list[Any] = _cells(header.strip().lstrip(_COMMENT).strip(), mark if mark and mark in header else None)
    if len(names) != width or len(set(names)) != width:
        _check_numbered(path, wanted, names, width)
        names = list(range(1, width + 1))
    return pd.read_csv(
        path,
        sep=mark or r"\s+",
        header=None,
        names=names,
        skiprows=first,
        comment="#",
        skipinitialspace=True,
        encoding="utf-8",
    )


def _check_numbered(path: Path, wanted: Mapping[str, str | int], names: Sequence[str], width: int) -> None:
    for holds, name in wanted.items():
        if isinstance(name, str):
            raise UserError(
                f"{path}: its columns cannot be told by name, {len(set(names))} different names stand above rows of "
                f"{width} cells; what is needed is the number of the column instead of {name!r} ({holds})"
            )


def _is_row(text: str) -> bool:
    cells = _cells(text, _delimiter(text))
    return bool(cells) and all(map(_is_number, cells))


def _is_number(cell: str) -> bool:
    try:
        return not math.isinf(float(cell))
    except ValueError:
        return False


def _delimiter(row: str) -> str | None:
    """None for blanks."""
    return next((mark for mark in ",;\t" if mark in row), None)


def _cells(row: str, mark: str | None) -> list[str]:
    if mark is None:
        return row.split()
    return [cell.strip() for cell in next(csv.reader([row.strip()], delimiter=mark), [])]


def positions(sources: Sequence[Any], particles: int) -> Floats:
    """Frames of sources that follow one another, (m, particles, 3): XYZ files, or arrays of that shape.

    Raises UserError where one cannot be read, or a frame does not hold one position for every particle.
    """
    return np.concatenate([_frames(source, particles) for source in sources])


def _frames(source: Any, particles: int) -> Floats:
    if isinstance(source, Path):
        return _xyz(source, particles)
    found = np.asarray(source, dtype=float)
    if found.ndim != 3 or found.shape[1:] != (particles, 3) or not np.all(np.isfinite(found)):
        raise UserError(f"frames.samples: what is needed are finite numbers of the shape (frames, {particles}, 3)")
    return found


def _xyz(path: Path, particles: int) -> Floats:
    """Plain XYZ: for each frame a line with the number of positions, a remark, and lines of a symbol, x, y and z."""
    try:
        lines = path.read_text(encoding="utf-8").rstrip().splitlines()
    except OSError as problem:
        raise UserError(f"{path}: {problem.strerror or problem}; what is needed is an XYZ file") from None
    except UnicodeDecodeError:
        raise UserError(f"{path}: this is not text in UTF-8; what is needed is an XYZ file") from None
    frames = []
    for start in range(0, len(lines), particles + 2):
        count = lines[start].strip()
        if count != str(particles):
            raise UserError(
                f"{path}: line {start + 1} is {count[:40]!r}; what is needed there is the number of positions in a "
                f"frame, which is that of the molecules, {particles}: one position each, such as its centre of mass"
            )
        block = lines[start + 2 : start + 2 + particles]
        try:
            frames.append(np.array([line.split()[1:4] for line in block], dtype=float).reshape(particles, 3))
        except ValueError:
            raise UserError(
                f"{path}: the frame from line {start + 1} on is not {particles} lines of a symbol and three numbers"
            ) from None
    found = np.array(frames).reshape(-1, particles, 3)
    if not len(found) or not np.all(np.isfinite(found)):
        raise UserError(f"{path}: it holds no frame, or positions that are no finite numbers")
    return found
