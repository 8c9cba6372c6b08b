"""Samples that were taken elsewhere become a study directory."""

from __future__ import annotations

import math
import os
import shutil
from collections import Counter
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from canonry.adopted import save
from canonry.border import Border
from canonry.directory import STUDY, write
from canonry.errors import UserError
from canonry.keys import Table
from canonry.missing import missing
from canonry.notation import unit_text
from canonry.numbers import plain
from canonry.recordings import columns, positions
from canonry.spec import Rung, Spec, read, understood
from canonry.study import Adopted, Study
from canonry.suspicion import Times, ensemble, pressure_factor, times, unit_named
from canonry.terminal import aligned, wrapped
from sampler.fluid import Fluid
from sampler.series import Series

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["Adoption", "adopt", "adoption_text"]

Floats = npt.NDArray[np.float64]

_SAME_VOLUME = 1e-6  # of a volume: digits that are written of it
_TRUNCATED = (
    "Forces of a potential that is cut without a shift sample the ensemble of the shifted one; with no column "
    "`dynamical` fluctuations are taken with the energy recorded."
)
_NOISY = "The pressures hold the kinetic energy of each moment and there is no column `kinetic` to take it off."
_NO_TAIL = "Energy and pressure hold no part from beyond the cutoff."
_WITHIN = {
    "included": "The potential energy holds a part from within molecules, so that no residual energy can be told.",
    "left out": "The potential energy leaves out the part from within molecules, and with it what fluctuations need.",
}


@dataclass(frozen=True, eq=False)
class Adoption:
    """What was brought in.

    series : every repeat of every rung
    notes : what its reader must know, one sentence each
    missing : `temperature, density, property, column, why`: what cannot be said, and which column would let it be said
    """

    directory: Path
    study: Study
    series: tuple[Series, ...]
    notes: tuple[str, ...]
    missing: pd.DataFrame


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
        described = understood(Table("samples", "", _plain(spec)), home=Path())
    else:
        described = read(Path(spec))
    directory = Path(into)
    _check_new(directory)
    series, notes = _taken_in(described, watch or (lambda words: None))
    study = replace(described.study, adopted=replace(described.study.adopted or Adopted(""), notes=notes))
    table = missing(study, series, Border.of(study))
    _make(directory, study, series, table)
    return Adoption(directory, study, tuple(series), notes, table)


def adoption_text(adoption: Adoption) -> str:
    """What was brought in, what is to be said about it, and what it cannot say."""
    border = Border.of(adoption.study)
    states = adoption.study.states
    units = [unit_text(border.label(name)) for name in ("temperature", "density", "time")]
    rows = [["T", "density", "molecules", "repeats", "samples", "between", "frames"]]
    rows.append([units[0], units[1], "", "", "", units[2], ""])
    for state in states:
        own = [each for each in adoption.series if each.state == state]
        rows.append(
            [plain(border.coordinate(name, getattr(state, name))) for name in ("temperature", "density")]
            + [str(state.particles), str(len(own)), str(sum(map(len, own)))]
            + [plain(border.value("time", own[0].interval), 4), str(sum(len(each.frames) for each in own))]
        )
    notes = [wrapped(f"Note: {note}") for note in adoption.notes]
    table = Counter(adoption.missing[["property", "column"]].itertuples(index=False, name=None))
    lacking = [
        [name, "everywhere" if count == len(states) else f"{count} of {len(states)} states", column]
        for (name, column), count in table.items()
    ]
    heads = ["cannot be said", "where", "what would let it be said"]
    return "\n\n".join(
        [
            f"{adoption.directory} holds these samples:\n{aligned(rows)}",
            *(["\n".join(notes)] if notes else []),
            *([_left_aligned([heads, *lacking])] if lacking else []),
            f"Next: canonry report {adoption.directory}",
        ]
    )


def _left_aligned(rows: Sequence[Sequence[str]]) -> str:
    widths = [max(map(len, column)) for column in zip(*rows, strict=True)]
    return "\n".join("  ".join(map(str.ljust, row, widths)).rstrip() for row in rows)


