"""Whether the kinetic energy follows the law of its temperature.

K of f degrees of freedom at temperature T is gamma-distributed with shape f/2 and scale T, whatever the forces are.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np

from estimators.covariance import covariance
from estimators.estimate import combine, mean
from estimators.health.excess import excess, jointly, too_short
from estimators.health.reading import Reading, deviate, threshold
from sampler.series import Series

__all__ = ["kinetic_law"]

CHECK = "kinetic-law"
LOW_MEAN = 0.005  # share by which a finite time step may lower the mean: baoab does by 0.2 % at dt 0.005 in a liquid
LOW_VARIANCE = 0.01


def kinetic_law(series: Sequence[Series], *, level: float) -> Reading | None:
    """Mean and variance of the kinetic energy of one rung against f T/2 and f T^2/2, as one deviate.

    series : repeats of one rung, already cut
    A mean lower by up to 0.5 % is the known error of finite time steps and allowed, with up to 1 % in the variance;
    none of the schemes heats. The variance is judged by its logarithm, which is nearly normal.
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
    off = excess(combine(np.log, variance), math.log1p(-LOW_VARIANCE), 0.0) if varied else deviate(0.0)
    meaning = (
        f"the kinetic energy has {average.value:.4f} of the mean and {variance.value:.3f} of the variance that it "
        f"has at temperature {temperature:g}, +- {math.sqrt(average.variance):.1g} and "
        f"{math.sqrt(variance.variance):.1g}; another mean means another temperature or too large a time step, another "
        "variance a thermostat that does not draw the canonical ensemble"
    )
    statistic = jointly(excess(average, 1.0 - LOW_MEAN, 1.0), off)
    return Reading(CHECK, statistic, threshold(level), meaning)
