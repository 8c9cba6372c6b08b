"""One repeat of a rung that was sampled elsewhere: from its columns to a series."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from canonry.notes import Note
from canonry.recordings import columns, positions
from canonry.spec import Rung
from canonry.stated import COLUMNS
from canonry.suspicion import Times, times
from sampler.fluid import Fluid
from sampler.series import Series

__all__ = ["repeat"]

Floats = npt.NDArray[np.float64]

_SAME_VOLUME = 1e-6  # relative: digits that are written of a volume
_STATED_VOLUME = 1e-3  # relative: digits that people give of a density


def repeat(rung: Rung, number: int, fluid: Fluid) -> tuple[Series, tuple[Note, ...]]:
    """The repeat with this number, and what is to be said about its times.

    Raises UserError where it cannot be read, or is not what was stated.
    """
    found = columns(rung.repeats[number], rung.columns)
    found = {holds: values * rung.factors[COLUMNS[holds]] for holds, values in found.items()}
    _check_volume(rung, found)
    rows = _rows(rung, number, found)
    frames, offset = _frames(rung, number, rows)
    series = Series(
        fluid=fluid,
        state=rung.state,
        repeat=number,
        bath=True,
        interval=rows.interval,
        ledger=None,
        frames=frames,
        frame_stride=rung.frames.every if rung.frames else 1,
        frame_offset=offset,
        freedom=rung.kinetic_freedom,
        **_columns(rung, {holds: values[rows.rows] for holds, values in found.items()}, fluid),
    )
    return series, rows.notes


def _check_volume(rung: Rung, found: Mapping[str, Floats]) -> None:
    if "volume" not in found:
        return
    ratio = found["volume"] / rung.state.volume
    if float(np.ptp(ratio)) > _SAME_VOLUME:
        reason = "the volume varies: samples at a set pressure are not taken, but canonical ones only (NVT)"
        raise rung.keys.refusal("columns.volume", reason)
    if not math.isclose(ratio[0], 1.0, rel_tol=_STATED_VOLUME):
        reason = f"the volume is {ratio[0]:.6g} times that of the state; what is needed are the same"
        raise rung.keys.refusal("columns.volume", reason)


def _rows(rung: Rung, number: int, found: Mapping[str, Floats]) -> Times:
    if rung.interval is not None:
        return Times(np.arange(len(next(iter(found.values())))), rung.interval, ())
    rows = times(found["time"])
    if rows is None:
        raise rung.keys.refusal("columns.time", f"the times of repeat {number} do not rise; what is needed is a time")
    return rows


def _frames(rung: Rung, number: int, rows: Times) -> tuple[Floats, int]:
    """Positions inside the box, and the samples missing of the stride that the first frame ends."""
    particles, asked = rung.state.particles, rung.frames
    if asked is None:
        return np.empty((0, particles, 3)), 0
    if not np.array_equal(rows.rows, np.arange(len(rows.rows))):
        raise rung.keys.refusal("frames", "they are told by row, but times stand twice; what is needed is each once")
    found = positions(asked.repeats[number], particles) * asked.factor
    last = asked.first + (len(found) - 1) * asked.every
    if last > len(rows.rows):
        reason = f"the last of {len(found)} frames would belong to row {last} of {len(rows.rows)}"
        raise rung.keys.refusal("frames.every", f"{reason}; what is needed is the number of rows from frame to frame")
    box = rung.state.box
    found -= box * np.floor(found / box)
    found[found >= box] = 0.0
    return found, asked.every - asked.first


def _columns(rung: Rung, found: Mapping[str, Floats], fluid: Fluid) -> dict[str, Any]:
    """Those of a series, extensive, with the long-range part where it lacked and the model has one."""
    state = rung.state
    size = state.particles if rung.is_per_molecule else 1
    raw = {holds: size * values for holds, values in found.items() if COLUMNS[holds] == "energy"}
    tail = np.zeros(3)
    if fluid.has_pairs and not rung.long_range:
        tail = state.particles * np.array(fluid.tail(state.density))
    energy = None if rung.intramolecular == "included" else _shifted(raw.get("potential"), tail[0])
    sampled = raw.get("dynamical", None if rung.intramolecular == "left out" else raw.get("potential"))
    virial = _shifted(_virial(rung, found, raw), tail[1])
    hypervirial = _shifted(raw.get("hypervirial"), tail[2])
    if hypervirial is None and energy is not None and virial is not None:
        hypervirial = fluid.hypervirial(energy, virial)
    return {
        "energy": energy,
        "sampled_energy": _shifted(sampled, tail[0]),
        "virial": virial,
        "hypervirial": None if _is_noisy(rung) else hypervirial,
        "kinetic": raw.get("kinetic"),
    }


def _shifted(values: Floats | None, shift: float) -> Floats | None:
    return None if values is None else values + shift


def _is_noisy(rung: Rung) -> bool:
    """Whether the kinetic energy of the moment stays in the virial, which the bulk modulus cannot bear."""
    return rung.kinetic_part == "instantaneous" and "kinetic" not in rung.columns


def _virial(rung: Rung, found: Mapping[str, Floats], raw: Mapping[str, Floats]) -> Floats | None:
    """W such that the pressure is rho T + <W>/V, with rho the density of molecules.

    A pressure that follows the kinetic energy K holds 2 K/(3 V). Where molecules are more than points, K is more than
    that of their motion as a whole, and what forces within them hold is less by as much on average.
    """
    if "pressure" not in found:
        return raw.get("virial")
    state, freedom = rung.state, rung.kinetic_freedom
    product, ideal = found["pressure"] * state.volume, state.particles * state.temperature
    if rung.kinetic_part == "set" or freedom is None:
        return product - ideal
    expected = freedom * state.temperature / 3.0
    are_points = freedom in (3 * state.particles, 3 * state.particles - 3)
    moving = 2.0 / 3.0 * raw["kinetic"] if "kinetic" in raw else expected
    return product - moving + (0.0 if are_points else expected - ideal)
