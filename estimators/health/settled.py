"""Whether nothing changes any more: no trend, halves and repeats agree, and the cut left most of the run."""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import numpy.typing as npt
from scipy import stats

from estimators.estimate import Chain, Estimate
from estimators.gamma import coarsened, scatter
from estimators.health.excess import excess, jointly, too_short
from estimators.health.reading import Reading, deviate
from estimators.settle import rank_normalised_split_rhat
from estimators.trust import FEWEST_SAMPLES
from sampler.series import Series

__all__ = ["settled"]

Floats = npt.NDArray[np.float64]

CHECK = "settled"
OBSERVED = {
    "sampled_energy": "potential energy",
    "virial": "virial",
    "kinetic": "kinetic energy",
    "bath_temperature": "temperature of the bath",
}
COMPARED = ("sampled_energy", "virial")  # between halves and repeats
LATEST = 0.48  # of the run: a cut is placed in steps of 2 % and no later than half
RANKED = 2000  # entries of a repeat that are ranked; longer series enter as block sums


def settled(
    series: Sequence[Series], *, level: float, cut: Sequence[tuple[int, int]] | None = None
) -> list[Reading] | None:
    """Trend over the whole run, agreement of halves and repeats, and where the cut was placed.

    series : repeats of one rung, already cut
    cut : samples cut off and samples recorded, of each repeat
    Readings of the whole rung for the trend and for the agreement, and one a repeat for its cut. Without a bath repeats
    differ in energy, so only halves are compared. A repeat that does not move at all fails by itself.
    None for what holds fewer than 50 effective samples, unless it stands still; None if nothing is left.
    """
    columns = [name for name in OBSERVED if series and all(each.has(name) for each in series)]
    readings = [_still(each) for each in series if len(each) and _stands_still(each, columns)]
    if not readings:
        found = (_trend(series, columns, level), _agreement(series, columns, level))
        readings = [each for each in found if each is not None]
    if cut is not None:
        readings += [_cut(each, *both) for each, both in zip(series, cut, strict=True)]
    return readings or None


def _stands_still(each: Series, columns: Sequence[str]) -> bool:
    return any(float(np.ptp(each.column(name))) == 0.0 for name in columns if name in COMPARED)


def _still(each: Series) -> Reading:
    """How many repeats do not move, of none that may."""
    meaning = "every sample of this repeat is the same: it is frozen or a copy of one sample; leave it out"
    return Reading(CHECK, 1.0, 0.0, meaning, each.repeat)


def _cut(each: Series, cut: int, recorded: int) -> Reading:
    share = cut / recorded if recorded else 0.0
    meaning = (
        f"the first {100.0 * share:.0f} % of the run was left out as not settled; where that is half of it, the rest "
        "may not be settled either, so take a longer equilibration"
    )
    return Reading(CHECK, share, LATEST, meaning, each.repeat)


def _trend(series: Sequence[Series], columns: Sequence[str], level: float) -> Reading | None:
    long_enough = [each for each in series if len(each) > 1]
    fits = {name: _rise({each.chain: each.column(name) for each in long_enough}) for name in columns if long_enough}
    fits = {name: fit for name, fit in fits.items() if not too_short(fit[0])}
    if not fits:
        return None
    deviates = {name: excess(rise, 0.0, 0.0) for name, (rise, _) in fits.items()}
    worst = max(deviates, key=lambda name: deviates[name])
    rise, width = fits[worst]
    meaning = (
        f"from begin to end of the run the {OBSERVED[worst]} changes by {rise.value / width:+.2g} of "
        f"its standard deviation, +- {math.sqrt(rise.variance) / width:.1g}; a trend means that the "
        "run has not settled or that its temperature was changed, so take a longer equilibration"
    )
    return Reading.deviation(CHECK, jointly(*deviates.values()), level, meaning)


def _rise(values: dict[Chain, Floats]) -> tuple[Estimate, float]:
    """Change over a whole run on the straight line through the samples, the same for all repeats; and their scatter."""
    times = {chain: (np.arange(len(each)) - 0.5 * (len(each) - 1)) / len(each) for chain, each in values.items()}
    norm = sum(float(each @ each) for each in times.values())
    apart = {chain: each - np.mean(each) for chain, each in values.items()}
    rise = sum(float(times[chain] @ each) for chain, each in apart.items()) / norm
    left = {chain: each - rise * times[chain] for chain, each in apart.items()}
    width = math.sqrt(np.mean(np.concatenate(list(left.values())) ** 2))
    return Estimate(rise, {chain: times[chain] * each / norm for chain, each in left.items()}), width


def _agreement(series: Sequence[Series], columns: Sequence[str], level: float) -> Reading | None:
    groups = [list(series)] if all(each.bath for each in series) else [[each] for each in series]
    compared = [
        _compared([each.column(name) for each in group]) for name in columns if name in COMPARED for group in groups
    ]
    found = [each for each in compared if each is not None]
    if not found:
        return None
    meaning = (
        f"{'halves and repeats' if len(groups) < len(series) else 'halves'} of the run have R-hat "
        f"{max(ratio for ratio, _ in found):.3f}; more than chance explains means that they are not samples of one "
        "state, so look for a repeat that is caught elsewhere, or take a longer equilibration"
    )
    return Reading.deviation(CHECK, jointly(*(beyond for _, beyond in found)), level, meaning)


def _compared(repeats: Sequence[Floats]) -> tuple[float, float] | None:
    """Rank-normalised split R-hat, and how far beyond chance it is as a normal deviate; None if too short to tell.

    Under agreement the means of halves scatter by 2 tau / n of the variance within, and the ratio of both follows
    Fisher's F, with tau and its degrees of freedom from the Gamma method about each half's own mean. R-hat is the
    larger of two, of location and of scale, and the second's tau is no longer.
    """
    grain = -(-max(map(len, repeats)) // RANKED)
    coarse = [coarsened(each, len(each) // grain) for each in repeats]
    if min(map(len, coarse)) < 4:
        return None
    halves = [half for each in coarse for half in (each[: len(each) // 2], each[-(len(each) // 2) :])]
    within = [half - np.mean(half) for half in halves]
    noise = scatter([np.concatenate(pair) for pair in zip(within[::2], within[1::2], strict=True)])
    if noise.effective_samples < FEWEST_SAMPLES:
        return None
    ratio = rank_normalised_split_rhat(coarse)
    length = noise.samples / len(halves)
    own_means = 1.0 + (2 * noise.window + 1) * (len(halves) - 1) / noise.samples
    expected = own_means * 2.0 * noise.tau * float(np.mean([1.0 / len(half) for half in halves]))
    beyond = (ratio**2 - 1.0 + 1.0 / length) / expected
    chance = float(stats.f.sf(beyond, len(halves) - 1, 2.0 / noise.relative_error**2))
    return ratio, deviate(min(2.0 * chance, 1.0))
