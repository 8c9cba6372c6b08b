"""Segments on disk: written whole or not at all, and read back only if they are whole."""

from __future__ import annotations

import hashlib
import json
import os
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import numpy.typing as npt

from sampler.errors import DamagedSegment, ForeignDirectory
from sampler.fluid import Fluid, State
from sampler.protocol import Protocol

__all__ = ["COLUMNS", "Chain", "Segment", "deposit", "read", "retrieve", "set_aside", "write"]

Floats = npt.NDArray[np.float64]
COLUMNS = (
    *("s12", "s6", "pairs", "distances", "laplacian", "force_square", "ledger"),
    *("kinetic_x", "kinetic_y", "kinetic_z", "momentum_x", "momentum_y", "momentum_z"),
    *("rejected", "kicks"),
)
"""What is recorded of a sample."""
_ARRAYS = ("samples", "frames", "positions", "velocities")


@dataclass(frozen=True)
class Segment:
    """Consecutive steps of one repeat.

    first, last : the steps are first + 1 to last
    samples : (n_samples, 15), columns of COLUMNS
    frames : (n_frames, particles, 3), positions inside the box
    positions, velocities : (particles, 3), at step `last`
    ledger : kinetic energy that the bath has taken up to step `last`
    """

    first: int
    last: int
    samples: Floats
    frames: Floats
    positions: Floats
    velocities: Floats
    ledger: float


@dataclass(frozen=True)
class Chain:
    """One repeat of one rung, and where its segments lie."""

    study: Path
    fluid: Fluid
    state: State
    protocol: Protocol
    repeat: int

    @property
    def folder(self) -> Path:
        """rungs/<density>-<temperature>/repeat-<n>; values are written so that they read back exactly."""
        rung = f"{float(self.state.density)!r}-{float(self.state.temperature)!r}"
        return self.study / "rungs" / rung / f"repeat-{self.repeat}"

    def path(self, index: int) -> Path:
        """File of the segment with this number."""
        return self.folder / f"segment-{index:06d}.h5"

    @property
    def segments(self) -> list[tuple[int, int]]:
        """First and last step of each segment."""
        return self.protocol.segments(self.state.particles)

    @property
    def identity(self) -> dict[str, object]:
        """What all samples of this chain share."""
        return {
            **asdict(self.fluid),
            **asdict(self.state),
            **self.protocol.identity,
            "repeat": self.repeat,
            "recorded": " ".join(COLUMNS),
        }


def _checksum(arrays: Mapping[str, Floats], facts: Mapping[str, object]) -> str:
    digest = hashlib.sha256(json.dumps(facts, sort_keys=True).encode())
    for name, values in arrays.items():
        digest.update(f"{name}{values.shape}".encode())
        digest.update(np.ascontiguousarray(values, dtype="<f8").tobytes())
    return digest.hexdigest()


def write(path: Path, segment: Segment, identity: Mapping[str, object]) -> None:
    """Write a segment whole or not at all. Raises OSError as the system does."""
    facts = {"identity": dict(identity), "first": segment.first, "last": segment.last, "ledger": segment.ledger}
    deposit(path, {name: getattr(segment, name) for name in _ARRAYS}, facts)


def deposit(path: Path, arrays: Mapping[str, Floats], facts: Mapping[str, object]) -> None:
    """Write arrays and facts (JSON) under a temporary name with a checksum, force them to disk, then rename.

    Raises OSError as the system does.
    """
    path.parent.mkdir(parents=True, exist_ok=True)
    temporary = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        with h5py.File(temporary, "w") as file:
            for name, values in arrays.items():
                file.create_dataset(name, data=values, dtype="<f8")
            file.attrs["facts"] = json.dumps(facts, sort_keys=True)
            file.attrs["checksum"] = _checksum(arrays, facts)
        _force_to_disk(temporary)
        os.replace(temporary, path)
        _force_to_disk(path.parent)
    finally:
        temporary.unlink(missing_ok=True)


def _force_to_disk(path: Path) -> None:
    handle = os.open(path, os.O_RDONLY)
    try:
        os.fsync(handle)
    finally:
        os.close(handle)


def read(path: Path, identity: Mapping[str, object]) -> Segment:
    """Read a segment back. Raises DamagedSegment if it is not whole, ForeignDirectory if it is of something else."""
    arrays, facts = retrieve(path, _ARRAYS)
    _check_identity(path, facts["identity"], dict(identity))
    return Segment(first=facts["first"], last=facts["last"], ledger=facts["ledger"], **arrays)


def retrieve(path: Path, names: Sequence[str] | None = None) -> tuple[dict[str, Floats], dict[str, Any]]:
    """Arrays and facts as `deposit` has written them. Raises DamagedSegment if they are not whole.

    names : of the arrays, in the order in which they were given; by default in that of the alphabet
    """
    try:
        with h5py.File(path, "r") as file:
            arrays = {name: np.asarray(file[name][()], dtype=float) for name in names or sorted(file)}
            facts = json.loads(file.attrs["facts"])
            checksum = file.attrs["checksum"]
        whole = checksum == _checksum(arrays, facts)
    except (OSError, KeyError, TypeError, ValueError, RuntimeError) as error:
        raise DamagedSegment(f"{path} cannot be read back ({type(error).__name__})") from error
    if not whole:
        raise DamagedSegment(f"{path} does not match its checksum")
    return arrays, facts


def _check_identity(path: Path, found: Mapping[str, object], wanted: Mapping[str, object]) -> None:
    for name in sorted(found.keys() | wanted.keys()):
        if found.get(name) != wanted.get(name):
            raise ForeignDirectory(
                f"{path} was sampled with {name} {found.get(name)!r}, asked for is {wanted.get(name)!r}; "
                "samples of another study are kept: choose another directory, or the study that made them"
            )


def set_aside(path: Path) -> Path:
    """Rename a damaged segment so that it is neither used nor lost; returns its new path."""
    for number in range(1, 1_000_000):
        aside = path.with_name(f"{path.name}.damaged-{number}")
        if not aside.exists():
            return path.rename(aside)
    raise DamagedSegment(f"{path} cannot be set aside: too many damaged copies")
