"""Whether the energy that the forces conserve, with the heat that the bath took, is conserved.

The balance e = (K + U_dyn + ledger)/N of a healthy run does two things. It scatters at once, within a few steps, by the
energy error of a step, of order dt^2. And it walks at random, as every noise of the bath starts anew from a slightly
wrong energy. Such a walk of the whole energy with variance D per unit of time drifts by D/(2T): the fluctuation theorem
of this work (D. A. Sivak, J. D. Chodera, G. E. Crooks, Phys. Rev. X 3, 011007 (2013)).

Measured on this sampler (N 256, two repeats of 20000 steps; baoab, obabo and without a bath; dt 0.002, 0.005, 0.01; six
states from T 0.7 at density 0.8 to T 3 at 0.9 and T 1.2 at 0.05):
drift, per particle : 3e-6 to 3e-4 at dt 0.005, up to 9e-3 at 0.01; within its error what the theorem gives, everywhere
scatter within 0.05 : 7e-5 to 2e-3 at dt 0.005, at most 4 % of the scatter of K at 0.01, as dt^2 and as 1/sqrt(N)
further scatter within 0.5 : at most 0.34 of that (variances), the walk taken off
Energies of another cutoff or truncation than the forces add a scatter as slow as the structure: 2 to 20 times the fast
one at dt 0.005.
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import numpy.typing as npt

from estimators.estimate import Estimate, mean
from estimators.health.excess import excess
from estimators.health.reading import Reading
from sampler.series import Series

__all__ = ["ledger"]

Floats = npt.NDArray[np.float64]

CHECK = "ledger"
STEADY = 1e-5  # epsilon per particle and unit of time, allowed beyond the theorem's drift
STRETCHES = 32  # of each repeat; the drift is the mean change over one
FAST, SLOW, LONG = 0.05, 0.5, 5.0  # units of time
FINEST = 5  # samples within SLOW, at least, to tell it from FAST
SHARE = 0.7  # of the fast variance that a slow one may reach
LOOSE = 0.1  # of the scatter of K that the fast scatter may reach


def ledger(series: Sequence[Series], *, level: float) -> list[Reading] | None:
    """Drift, fast scatter and, where samples are close enough in time, slow scatter of the balance of one rung.

    series : repeats of one rung, already cut
    None without kinetic energy, U_dyn or ledger, or if a repeat holds fewer than 64 samples.
    """
    recorded = all(each.has("kinetic", "sampled_energy", "ledger") for each in series)
    if not recorded or min(map(len, series), default=0) < 2 * STRETCHES:
        return None
    readings = [_drift(series, level), _fast(series, level)]
    interval = series[0].interval
    if FINEST * interval <= SLOW and min(map(len, series)) * interval >= 4.0 * LONG:
        readings.append(_slow(series, level))
    return readings


def _balance(each: Series) -> Floats:
    """(n,), whole energy of the particles and of what the bath took."""
    total = each.column("kinetic") + each.column("sampled_energy") + each.column("ledger")
    return np.asarray(total - total[0], dtype=float)


def _drift(series: Sequence[Series], level: float) -> Reading:
    state, interval = series[0].state, series[0].interval
    stretch = min(map(len, series)) // STRETCHES
    changes = {each.chain: np.diff(_balance(each)[::stretch]) for each in series}
    span = stretch * interval
    rate = mean(changes) / span
    walk = rate.variance * span * sum(map(len, changes.values()))
    allowed = state.particles * STEADY
    statistic = excess(rate, -allowed, walk / (2.0 * state.temperature) + allowed)
    meaning = (
        f"kinetic energy, potential energy and heat given to the bath add up to something that drifts by "
        f"{rate.value / state.particles:.2g} epsilon per particle and unit of time, "
        f"+- {math.sqrt(rate.variance) / state.particles:.1g}; a drift means that forces, energies and booked heat do "
        "not belong together or that the time step is too large"
    )
    return Reading.deviation(CHECK, statistic, level, meaning)


def _squared_changes(
    series: Sequence[Series], span: float, longest: float
) -> dict[tuple[float, float, int, int], Floats]:
    """Of the balance over `span` units of time, from as many starts as there are for `longest`."""
    found = {}
    for each in series:
        lag, last = (max(round(time / each.interval), 1) for time in (span, longest))
        values = _balance(each)
        starts = len(values) - last
        found[each.chain] = (values[lag : lag + starts] - values[:starts]) ** 2
    return found


def _fast(series: Sequence[Series], level: float) -> Reading:
    state = series[0].state
    thermal = series[0].kinetic_freedom * state.temperature**2  # of independent values of K
    share = mean(_squared_changes(series, FAST, FAST)) / thermal
    meaning = (
        f"kinetic energy, potential energy and heat given to the bath add up to something that scatters by "
        f"{math.sqrt(share.value):.2g} of what the kinetic energy does, {LOOSE:g} at most being usual; more means that "
        "they were not taken at the same instant or that the time step is far too large"
    )
    return Reading.deviation(CHECK, excess(share, high=LOOSE**2), level, meaning)


def _slow(series: Sequence[Series], level: float) -> Reading:
    fast, slow, long = (mean(_squared_changes(series, span, LONG)) for span in (FAST, SLOW, LONG))
    walked = (long - slow) * ((SLOW - FAST) / (LONG - SLOW))
    ratio = (slow - fast - walked).value / fast.value if fast.value else 0.0
    beyond: Estimate = slow - fast * (1.0 + SHARE) - walked
    meaning = (
        f"the sum of kinetic energy, potential energy and heat given to the bath wanders with the structure of the "
        f"fluid, by {ratio:.2g} of the variance that the time step explains, {SHARE:g} at most being usual; more means "
        "that energies and forces have different cutoffs or truncations"
    )
    return Reading.deviation(CHECK, excess(beyond, high=0.0), level, meaning)
