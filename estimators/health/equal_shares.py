"""Whether kinetic energy is shared equally between x, y and z, and nothing flows."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from estimators.estimate import combine, mean
from estimators.health.excess import CERTAIN, excess, jointly, too_short
from estimators.health.reading import Reading
from sampler.series import Series

__all__ = ["equal_shares"]

CHECK = "equal-shares"
AXES = "xyz"
STILL = 0.01  # total momentum over sqrt(N m T) that counts as none where it is conserved


def equal_shares(series: Sequence[Series], *, level: float) -> list[Reading] | None:
    """Equipartition between x, y and z, and the total momentum of one rung.

    series : repeats of one rung, already cut
    The momentum along each axis has mean zero and mean square N m T where 3N degrees of freedom take part, at any time
    step, as forces do not change it; it is zero where fewer do, as it is conserved.
    None for what was not recorded, or has fewer than 50 effective samples; None if nothing is left.
    """
    readings = [each for each in (_shares(series, level), _flow(series, level)) if each is not None]
    return readings or None


def _shares(series: Sequence[Series], level: float) -> Reading | None:
    if not series or not all(each.has("kinetic_parts") for each in series):
        return None
    scale = 3.0 / (series[0].kinetic_freedom * series[0].state.temperature)
    parts = {each.chain: scale * 2.0 * each.column("kinetic_parts") for each in series}
    off = [mean({chain: each[:, axis] - each.mean(axis=1) for chain, each in parts.items()}) for axis in range(3)]
    if any(map(too_short, off)):
        return None
    worst = max(range(3), key=lambda axis: abs(off[axis].value))
    meaning = (
        f"along {AXES[worst]} the kinetic energy differs from the mean of all three directions by "
        f"{100.0 * off[worst].value:+.2g} %, +- {100.0 * math.sqrt(off[worst].variance):.1g}; a difference means that "
        "the thermostat or the forces favour a direction, or that the samples are not in equilibrium"
    )
    return Reading.deviation(CHECK, jointly(*(excess(each, 0.0, 0.0) for each in off)), level, meaning)


def _flow(series: Sequence[Series], level: float) -> Reading | None:
    if not series or not all(each.has("momentum") for each in series):
        return None
    state = series[0].state
    thermal = math.sqrt(state.particles * state.temperature)
    momenta = {each.chain: each.column("momentum") / thermal for each in series}
    if series[0].kinetic_freedom < 3 * state.particles:
        return _still(max(float(np.max(np.abs(each), initial=0.0)) for each in momenta.values()))
    means = [mean({chain: each[:, axis] for chain, each in momenta.items()}) for axis in range(3)]
    square = mean({chain: np.mean(each**2, axis=1) for chain, each in momenta.items()})
    if any(map(too_short, means)):
        return None
    worst = max(range(3), key=lambda axis: abs(means[axis].value))
    meaning = (
        f"the total momentum has mean {means[worst].value:+.2g} along {AXES[worst]}, +- "
        f"{math.sqrt(means[worst].variance):.1g}, and mean square {square.value:.2f}, +- "
        f"{math.sqrt(square.variance):.1g}, of 1 that is thermal; a mean other than zero is a flow, another square a "
        "bath that does not act on the fluid as a whole"
    )
    width = excess(combine(np.log, square), 0.0, 0.0) if square.value > 0.0 else CERTAIN
    return Reading.deviation(CHECK, jointly(width, *(excess(each, 0.0, 0.0) for each in means)), level, meaning)


def _still(largest: float) -> Reading:
    meaning = (
        f"the total momentum reaches {largest:.2g} of what is thermal, where it is conserved and should be zero; the "
        "fluid flows as a whole, so remove its momentum at the start"
    )
    return Reading(CHECK, largest, STILL, meaning)
