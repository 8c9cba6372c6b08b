"""Whether the sample is one homogeneous fluid: density in sub-boxes, crystalline order, sign of the bulk modulus."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from estimators.compiled import kernel
from estimators.estimate import Estimate, combine, mean
from estimators.health.excess import excess
from estimators.health.reading import Reading
from sampler.series import Series

__all__ = ["crystalline_order", "number_variance", "one_phase"]

Floats = npt.NDArray[np.float64]

CHECK = "one-phase"
CELLS = 6  # along each edge, of which sub-boxes of a half and a third are made up
FEWEST_FRAMES = 8
NEIGHBOURS_WITHIN = 1.4  # density^(-1/3): between the first and second neighbours of fcc (1.12, 1.59) and of liquids
ALLOWED_ORDER = (0.08, 1.0)  # Q6, and what goes with N^(-1/2): dense liquids have 0.7 to 0.8 of that


def one_phase(series: Sequence[Series], *, level: float, bulk_modulus: Estimate | None = None) -> list[Reading] | None:
    """Density, order and stability of one rung; crystals are looked for in each repeat by itself.

    bulk_modulus : isothermal, of the rung
    None if there are neither eight frames nor a bulk modulus.
    """
    framed = [each for each in series if len(each.frames)]
    readings = [_homogeneity(framed, level)] if sum(len(each.frames) for each in framed) >= FEWEST_FRAMES else []
    readings += [_order(each, level) for each in framed if len(each.frames) >= FEWEST_FRAMES]
    if bulk_modulus is not None and math.isfinite(bulk_modulus.variance):
        readings.append(_stability(bulk_modulus, level))
    return readings or None


def _homogeneity(series: Sequence[Series], level: float) -> Reading:
    """Inverse compressibility from sub-boxes.

    The variance of the number of particles in a sub-box over that of an ideal gas, chi, is 1/chi = (1 + c/l)/chi_inf in
    a homogeneous fluid, l the edge of the sub-box, with c of a few correlation lengths: fluctuations across its walls
    are correlated (M. Rovere, D. W. Heermann, K. Binder, J. Phys.: Condens. Matter 2, 7009 (1990)). Halves and thirds
    of the box's edge give 1/chi_inf = 3/chi_2 - 2/chi_3, positive as compressibilities are. Two phases have chi grow as
    l^3 up to their own size, and l^2 is enough to make it negative.
    """
    thirds, halves = (
        mean({each.chain: number_variance(each.frames, each.state.box, parts) for each in series}) for parts in (3, 2)
    )
    inverse = combine(lambda half, third: 3.0 / half - 2.0 / third, halves, thirds)
    return Reading.deviation(
        CHECK,
        excess(inverse, low=0.0),
        level,
        f"particle numbers in sub-boxes of half and a third of the edge vary {halves.value:.3g} and {thirds.value:.3g} "
        f"times as much as in an ideal gas, so that the inverse compressibility of a homogeneous fluid would be "
        f"{inverse.value:.3g} (standard error {inverse.standard_error:.2g}); a negative one means two phases in the "
        "box, or density fluctuations as large as it: choose a state outside the two-phase region",
    )


def number_variance(frames: Floats, box: float, parts: int) -> Floats:
    """Variance of the number of particles in sub-boxes, over that of an ideal gas of as many particles, (m,).

    frames : (m, particles, 3), inside the cube of edge `box` or not
    parts : the edge of a sub-box is the parts-th of the box's, 2 or 3; all 216 places of it on a grid are averaged
    """
    particles = frames.shape[1]
    cells = np.floor(frames * (CELLS / box)).astype(np.int64) % CELLS
    places = (cells[..., 0] * CELLS + cells[..., 1]) * CELLS + cells[..., 2]
    counts = np.array([np.bincount(frame, minlength=CELLS**3) for frame in places]).reshape(-1, CELLS, CELLS, CELLS)
    for axis in (1, 2, 3):
        counts = np.sum([np.roll(counts, shift, axis) for shift in range(CELLS // parts)], axis=0)
    share = 1.0 / parts**3
    squares = np.mean((counts - particles * share) ** 2, axis=(1, 2, 3))
    return np.asarray(squares / (particles * share * (1.0 - share)), dtype=float)


def _order(each: Series, level: float) -> Reading:
    order = mean({each.chain: crystalline_order(each.frames, each.state.box)})
    allowed = ALLOWED_ORDER[0] + ALLOWED_ORDER[1] / math.sqrt(each.state.particles)
    return Reading.deviation(
        CHECK,
        excess(order, high=allowed),
        level,
        f"bonds between neighbours have the order Q6 = {order.value:.3f} (standard error {order.standard_error:.2g}), "
        f"of which {allowed:.2g} is allowed to chance; a liquid has about half of that, a crystal 0.4 to 0.57: choose "
        "a state on the fluid side of freezing",
        each.repeat,
    )


def crystalline_order(frames: Floats, box: float) -> Floats:
    """Global bond-orientational order Q6 of frames, (m,): 0.575 for fcc, 0.485 for hcp, 1/sqrt(bonds) by chance.

    frames : (m, particles, 3), inside the cube of edge `box` or not
    A bond joins nearest images closer than 1.4 density^(-1/3) and than half the box; without any, the order is 0.
    P. J. Steinhardt, D. R. Nelson, M. Ronchetti, Phys. Rev. B 28, 784 (1983).
    """
    reach = box * min(NEIGHBOURS_WITHIN / frames.shape[1] ** (1.0 / 3.0), 0.5)
    return np.asarray(_order_of_bonds(np.ascontiguousarray(frames, dtype=float), box, reach), dtype=float)


@kernel
def _order_of_bonds(frames, box, reach):  # type: ignore[no-untyped-def]
    """Q6 of each frame, from spherical harmonics of degree 6 written out and scaled by sqrt(4 pi / 13)."""
    m, n, _ = frames.shape
    orders = np.zeros(m)
    real, imaginary, legendre = np.empty(7), np.empty(7), np.empty(7)
    weights = (1.0 / 256.0, 84.0 / 256.0, 105.0 / 512.0, 105.0 / 128.0, 63.0 / 256.0, 693.0 / 128.0, 231.0 / 512.0)
    for f in range(m):
        bonds = 0
        for k in range(7):
            real[k] = imaginary[k] = 0.0
        for i in range(n - 1):
            for j in range(i + 1, n):
                x, y, z = frames[f, j, 0] - frames[f, i, 0], frames[f, j, 1] - frames[f, i, 1], 0.0
                x -= box * np.rint(x / box)
                y -= box * np.rint(y / box)
                z = frames[f, j, 2] - frames[f, i, 2]
                z -= box * np.rint(z / box)
                square = x * x + y * y + z * z
                if square >= reach * reach or square == 0.0:
                    continue
                bonds += 1
                scale = 1.0 / np.sqrt(square)
                x, y, z = x * scale, y * scale, z * scale
                t = z * z
                legendre[0] = ((231.0 * t - 315.0) * t + 105.0) * t - 5.0
                legendre[1] = ((33.0 * t - 30.0) * t + 5.0) * z
                legendre[2] = (33.0 * t - 18.0) * t + 1.0
                legendre[3] = (11.0 * t - 3.0) * z
                legendre[4] = 11.0 * t - 1.0
                legendre[5] = z
                legendre[6] = 1.0
                a, b = 1.0, 0.0
                for k in range(7):
                    real[k] += legendre[k] * a
                    imaginary[k] += legendre[k] * b
                    a, b = a * x - b * y, a * y + b * x
        total = 0.0
        for k in range(7):
            total += weights[k] * (real[k] * real[k] + imaginary[k] * imaginary[k])
        orders[f] = np.sqrt(total) / bonds if bonds else 0.0
    return orders


def _stability(bulk_modulus: Estimate, level: float) -> Reading:
    return Reading.deviation(
        CHECK,
        excess(bulk_modulus, low=0.0),
        level,
        f"the bulk modulus is {bulk_modulus.value:.3g} (standard error {bulk_modulus.standard_error:.2g}); a negative "
        "one belongs to no stable phase: choose a state outside the two-phase region",
    )
