"""Samples that were taken elsewhere become a study directory."""

from __future__ import annotations

import os
import shutil
from collections import Counter
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from canonry.adopted import save
from canonry.border import Border
from canonry.directory import STUDY, write
from canonry.errors import UserError
from canonry.intake import repeat
from canonry.keys import Table
from canonry.missing import missing
from canonry.notation import unit_text
from canonry.numbers import plain
from canonry.spec import Rung, Spec, read, understood
from canonry.study import Adopted, Study
from canonry.suspicion import ensemble, pressures, shows_unit
from canonry.terminal import aligned, wrapped
from sampler.series import Series

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["Adoption", "adopt", "adoption_text"]

_TRUNCATED = (
    "Forces of a potential that is cut without a shift sample the ensemble of the shifted one; with no column "
    "`dynamical` fluctuations are taken with the energy recorded."
)
_NOISY = "The pressures hold the kinetic energy of each moment and there is no column `kinetic` to take it off."
_NO_TAIL = "Energy and pressure hold no part from beyond the cutoff."
_UNIT_UNSEEN = (
    "nothing shows whether its pressures are in the unit stated; another temperature would, or a column `kinetic` with "
    "pressures that hold the kinetic energy of the moment."
)
_WITHIN = {
    "included": "The potential energy holds a part from within molecules, so that no residual energy can be told.",
    "left out": "The potential energy leaves out the part from within molecules, and with it what fluctuations need.",
}


@dataclass(frozen=True, eq=False)
class Adoption:
    """What was brought in.

    series : every repeat of every rung
    notes : what its reader must know, one sentence each
    missing : `temperature, density, property, column`: what cannot be said, and which column would let it be said
    """

    directory: Path
    study: Study
    series: tuple[Series, ...]
    notes: tuple[str, ...]
    missing: pd.DataFrame


@dataclass(frozen=True, eq=False)
class _Taken:
    """A repeat, and names of the doubts that its notes leave."""

    series: Series
    doubts: tuple[str, ...]


def adopt(
    spec: str | Path | Mapping[str, Any], *, into: str | Path, watch: Callable[[str], None] | None = None
) -> Adoption:
    """Make a study directory of samples that were taken elsewhere; `canonry.estimate` and `report` go on from there.

    spec : a file that describes them, or its content as a mapping; there a rung may have `samples` instead of `files`,
        and its frames likewise: a data frame or a mapping of arrays for each repeat, arrays (m, molecules, 3) of frames
    into : a new or empty directory, which is made whole or not at all
    watch : called with a few words on what is worked on
    Raises UserError where the description is not complete, or the samples are not what it says.
    """
    if isinstance(spec, Mapping):
        described = understood(Table("samples", "", _as_in_a_file(spec)), home=Path())
    else:
        described = read(Path(spec))
    directory = Path(into)
    _check_new(directory)
    taken, notes = _taken_in(described, watch or (lambda words: None))
    series = [each.series for each in taken]
    source = Path(spec).name if isinstance(spec, str | Path) else "arrays"
    study = replace(described.study, adopted=Adopted(source, notes))
    table = missing(study, series, Border.of(study))
    _make(directory, study, taken, table)
    return Adoption(directory, study, tuple(series), notes, table)


def adoption_text(adoption: Adoption) -> str:
    """What was brought in, what is to be said about it, and what it cannot say."""
    lacking = Counter(adoption.missing[["property", "column"]].itertuples(index=False, name=None))
    states = len(adoption.study.states)
    rows = [("cannot be said", "where", "what would let it be said")]
    rows += [
        (name, "everywhere" if count == states else f"{count} of {states} states", column)
        for (name, column), count in lacking.items()
    ]
    blocks = [
        f"{adoption.directory} holds these samples:\n{aligned(_overview(adoption))}",
        "\n".join(wrapped(f"Note: {note}") for note in adoption.notes),
        _left_aligned(rows) if lacking else "",
        f"Next: canonry report {adoption.directory}",
    ]
    return "\n\n".join(filter(None, blocks))


def _overview(adoption: Adoption) -> list[list[str]]:
    border = Border.of(adoption.study)
    units = [unit_text(border.label(name)) for name in ("temperature", "density", "time")]
    rows = [["T", "density", "molecules", "repeats", "samples", "interval", "frames"]]
    rows.append([*units[:2], "", "", "", units[2], ""])
    for state in adoption.study.states:
        own = [each for each in adoption.series if each.state == state]
        cells = [plain(border.coordinate(name, getattr(state, name))) for name in ("temperature", "density")]
        cells += [str(state.particles), str(len(own)), str(sum(map(len, own)))]
        rows.append([*cells, plain(border.value("time", own[0].interval), 4), str(sum(len(s.frames) for s in own))])
    return rows


