"""Whether positions are those of the temperature stated, from forces and their slopes."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

import numpy as np
import numpy.typing as npt

from estimators.estimate import Chain, Estimate, combine, mean
from estimators.health.excess import excess, too_short
from estimators.health.reading import Reading
from sampler.fluid import Fluid, State
from sampler.series import FrameSums, Series

__all__ = ["force_temperature", "surface_laplacian"]

Floats = npt.NDArray[np.float64]

Sums = Mapping[Chain, tuple[Floats, Floats]]
"""Squared force over temperature and Laplacian of U."""
ALLOWED = 0.002  # of the temperature: what a time step of 0.005 may shift


def force_temperature(
    series: Sequence[Series],
    frames: Mapping[Chain, FrameSums] | None,
    *,
    level: float,
    contact: Estimate | float = 1.0,
) -> Reading | None:
    """Configurational temperature of one rung against the temperature stated, or without a bath the kinetic one.

    frames : evaluated again, where forces were not recorded with every sample
    contact : g(r_c); 1 is good to a few parts in 10^5 of the temperature
    None if fewer than 50 effective samples are there, or the temperature without a bath cannot be told.

    At constant temperature <sum F^2> = T <sum nabla^2 U> for any number of particles, as the Boltzmann factor has no
    boundary in a periodic box (H. H. Rugh, Phys. Rev. Lett. 78, 772 (1997); B. D. Butler, G. Ayton, O. G. Jepps,
    D. J. Evans, J. Chem. Phys. 109, 6519 (1998)). At constant energy that ratio is off by a term of order 1/N; a
    configuration weighs K^(a-1) there, a = f/2, so that <(a-1) sum F^2 / K> = <sum nabla^2 U> holds without one.
    """
    if not (series[0].bath or all(each.has("kinetic") for each in series)):
        return None
    found = _recorded(series) or _again(series, frames or {})
    if found is None:
        return None
    forces, curvature = (mean({chain: both[k] for chain, both in found.items()}) for k in (0, 1))
    curvature = curvature + surface_laplacian(series[0].fluid, series[0].state) * contact
    off = combine(lambda force, slope: force / slope - 1.0, forces, curvature)
    if too_short(off):
        return None
    return Reading.deviation(
        "force-temperature",
        excess(_unskewed(off), -ALLOWED, ALLOWED),
        level,
        f"forces and their slopes say a temperature {100.0 * off.value:+.2f} % (standard error "
        f"{100.0 * off.standard_error:.2f} %) beside the one stated, of which {100.0 * ALLOWED:g} % are allowed to the "
        "time step; if it fails, take a smaller time step, and see that temperature and fluid are those of the samples",
    )


def surface_laplacian(fluid: Fluid, state: State) -> float:
    """Mean of the sum over particles of nabla^2 U that the jump of the force at the cutoff adds, per unit of g(r_c).

    A pair at r_c adds -2 u'(r_c) delta(r - r_c): -4 pi (N - 1) rho r_c^2 u'(r_c), epsilon/sigma^2; zero where the
    force is continuous.
    """
    slope = float(fluid.pair_virial(np.asarray(np.nextafter(fluid.cutoff, 0.0)))) / fluid.cutoff
    return -4.0 * math.pi * (state.particles - 1) * state.density * fluid.cutoff**2 * slope


def _recorded(series: Sequence[Series]) -> Sums | None:
    """Of every sample; None where forces were not recorded."""
    if not all(each.has("force_square", "laplacian") for each in series):
        return None
    return {
        each.chain: (each.column("force_square") / _temperatures(each, slice(None)), each.column("laplacian"))
        for each in series
    }


def _again(series: Sequence[Series], frames: Mapping[Chain, FrameSums]) -> Sums | None:
    """Of every frame; None where a repeat has none."""
    if not all(each.chain in frames and len(frames[each.chain].laplacian) for each in series):
        return None
    return {
        each.chain: (
            frames[each.chain].force_square / _temperatures(each, each.frame_samples),
            frames[each.chain].laplacian,
        )
        for each in series
    }


def _temperatures(each: Series, samples: slice | npt.NDArray[np.int_]) -> Floats | float:
    """What the squared forces are to be divided by."""
    if each.bath:
        return each.state.temperature
    a = 0.5 * each.kinetic_freedom
    return np.asarray(each.column("kinetic")[samples] / (a - 1.0))


def _unskewed(estimate: Estimate) -> Estimate:
    """The estimate moved so that its deviation from 0 in standard errors t is normal although it is skewed by g.

    t + g/6 + g t^2/3 + g^2 t^3/27, which rises with t everywhere (P. Hall, J. R. Stat. Soc. B 54, 221 (1992)). Squared
    forces in a gas are rare and large: their mean is low where its error is small.
    """
    error, skew = math.sqrt(estimate.variance), estimate.skewness
    if not 0.0 < error < math.inf:
        return estimate
    t = estimate.value / error
    return estimate + error * (skew / 6.0 + skew * t**2 / 3.0 + skew**2 * t**3 / 27.0)
