"""Whether the box is wide enough: for the structure of the fluid, and beside another number of particles."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

import numpy as np

from estimators.estimate import Estimate
from estimators.health.excess import excess, jointly, too_short
from estimators.health.reading import Reading
from estimators.structure import Structure
from sampler.series import Series

__all__ = ["box", "two_sizes"]

CHECK = "box"
OUTERMOST = 0.1  # of the distances up to half the box
ALLOWED = 0.05  # what the third shell of a liquid of 256 particles leaves at half the box, with some to spare
UNSURE = 0.5  # of the known difference between two sizes: beyond 1/N, and of a fluid that the reference is only near to
LOOKED_AT = {"residual_energy": "u", "pressure": "P", "residual_heat_capacity": "c_v"}


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
    return Reading.deviation(
        CHECK,
        max(abs(off) - ALLOWED, 0.0) / error,
        level,
        f"g(r) at half the box is {off:+.3f} beside its mean in the corners (standard error at most {error:.2g}), of "
        f"which {ALLOWED:g} is allowed; if it fails, structure reaches across the box: take more particles",
    )


def two_sizes(
    own: Mapping[str, Estimate],
    other: Mapping[str, Estimate],
    known: Mapping[str, float],
    *,
    particles: tuple[int, int],
    level: float,
) -> Reading | None:
    """Whether u, P and c_v of one state are the same with two numbers of particles, as one deviate.

    own, other : estimates by property, reduced units
    known : own less other as far as a closed box is known to differ; nothing is allowed where a property is not in it
    particles : of own and of other
    What is known is taken off, and half of its size is allowed besides: it is the first order in 1/N, from derivatives
    of a reference for this fluid or one near to it, and leaves out what periodic images add.
    None where no property has 50 effective samples in both.
    """
    readings = []
    for name, symbol in LOOKED_AT.items():
        if name in own and name in other and not (too_short(own[name]) or too_short(other[name])):
            shift = known.get(name, 0.0)
            difference, slack = own[name] - other[name], UNSURE * abs(shift)
            expected = f" ({shift:+.1g} expected)" if name in known else ""
            told = f"{symbol} by {difference.value:+.2g} +- {difference.standard_error:.1g}{expected}"
            readings.append((excess(difference - shift, -slack, slack), told))
    if not readings:
        return None
    return Reading.deviation(
        CHECK,
        jointly(*(deviate for deviate, _ in readings)),
        level,
        f"{particles[0]} particles differ from {particles[1]} in {', '.join(told for _, told in readings)}; what is "
        "expected of a closed box may be wrong by half; if it fails, values depend on the size of the box beyond "
        f"that: take more than {max(particles)} particles, and not near a critical point or between two phases",
    )
