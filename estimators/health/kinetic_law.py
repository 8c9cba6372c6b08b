"""Whether the kinetic energy follows the law of its temperature.

K of f degrees of freedom at temperature T is gamma-distributed with shape f/2 and scale T, whatever the forces are.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from estimators.covariance import covariance
from estimators.estimate import combine, mean
from estimators.health.excess import CERTAIN, excess, jointly, too_short
from estimators.health.reading import Reading
from sampler.series import Series

__all__ = ["kinetic_law"]

CHECK = "kinetic-law"
STEP_ERROR = 0.005  # share by which a finite time step may move the mean: baoab by 0.2 % at dt 0.005 in a liquid
SURE = 0.9  # of the lack that lowest order says: the next takes off a few percent


def kinetic_law(series: Sequence[Series], *, level: float) -> Reading | None:
    """Mean and variance of the kinetic energy of one rung against f T/2 and f T^2/2, as one deviate.

    series : repeats of one rung, already cut
    A mean lower by up to 0.5 % is the known error of finite time steps and allowed, with up to 1 % in the variance;
    none of our schemes heats. Where the Laplacian of U was recorded the mean must be as low as the scheme makes it:
    baoab's is by dt^2/4 of <nabla^2 U>/(3N), to lowest order (B. Leimkuhler, C. Matthews, J. Chem. Phys. 138, 174102
    (2013)). Where it was not, the scheme is not ours, and the mean may be higher by as much: of a motion of frequency
    omega, velocities half a step beside the positions hold 1/cos^2(omega dt/2) of the kinetic energy of those between
    them, and the bath may hold either at its temperature. The variance is judged by its logarithm, nearly normal.
    None without a bath, without kinetic energies, or with fewer than 50 effective samples of them.
    """
    if not series or not all(each.bath and each.has("kinetic") for each in series):
        return None
    freedom, temperature = series[0].kinetic_freedom, series[0].state.temperature
    kinetic = {each.chain: 2.0 * each.column("kinetic") / (freedom * temperature) for each in series}
    average = mean(kinetic)
    if too_short(average):
        return None
    variance = covariance(kinetic, kinetic) * (0.5 * freedom)
    varied = variance.value > 0.0
    low, high = _allowed(series)
    off = excess(combine(np.log, variance), 2.0 * math.log(low), 2.0 * math.log(max(high, 1.0))) if varied else CERTAIN
    meaning = (
        f"the kinetic energy has {average.value:.4f} of the mean and {variance.value:.3f} of the variance that it "
        f"has at temperature {temperature:g}, +- {math.sqrt(average.variance):.1g} and "
        f"{math.sqrt(variance.variance):.1g}; another mean means another temperature or too large a time step, another "
        "variance a thermostat that does not draw the canonical ensemble"
    )
    statistic = jointly(excess(average, low, high), off)
    return Reading.deviation(CHECK, statistic, level, meaning)


def _allowed(series: Sequence[Series]) -> tuple[float, float]:
    """Lowest and highest mean that time steps explain, over that of the temperature."""
    if not all(each.has("laplacian") for each in series):
        return 1.0 - STEP_ERROR, 1.0 + STEP_ERROR
    bend = np.mean(np.concatenate([each.column("laplacian") for each in series])) / series[0].kinetic_freedom
    return 1.0 - STEP_ERROR, 1.0 - min(SURE * series[0].kinetic_lag * float(bend), STEP_ERROR)