def _plain(value: Any) -> Any:
    """Numbers, lists and tables as a file would give them; arrays and data frames as they are."""
    if isinstance(value, np.generic):
        return value.item()
    if isinstance(value, dict):
        return {key: each if key == "samples" else _plain(each) for key, each in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(each) for each in value]
    return value


def _check_new(directory: Path) -> None:
    if directory.exists() and (not directory.is_dir() or any(directory.iterdir())):
        raise UserError(f"--into {directory}: it exists already; what is needed is a new or empty directory")


def _make(directory: Path, study: Study, series: Sequence[Series], table: pd.DataFrame) -> None:
    """Write everything beside the directory, then give it its name. Raises UserError if the system refuses."""
    beside = directory.with_name(f".{directory.name}.{os.getpid()}")
    try:
        beside.mkdir(parents=True)
        for each in series:
            save(each, beside, source=study.adopted.source if study.adopted else "")
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


def _taken_in(spec: Spec, watch: Callable[[str], None]) -> tuple[list[Series], tuple[str, ...]]:
    """All series, once they have been looked at, and what is to be said about them."""
    series: list[list[Series]] = []
    notes: list[str] = []
    for rung in spec.rungs:
        watch(f"reading {rung.table.name}")
        own = []
        for number in range(len(rung.repeats)):
            each, said = _repeat(rung, number, spec.study)
            own.append(each)
            notes += (f"{rung.table.name}, repeat {number}: {sentence}." for sentence in said)
        if problem := ensemble(own):
            raise rung.table.refusal(
                "columns", f"{problem}; what is needed are canonical samples (NVT) and their units"
            )
        series.append(own)
    _check_pressures(spec, series)
    return [each for own in series for each in own], (*_stated(spec), *notes)


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


def _repeat(rung: Rung, number: int, study: Study) -> tuple[Series, tuple[str, ...]]:
    """One repeat as a series, and what is to be said about its times."""
    found = columns(rung.repeats[number], rung.columns)
    found = {name: values * rung.factors[_quantity(name)] for name, values in found.items()}
    _check_volume(rung, found)
    rows = _rows(rung, number, found)
    frames, offset = _frames(rung, number, rows)
    energies = _energies(rung, {name: values[rows.rows] for name, values in found.items()}, study.fluid)
    series = Series(
        fluid=study.fluid,
        state=rung.state,
        repeat=number,
        bath=True,
        interval=rows.interval,
        ledger=None,
        frames=frames,
        frame_stride=rung.frames.every if rung.frames else 1,
        frame_offset=offset,
        freedom=rung.freedom,
        **energies,
    )
    return series, rows.notes


def _quantity(column: str) -> str:
    from canonry.spec import COLUMNS

    return COLUMNS[column]


def _rows(rung: Rung, number: int, found: Mapping[str, Floats]) -> Times:
    if "time" not in found:
        n = len(next(iter(found.values())))
        return Times(np.arange(n), rung.interval or 1.0, ())
    rows = times(found["time"])
    if rows is None:
        raise rung.table.refusal("columns", f"the times of repeat {number} do not rise; what is needed is a time")
    return rows


def _check_volume(rung: Rung, found: Mapping[str, Floats]) -> None:
    if "volume" not in found:
        return
    volume = rung.state.volume
    if float(np.ptp(found["volume"])) > _SAME_VOLUME * volume:
        raise rung.table.refusal(
            "columns",
            "the volume varies: samples at a set pressure are not taken, what is accepted is constant volume (NVT)",
        )
    if not math.isclose(float(found["volume"][0]), volume, rel_tol=1e-3):
        raise rung.table.refusal(
            "columns",
            f"the volume recorded is {float(found['volume'][0]) / volume:.6g} times that of the density and molecules "
            "stated; what is needed are the same",
        )


