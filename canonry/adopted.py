"""Adopted samples on disk, one file for each repeat: rungs/<density>-<temperature>/repeat-<n>/samples.h5.

Such a file is HDF5. Its datasets, float64, extensive and in reduced units, are the columns adopted, each (n,):

energy, sampled_energy, virial, hypervirial, kinetic : as in `sampler.series.Series`
frames : (m, molecules, 3), positions inside the box; no rows where there are none

The attribute `facts` is JSON: the fluid and state, the repeat, `interval` between samples, `freedom` (kinetic degrees
of freedom), `frame_stride` and `frame_offset`, `source`, the description it came from, and `doubts`, names of
`canonry.notes.DOUBTS`. `checksum` is SHA-256 over both.
"""

from __future__ import annotations

import json
from collections.abc import Collection
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Any

from canonry.errors import UserError

if TYPE_CHECKING:
    from canonry.study import Study
    from sampler.fluid import Fluid, State
    from sampler.series import Series

__all__ = ["COLUMNS", "doubts", "is_adopted", "load", "save"]

COLUMNS = ("energy", "sampled_energy", "virial", "hypervirial", "kinetic")
_FILE = "samples.h5"
_KEPT = ("interval", "freedom", "frame_stride", "frame_offset")


def is_adopted(directory: Path) -> bool:
    """Whether a directory holds adopted samples."""
    return any(directory.glob(f"rungs/*/*/{_FILE}"))


def save(series: Series, directory: Path, *, source: str, doubts: Collection[str] = ()) -> None:
    """Write one repeat, whole or not at all, with the doubts that its notes leave. Raises OSError."""
    from sampler.store import deposit

    arrays = {name: series.column(name) for name in sorted((*COLUMNS, "frames")) if series.has(name)}
    facts = {**_identity(series.fluid, series.state), "repeat": series.repeat, "source": source, "doubts": [*doubts]}
    facts |= {name: getattr(series, name) for name in _KEPT}
    deposit(_rung(directory, series.state) / f"repeat-{series.repeat}" / _FILE, arrays, facts)


def load(study: Study, directory: Path, state: State) -> list[Series]:
    """The repeats of one rung. Raises UserError where a file is damaged or belongs to another study."""
    return [_series(path, study.fluid, state) for path in _paths(directory, state)]


def doubts(directory: Path, state: State) -> list[str]:
    """Names of the doubts that notes of one rung's repeats leave, each once; of files that `load` found whole."""
    import h5py

    found: dict[str, None] = {}
    for path in _paths(directory, state):
        with h5py.File(path, "r") as file:
            found |= dict.fromkeys(json.loads(file.attrs["facts"])["doubts"])
    return [*found]


def _rung(directory: Path, state: State) -> Path:
    return directory / "rungs" / f"{float(state.density)!r}-{float(state.temperature)!r}"


def _paths(directory: Path, state: State) -> list[Path]:
    """The files of a rung, by repeat."""
    return sorted(_rung(directory, state).glob(f"repeat-*/{_FILE}"), key=lambda path: int(path.parent.name[7:]))


def _identity(fluid: Fluid, state: State) -> dict[str, Any]:
    cut = asdict(fluid) if fluid.has_pairs else {"potential": fluid.potential}
    return {**cut, **asdict(state)}


def _series(path: Path, fluid: Fluid, state: State) -> Series:
    from sampler.errors import DamagedSegment
    from sampler.series import Series
    from sampler.store import retrieve

    try:
        arrays, facts = retrieve(path)
    except DamagedSegment as problem:
        raise UserError(f"{problem}; what is needed is to adopt the samples again, into a new directory") from None
    for name, wanted in _identity(fluid, state).items():
        if facts.get(name) != wanted:
            raise UserError(
                f"{path}: it was adopted with {name} {facts.get(name)}, in study.toml it is {wanted}; what is needed "
                "is study.toml as `canonry adopt` wrote it, but for title and [compare]"
            )
    columns: dict[str, Any] = {name: arrays.get(name) for name in COLUMNS}
    return Series(
        fluid=fluid,
        state=state,
        repeat=facts["repeat"],
        bath=True,
        ledger=None,
        frames=arrays["frames"],
        **columns,
        **{name: facts[name] for name in _KEPT},
    )
