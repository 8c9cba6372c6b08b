"""Whether the energies of neighbouring rungs differ as their temperatures ask.

Of two canonical ensembles of one system, ln[p_warm(U)/p_cold(U)] = const + (beta_cold - beta_warm) U, whatever the
system: M. R. Shirts, J. Chem. Theory Comput. 9, 909 (2013).
"""

from __future__ import annotations

import math
from collections.abc import Sequence

import numpy as np
import numpy.typing as npt
from scipy.special import expit

from estimators.estimate import Chain, Estimate, centred, mean
from estimators.health.excess import excess
from estimators.health.reading import Reading
from sampler.series import Series

__all__ = ["pair_slope"]

Floats = npt.NDArray[np.float64]

CHECK = "pair-slope"
FEWEST_SHARED = 20.0  # effective samples that either rung might have drawn: with fewer the fit is far from normal
STEP_ERROR = 0.005  # share of the slope that a finite time step may move: obabo shifts configurations by 0.2 % in T
STEPS, LONGEST_STEP = 50, 2.0
SOLVED = 1e-10


def pair_slope(colder: Sequence[Series], warmer: Sequence[Series], *, level: float) -> Reading | None:
    """Slope over U_dyn of the log-ratio of both rungs' distributions, against the difference of their 1/T.

    colder, warmer : repeats of either rung, already cut, of one fluid, density and number of particles
    The maximum-likelihood (logistic) fit; its error from the influence of every sample and their autocorrelation.
    None without a bath, without U_dyn, or where too few samples overlap for the fit to mean anything.
    """
    both = [list(colder), list(warmer)]
    if not all(each.bath and each.has("sampled_energy") and len(each) > 1 for rung in both for each in rung):
        return None
    if not all(both):
        return None
    first, last = (rung[0].state.temperature for rung in both)
    expected = 1.0 / first - 1.0 / last
    slope = _slope(both, expected)
    if slope is None:
        return None
    meaning = (
        f"between temperatures {first:g} and {last:g} the ratio of the energy distributions has "
        f"{slope.value / expected:.3f} of the slope that canonical samples have, "
        f"+- {math.sqrt(slope.variance) / expected:.1g}; more or less means that one of both rungs is not canonical at "
        "its temperature, or that the time step is too large"
    )
    bounds = sorted(expected * (1.0 + sign * STEP_ERROR) for sign in (-1.0, 1.0))
    return Reading.deviation(CHECK, excess(slope, *bounds), level, meaning)


def _slope(rungs: Sequence[Sequence[Series]], expected: float) -> Estimate | None:
    """Fitted slope of ln[p_warm/p_cold], 1/epsilon; None without overlap."""
    energies = [{each.chain: each.column("sampled_energy") for each in rung} for rung in rungs]
    pooled = [np.concatenate(list(each.values())) for each in energies]
    together = np.concatenate(pooled)
    centre, width = float(np.mean(together)), float(np.std(together))
    if width == 0.0:
        return None
    fit = _fitted(np.repeat([0.0, 1.0], [len(each) for each in pooled]), (together - centre) / width, expected * width)
    if fit is None:
        return None
    (intercept, slope), response = fit
    influence: dict[Chain, Floats] = {}
    shared = 0.0
    for sign, rung in zip((-1.0, 1.0), energies, strict=True):
        scaled = {chain: (values - centre) / width for chain, values in rung.items()}
        other = {chain: expit(-sign * (intercept + slope * values)) for chain, values in scaled.items()}
        shared += mean(other).value * mean(rung).effective_samples
        pulls = {chain: sign * each * (response[0] + response[1] * scaled[chain]) for chain, each in other.items()}
        influence |= {chain: each / width for chain, each in centred(pulls)[1].items()}
    return Estimate(slope / width, influence) if shared >= FEWEST_SHARED else None


def _fitted(of_warm: Floats, scaled: Floats, slope: float) -> tuple[Floats, Floats] | None:
    """Log-odds that a sample is of the warmer rung, (intercept, slope), and how both pull the slope; None if not found.

    of_warm, scaled : (n,), 0 or 1, and energies less their mean over their standard deviation
    slope : to start from
    """
    line = np.array([0.0, slope])
    for _ in range(STEPS):
        odds = expit(line[0] + line[1] * scaled)
        weights, left = odds * (1.0 - odds), of_warm - odds
        first = float(weights @ scaled)
        information = np.array([[float(np.sum(weights)), first], [first, float(weights @ scaled**2)]])
        if not np.linalg.det(information) > 0.0:
            return None
        response = np.linalg.inv(information)
        step = response @ np.array([np.sum(left), left @ scaled])
        line = line + step * min(1.0, LONGEST_STEP / float(np.max(np.abs(step), initial=SOLVED)))
        if float(np.max(np.abs(step))) < SOLVED:
            return line, response[1]
    return None
