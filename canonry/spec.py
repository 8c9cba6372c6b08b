"""The description of samples that were taken elsewhere: what they are of, where they lie, how they were recorded."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from canonry.keys import Table, open_table, quantity, whole
from canonry.quantities import rounded
from canonry.stated import (
    COLUMNS,
    STATED,
    Frames,
    Layers,
    Source,
    columns,
    factors,
    frames,
    interval,
    intramolecular,
    is_per_molecule,
    kinetic_freedom,
    kinetic_part,
    long_range,
    repeats,
)
from canonry.study import Study, study_of
from canonry.units import Kind, Scale
from sampler.fluid import ELSEWHERE, State

__all__ = ["Rung", "Spec", "read", "understood"]

_STATE = ("temperature", "density", "volume")
_RUNG = (*_STATE, "files", "samples", "frames", *STATED)
_NVT = "samples at a set pressure are not taken; what is accepted are canonical ones at constant volume (NVT)"
_UNITS_OF_MEASURE = {"epsilon": "100 K", "sigma": "0.25 nm"}
"""Of a fluid that has none of its own: temperatures and densities of fluids are of the order of one in them."""


@dataclass(frozen=True)
class Rung:
    """One state with its samples, and what was stated about them; see the functions of `canonry.stated`."""

    keys: Layers
    state: State
    repeats: tuple[tuple[Source, ...], ...]
    columns: Mapping[str, str | int]
    factors: Mapping[str, float]
    is_per_molecule: bool
    long_range: bool
    kinetic_part: str | None
    kinetic_freedom: int | None
    intramolecular: str
    interval: float | None
    frames: Frames | None


@dataclass(frozen=True)
class Spec:
    """A study of adopted samples, and its rungs by density, then by temperature."""

    study: Study
    rungs: tuple[Rung, ...]


def read(path: Path) -> Spec:
    """The description in a TOML file; names of files in it are relative to its folder. Raises UserError."""
    return understood(open_table(path), home=path.parent)


def understood(top: Table, *, home: Path) -> Spec:
    """The description in the content of a file. Raises UserError, which names the key and what is accepted."""
    top.only(("title", "fluid", "compare", "rungs", *STATED))
    tables = _rungs(top)
    fluid = _fluid(top, tables)
    scale = _study(top, fluid, [State(1.0, 1e-5, 1000)], "reduced").scale
    keys = [Layers(table, top) for table in tables]
    states = [_state(each, scale) for each in keys]
    _check_molecules(keys, states)
    study = _study(top, fluid, states, "SI" if any(map(_is_in_si, tables)) else "reduced")
    rungs = [_rung(each, state, study, home) for each, state in zip(keys, states, strict=True)]
    return Spec(study, tuple(sorted(rungs, key=lambda rung: (rung.state.density, rung.state.temperature))))


def _rungs(top: Table) -> list[Table]:
    found = top.content.get("rungs")
    if not (isinstance(found, list) and found and all(isinstance(each, dict) for each in found)):
        wanted = "what is needed is a table [[rungs]] for every temperature and density"
        raise top.refusal("rungs", wanted if "rungs" in top else f"missing; {wanted}")
    tables = [Table(top.file, f"rungs[{number}]", each) for number, each in enumerate(found, start=1)]
    for table in tables:
        if "pressure" in table:
            raise table.refusal("pressure", _NVT)
    return [table.only(_RUNG) for table in tables]


def _is_in_si(table: Table) -> bool:
    return any(isinstance(table.content.get(key), str) for key in _STATE)


def _has_units(table: Table) -> bool:
    units = table.content.get("units", "reduced")
    stated = [*units.values()] if isinstance(units, dict) else [units]
    return _is_in_si(table) or "interval" in table or any(each != "reduced" for each in stated)


def _fluid(top: Table, rungs: Sequence[Table]) -> dict[str, object]:
    """The table of the fluid; one whose potential is not known is given units of measure where it needs them."""
    table = top.table("fluid")
    fluid = dict(table.content)
    if fluid.get("potential") != ELSEWHERE:
        for key in ("cutoff", "truncation") if "potential" in fluid else ():
            if key not in fluid:
                raise table.refusal(key, "missing; what is needed is that with which the samples were taken")
        return fluid
    fluid.setdefault("ideal_heat_capacity", "unknown")
    if any(key in fluid for key in ("epsilon", "sigma")) or not (
        "mass" in fluid or any(map(_has_units, (top, *rungs)))
    ):
        return fluid
    if "mass" not in fluid:
        raise table.refusal("mass", 'missing; what is needed is that of one molecule, such as "18.015 u"')
    return _UNITS_OF_MEASURE | fluid


def _study(top: Table, fluid: Mapping[str, object], states: Sequence[State], kind: Kind) -> Study:
    content = {key: top.content[key] for key in ("title", "compare") if key in top}
    content |= {
        "fluid": fluid,
        "state": {
            "points": [[each.temperature, each.density] for each in states],
            "particles": [each.particles for each in states],
        },
        "adopted": {"source": Path(top.file).name},
    }
    return replace(study_of(Table(top.file, "", content)), units=kind)


def _state(keys: Layers, scale: Scale | None) -> State:
    rung = keys.rung
    molecules = keys.read("molecules", whole(2, 10_000_000))
    temperature = rung.read("temperature", quantity("temperature", 0.01, 100.0, scale))
    if "volume" not in rung:
        return State(temperature, rung.read("density", quantity("density", 1e-6, 2.0, scale)), molecules)
    if "density" in rung:
        raise rung.refusal("volume", "density is given too; what is needed is either, not both")
    volume = rung.read("volume", quantity("volume", 0.5 * molecules, 1e6 * molecules, scale))
    return State(temperature, rounded(molecules / volume), molecules)


def _check_molecules(keys: Sequence[Layers], states: Sequence[State]) -> None:
    """Raises UserError if rungs of one density, whose samples are weighed together, differ in molecules."""
    first: dict[float, tuple[str, int]] = {}
    for each, state in zip(keys, states, strict=True):
        rung, molecules = first.setdefault(state.density, (each.rung.name, state.particles))
        if state.particles != molecules:
            reason = f"{rung}, of the same density, has {molecules}; what is accepted is one number for each density"
            raise each.refusal("molecules", reason)


def _rung(keys: Layers, state: State, study: Study, home: Path) -> Rung:
    named, sources = columns(keys), repeats(keys.rung, home)
    part, within = kinetic_part(keys, named), intramolecular(keys, study.fluid, named)
    return Rung(
        keys=keys,
        state=state,
        repeats=sources,
        columns=named,
        factors=factors(keys, {COLUMNS[holds] for holds in named}, study.scale),
        is_per_molecule=is_per_molecule(keys, named),
        long_range=long_range(keys, study.fluid),
        kinetic_part=part,
        kinetic_freedom=kinetic_freedom(keys, state.particles, _moves(named, part, within)),
        intramolecular=within,
        interval=interval(keys, named, study.scale),
        frames=frames(keys, len(sources), study.scale, home),
    )


def _moves(named: Mapping[str, str | int], part: str | None, within: str) -> str:
    """Why the kinetic degrees of freedom are needed; empty if they are not."""
    if "kinetic" in named:
        return "columns.kinetic needs it"
    if part == "instantaneous":
        return 'pressure_kinetic = "instantaneous" needs it'
    return "the heat capacity of molecules that move within needs it" if within == "included" else ""
