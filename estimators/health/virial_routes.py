"""Whether the pressure is the same from the virial on record, from g(r), and from a small change of the volume."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import numpy.typing as npt

from estimators.canonical import kinetic_temperature
from estimators.estimate import Chain, Estimate, exact, mean
from estimators.health.excess import excess, too_short
from estimators.health.reading import Reading
from estimators.structure import Structure
from sampler.series import FrameSums, Series

__all__ = ["virial_of_volume", "virial_routes"]

Floats = npt.NDArray[np.float64]

CHECK = "virial-routes"
ALLOWED_MISMATCH = 0.02  # of the scatter of what is on record
ALLOWED_BINNING = 4e-4  # of kinetic and virial pressure; counting in narrow bins leaves up to 2e-4 in a dense liquid


def virial_routes(
    series: Sequence[Series],
    structure: Structure | None,
    frames: Mapping[Chain, FrameSums] | None,
    *,
    level: float,
) -> list[Reading] | None:
    """Routes to the pressure of one rung, all from the same frames, so that their common fluctuations cancel.

    series : with the frames that `frames` are of
    Energy and virial on record are held against those of the stored positions frame by frame, the virial as the change
    of U_dyn with the volume: what forces conserve has no jump at the cutoff, and long-range parts, which follow other
    rules, are left out of both. g(r) is held against the mean virial on record.
    None if no virial was recorded or there are neither frames nor g(r).
    """
    framed = [each for each in series if len(each.frames) and each.has("virial", "sampled_energy")]
    if not framed:
        return None
    readings = []
    if frames is not None:
        readings += [_record_of_energy(framed, frames), _record_of_virial(framed, frames)]
    if structure is not None:
        readings += _from_structure(framed, structure, level)
    return readings or None


def _record_of_energy(series: Sequence[Series], frames: Mapping[Chain, FrameSums]) -> Reading:
    recorded = [each.column("sampled_energy")[each.frame_samples] for each in series]
    mismatch = _mismatch(recorded, [frames[each.chain].energy for each in series])
    return Reading(
        CHECK,
        mismatch,
        ALLOWED_MISMATCH,
        f"energies on record differ from those of the stored positions by {mismatch:.2g} of their scatter; if it "
        "fails, they are of another fluid or another moment than the positions: check what was recorded when",
    )


def _record_of_virial(series: Sequence[Series], frames: Mapping[Chain, FrameSums]) -> Reading:
    recorded = [each.column("virial")[each.frame_samples] - _tail(each)[1] for each in series]
    mismatch = _mismatch(recorded, [virial_of_volume(each, frames[each.chain]) for each in series])
    return Reading(
        CHECK,
        mismatch,
        ALLOWED_MISMATCH,
        f"virials on record differ from the change of energy in a slightly larger and smaller volume by {mismatch:.2g} "
        "of their scatter; if it fails, they are of another fluid or another moment than the positions, or in another "
        "unit",
    )


def _mismatch(recorded: Sequence[Floats], found: Sequence[Floats]) -> float:
    """Root mean square of the differences over the standard deviation of what was found."""
    differences, values = np.concatenate(recorded) - np.concatenate(found), np.concatenate(found)
    scatter = float(np.std(values))
    off = float(np.sqrt(np.mean(differences**2)))
    return off / scatter if scatter > 0.0 else off


def _tail(each: Series) -> tuple[float, float]:
    """Long-range part of U and W."""
    energy, virial, _ = each.fluid.tail(each.state.density)
    return each.state.particles * energy, each.state.particles * virial


def virial_of_volume(each: Series, sums: FrameSums) -> Floats:
    """W of the pairs inside the cutoff of each frame, (m,): -V dU_dyn/dV, whose long-range part goes as the density."""
    tail, change = _tail(each)[0], sums.change
    stretched, squeezed = sums.stretched - tail / (1.0 + change), sums.squeezed - tail / (1.0 - change)
    return np.asarray((squeezed - stretched) / (2.0 * change), dtype=float)


def _from_structure(series: Sequence[Series], structure: Structure, level: float) -> list[Reading]:
    state = series[0].state
    if structure.pressure is None:
        return []
    virial = mean({each.chain: each.column("virial")[each.frame_samples] for each in series})
    temperature = exact(state.temperature) if series[0].bath else kinetic_temperature(series)
    own = virial / state.volume + temperature * state.density
    difference: Estimate = structure.pressure - own
    if too_short(difference):
        return []
    slack = ALLOWED_BINNING * (state.density * temperature.value + abs(virial.value) / state.volume)
    return [
        Reading.deviation(
            CHECK,
            excess(difference, -slack, slack),
            level,
            f"over the same positions the pressure is {own.value:.5g} from the virial on record and "
            f"{own.value + difference.value:.5g} from g(r) (standard error of the difference "
            f"{difference.standard_error:.2g}); if they differ, the virial is of another fluid or moment, or in "
            "another unit, than stated",
        )
    ]