def _left_aligned(rows: Sequence[Sequence[str]]) -> str:
    widths = [max(map(len, column)) for column in zip(*rows, strict=True)]
    return "\n".join("  ".join(map(str.ljust, row, widths)).rstrip() for row in rows)


def _as_in_a_file(value: Any) -> Any:
    """Numbers, lists and tables as a file would give them; what stands under `samples` as it is."""
    if isinstance(value, np.generic):
        return value.item()
    if isinstance(value, Path):
        return str(value)
    if isinstance(value, Mapping):
        return {key: each if key == "samples" else _as_in_a_file(each) for key, each in value.items()}
    if isinstance(value, list | tuple):
        return [_as_in_a_file(each) for each in value]
    return value


def _check_new(directory: Path) -> None:
    if directory.exists() and (not directory.is_dir() or any(directory.iterdir())):
        raise UserError(f"--into {directory}: it exists already; what is needed is a new or empty directory")


def _make(directory: Path, study: Study, taken: Sequence[_Taken], table: pd.DataFrame) -> None:
    """Write everything beside the directory, then give it its name. Raises UserError if the system refuses."""
    beside = directory.with_name(f".{directory.name}.{os.getpid()}")
    try:
        beside.mkdir(parents=True)
        for each in taken:
            save(each.series, beside, source=study.adopted.source if study.adopted else "", doubts=each.doubts)
        write(beside / "missing.csv", table.to_csv(index=False, lineterminator="\n"))
        write(beside / STUDY, study.to_toml())
        os.replace(beside, directory)
    except OSError as problem:
        raise UserError(
            f"--into {directory}: it cannot be written ({problem.strerror or problem}); what is needed is a new "
            "directory where there is room"
        ) from None
    finally:
        shutil.rmtree(beside, ignore_errors=True)


def _taken_in(spec: Spec, watch: Callable[[str], None]) -> tuple[list[_Taken], tuple[str, ...]]:
    """All series, once they have been looked at, and what is to be said about them."""
    series: list[list[Series]] = []
    taken = []
    notes = [*_stated(spec)]
    for rung in spec.rungs:
        watch(f"reading {rung.keys.rung.name}")
        own = []
        for number in range(len(rung.repeats)):
            each, said = repeat(rung, number, spec.study.fluid)
            own.append(each)
            taken.append(_Taken(each, tuple(note.doubt for note in said if note.doubt)))
            notes += (f"{rung.keys.rung.name}, repeat {number}: {note.says}." for note in said)
        if problem := ensemble(own):
            raise rung.keys.refusal("columns", f"{problem}; what is needed are canonical samples (NVT) and their units")
        series.append(own)
    watch("looking at the pressures")
    notes += _checked_pressures(spec, series)
    return taken, tuple(notes)


def _stated(spec: Spec) -> Iterator[str]:
    """What follows from what was stated, where it holds for any rung."""
    fluid = spec.study.fluid
    cut = fluid.has_pairs and fluid.truncation in ("corrected", "plain")
    if cut and any("potential" in rung.columns and "dynamical" not in rung.columns for rung in spec.rungs):
        yield _TRUNCATED
    if any(rung.kinetic_part == "instantaneous" and "kinetic" not in rung.columns for rung in spec.rungs):
        yield _NOISY
    if not fluid.has_pairs and not all(rung.long_range for rung in spec.rungs):
        yield _NO_TAIL
    yield from dict.fromkeys(_WITHIN[rung.intramolecular] for rung in spec.rungs if rung.intramolecular in _WITHIN)


def _checked_pressures(spec: Spec, series: Sequence[Sequence[Series]]) -> Iterator[str]:
    """What is to be said of the unit of pressures. Raises UserError if at a density it is another than stated."""
    by_density: dict[float, list[tuple[Rung, Sequence[Series]]]] = {}
    for rung, own in zip(spec.rungs, series, strict=True):
        if "pressure" in rung.columns:
            by_density.setdefault(rung.state.density, []).append((rung, own))
    for both in by_density.values():
        first = both[0][0]
        rungs, scale = [own for _, own in both], spec.study.scale
        follow = all(rung.kinetic_part == "instantaneous" and "kinetic" in rung.columns for rung, _ in both)
        if not shows_unit(rungs, follow=follow, scale=scale):
            yield f"{first.keys.rung.name}: {_UNIT_UNSEEN}"
        elif problem := pressures(rungs, follow=follow, unit=first.factors["pressure"], scale=scale):
            raise first.keys.refusal("units.pressure", f"{problem}; what is needed is the unit they are in")
