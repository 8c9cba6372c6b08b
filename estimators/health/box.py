"""Whether the box is wide enough for the structure of the fluid."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from estimators.health.reading import Reading, threshold
from estimators.structure import Structure
from sampler.series import Series

__all__ = ["box"]

OUTERMOST = 0.1  # of the distances up to half the box
ALLOWED = 0.05  # what the third shell of a liquid of 256 particles leaves at half the box, with some to spare


def box(series: Sequence[Series], structure: Structure | None, *, level: float) -> Reading | None:
    """Whether g(r) of one rung is flat at half the box.

    None without g(r). That the cutoff is within half the box is asked for before anything is sampled.

    g over the outermost tenth of r is held against its mean over the corners of the box beyond r = L/2. That mean
    follows exactly from the neighbours counted inside, as each particle has N - 1 in all, and includes what a fixed N
    does to g at large distance, 1 + (1 - S(0))/N here (J. L. Lebowitz, J. K. Percus, Phys. Rev. 122, 1675 (1961)).
    """
    if structure is None:
        return None
    state = series[0].state
    neighbours = state.particles - 1
    edge = 1.5 * structure.r[-1] - 0.5 * structure.r[-2]
    share = 4.0 / 3.0 * math.pi * edge**3 / state.volume
    corners = (1.0 - float(structure.coordination[-1]) / neighbours) / (1.0 - share)
    outer = structure.r > (1.0 - OUTERMOST) * edge
    weights = structure.r[outer] ** 2 / np.sum(structure.r[outer] ** 2)
    off = float(weights @ structure.g[outer]) - corners
    error = float(weights @ structure.standard_error[outer])
    if not 0.0 < error < math.inf:
        return None
    return Reading(
        "box",
        max(abs(off) - ALLOWED, 0.0) / error,
        threshold(level),
        f"g(r) at half the box is {off:+.3f} beside its mean in the corners (standard error at most {error:.2g}), of "
        f"which {ALLOWED:g} is allowed; if it fails, structure reaches across the box: take more particles",
    )