def _energies(rung: Rung, found: Mapping[str, Floats], fluid: Fluid) -> dict[str, Floats | None]:
    """The columns of a series, extensive, with the long-range part where it lacked and the model has one."""
    state = rung.state
    size = state.particles if rung.per_molecule else 1
    raw = {name: size * values for name, values in found.items() if _quantity(name) == "energy"}
    tail = np.zeros(3)
    if fluid.has_pairs and not rung.long_range:
        tail = state.particles * np.array(fluid.tail(state.density))
    potential, dynamical = raw.get("potential"), raw.get("dynamical")
    sampled = potential if dynamical is None and rung.intramolecular != "left out" else dynamical
    energy = None if potential is None or rung.intramolecular == "included" else potential + tail[0]
    virial = _virial(rung, found, raw)
    virial = None if virial is None else virial + tail[1]
    hypervirial = raw["hypervirial"] + tail[2] if "hypervirial" in raw else None
    noisy = rung.kinetic_part == "instantaneous" and "kinetic" not in raw
    if hypervirial is None and energy is not None and virial is not None and not noisy:
        hypervirial = fluid.hypervirial(energy, virial)
    return {
        "energy": energy,
        "sampled_energy": None if sampled is None else sampled + tail[0],
        "virial": virial,
        "hypervirial": None if noisy else hypervirial,
        "kinetic": raw.get("kinetic"),
    }


def _virial(rung: Rung, found: Mapping[str, Floats], raw: Mapping[str, Floats]) -> Floats | None:
    """W, so that the pressure is rho T + <W>/V with the density of molecules."""
    if "pressure" not in found:
        return raw.get("virial")
    state = rung.state
    ideal = state.particles * state.temperature
    product = found["pressure"] * state.volume
    if rung.kinetic_part == "set" or rung.freedom is None:
        return product - ideal
    expected = rung.freedom * state.temperature / 3.0
    part = 2.0 / 3.0 * raw["kinetic"] if "kinetic" in raw else expected
    return product - part + (0.0 if _is_atomic(rung) else expected - ideal)


def _is_atomic(rung: Rung) -> bool:
    """Whether what moves are the molecules themselves, all of them or but for their common motion."""
    return rung.freedom in (3 * rung.state.particles, 3 * rung.state.particles - 3)


def _frames(rung: Rung, number: int, rows: Times) -> tuple[Floats, int]:
    """Positions inside the box, and the samples missing of the stride that the first frame ends."""
    particles = rung.state.particles
    if rung.frames is None:
        return np.empty((0, particles, 3)), 0
    asked = rung.frames
    table = rung.table.table("frames")
    if not np.array_equal(rows.rows, np.arange(len(rows.rows))):
        raise table.refusal("first", "frames are told by row, but rows were left out; what is needed are rows in order")
    if asked.first > asked.every:
        raise table.refusal("first", f"what is needed is a row from 1 to {asked.every}, which is every")
    found = positions(asked.repeats[number], particles) * asked.factor
    last = asked.first + (len(found) - 1) * asked.every
    if last > len(rows.rows):
        reason = f"the last of {len(found)} frames would belong to row {last} of {len(rows.rows)}"
        raise table.refusal("every", f"{reason}; what is needed is the number of rows from one frame to the next")
    box = rung.state.box
    found -= box * np.floor(found / box)
    found[found >= box] = 0.0
    return found, asked.every - asked.first


def _check_pressures(spec: Spec, series: Sequence[Sequence[Series]]) -> None:
    """Raises UserError if the pressures of a density are in another unit than stated, as far as that shows."""
    both = [(rung, own) for rung, own in zip(spec.rungs, series, strict=True) if "pressure" in rung.columns]
    for density in dict.fromkeys(rung.state.density for rung, _ in both):
        rungs = [rung for rung, _ in both if rung.state.density == density]
        own = [each for rung, each in both if rung.state.density == density]
        first = rungs[0]
        follows = all(rung.kinetic_part == "instantaneous" and "kinetic" in rung.columns for rung in rungs)
        factor = pressure_factor(own, instantaneous=follows)
        if factor is None:
            continue
        scale = spec.study.scale
        stated = None if scale is None else scale.factor("pressure") * first.factors["pressure"]
        if problem := unit_named(factor, stated):
            raise first.table.refusal("columns", f"{problem}; what is needed is their unit in units.pressure")
