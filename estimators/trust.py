"""Whether the error bar of an estimate can be believed: "ok", "caution" or "no", and why.

Error bars hold from 100 effective samples on (200 autocorrelation times); short of that, intervals may cover less than
they say. Counts from the Gamma method are noisy there, by a third; the steadier count of `Scatter.steady_tau`, noisy by
a sixth, tells 100 from 50.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from estimators.gamma import Scatter, block_scatter, coarsened
from estimators.settle import repeats_disagree

if TYPE_CHECKING:
    from estimators.estimate import Estimate, State

__all__ = ["FEWEST_SAMPLES", "judgement"]

Floats = npt.NDArray[np.float64]

FEWEST_SAMPLES = 50.0  # effective; fewer do not tell their own error
COMFORTABLE_SAMPLES = 67.0  # tells 50 from 100 with least mistakes
BARE_SAMPLES = 40.0  # by the Gamma method's own count, two and a half times its noise below 100
SHORTEST_SERIES = 50.0  # autocorrelation times
WEIGHTY = 0.1  # share of the variance from which a state's own length matters
MOST_UNSAMPLED = 0.5  # share of the variance
BLOCK_TOLERANCE = 3.0  # combined errors between the two error bars
MOST_RANKED = 512  # entries of a repeat that are ranked to compare it with others; longer series enter as block sums
FEWEST_RANKED = 16


def judgement(estimate: Estimate) -> tuple[str, str]:
    """Trust in an estimate, and the reason why it is not "ok" (empty if it is)."""
    if not math.isfinite(estimate.value):
        return "no", "not a finite number"
    if not math.isfinite(estimate.variance):
        return "no", "too short to tell"
    weighty = {
        state: each for state, each in estimate.scatters.items() if each.variance >= WEIGHTY * estimate.variance > 0.0
    }
    samples = _steady_samples(estimate, weighty)
    differ = any(_differ(estimate.repeats[state]) for state in weighty)
    if samples < FEWEST_SAMPLES or any(each.longest < SHORTEST_SERIES * each.tau for each in weighty.values()):
        return "no", "too short to tell" + (": the repeats disagree" if differ else "")
    if samples < COMFORTABLE_SAMPLES or estimate.effective_samples < BARE_SAMPLES:
        return "caution", f"only about {min(samples, estimate.effective_samples):.0f} effective samples"
    if differ:
        return "caution", "the repeats disagree beyond their error bars"
    if _blocks_disagree(estimate):
        return "caution", "error bars from autocorrelation and from blocks disagree"
    if estimate.unsampled > MOST_UNSAMPLED * estimate.variance:
        return "caution", "the error bar rests on what is taken to lie between the samples more than on the samples"
    return "ok", ""


def _steady_samples(estimate: Estimate, weighty: dict[State, Scatter]) -> float:
    """Effective samples by the steadier measure, and of a state no more than those of the underlying observables."""
    shares = [
        (each.variance / estimate.variance, min(each.steady_samples, estimate.underlying.get(state, math.inf)))
        for state, each in weighty.items()
    ]
    return 1.0 / sum(share**2 / samples for share, samples in shares) if shares else math.inf


def _differ(repeats: Sequence[Floats]) -> bool:
    grain = -(-max(map(len, repeats)) // MOST_RANKED)
    compared = [coarsened(values, len(values) // grain) for values in repeats if len(values) >= FEWEST_RANKED * grain]
    return len(compared) > 1 and repeats_disagree(compared)


def _blocks_disagree(estimate: Estimate) -> bool:
    if estimate.variance == 0.0:
        return False
    blocks = [block_scatter(repeats) for repeats in estimate.repeats.values()]
    error, block_error = math.sqrt(estimate.variance), math.sqrt(estimate.unsampled + sum(v for v, _ in blocks))
    block_spread = 0.5 * math.hypot(*(variance * relative for variance, relative in blocks)) / max(block_error, 1e-300)
    spread = error / math.sqrt(2.0 * estimate.freedom)
    return not abs(block_error - error) <= BLOCK_TOLERANCE * math.hypot(block_spread, spread)
