"""Helmholtz energy and entropy along the rungs of one isochore, which no average over one rung alone tells."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from estimators.derived import in_blocks
from estimators.estimate import Estimate, exact, mean
from estimators.reweight import Pooled
from sampler.series import Series

__all__ = ["Change", "changes"]

METHOD = "reweighted"


@dataclass(frozen=True)
class Change:
    """From one temperature to a warmer one at the same density, per particle, k_B.

    helmholtz : of A_res/T; entropy : of S_res = (U - A_res)/T
    """

    start: float
    helmholtz: Estimate
    entropy: Estimate


def changes(pooled: Pooled, series: Sequence[Series], energies: Mapping[float, Estimate]) -> dict[float, Change]:
    """By temperature of the rung, from the coldest rung it is connected with; none for that one itself.

    series : those that were pooled; energies : residual energy per particle of the rungs, by temperature
    The rungs' free energies are those of the forces' own potential, d(F/T)/d(1/T) = <U_dyn>. What U holds beyond that
    (the part beyond the cutoff, the shift) hardly depends on temperature, so that the trapezoidal rule over the rungs
    adds its integral. Empty where there is no energy of the molecules among one another.
    """
    series = [each for each in series if len(each)]
    if not (series and all(each.has("energy", "sampled_energy") for each in series)):
        return {}
    particles, temperatures = series[0].state.particles, pooled.temperatures
    beyond = {each: _beyond([s for s in series if s.state.temperature == each]) for each in temperatures}
    found: dict[float, Change] = {}
    start, added = 0, exact(0.0)
    for index in range(1, len(temperatures)):
        low, high = temperatures[index - 1], temperatures[index]
        if not pooled.overlap[start, index] > 0.0:
            start, added = index, exact(0.0)
            continue
        added = added + (beyond[low] + beyond[high]) * (0.5 * (1.0 / high - 1.0 / low))
        helmholtz = pooled.free_energies[index] / particles + added
        first = temperatures[start]
        if first in energies and high in energies:
            entropy = energies[high] / high - energies[first] / first - helmholtz
            found[high] = Change(first, replace(helmholtz, method=METHOD), replace(entropy, method=METHOD))
    return found


def _beyond(series: Sequence[Series]) -> Estimate:
    """U - U_dyn per particle at one rung."""
    particles = series[0].state.particles
    left = {each.chain: each.column("energy") - each.column("sampled_energy") for each in series}
    return in_blocks(mean({chain: np.asarray(values / particles) for chain, values in left.items()}))
