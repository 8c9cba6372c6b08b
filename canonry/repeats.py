"""What the repeats of one rung say together, with a bath or without."""

from __future__ import annotations

import operator
from collections.abc import Sequence
from dataclasses import replace
from functools import reduce

from estimators.canonical import kinetic_temperature, rung_properties
from estimators.estimate import Estimate
from sampler.series import Series

__all__ = ["measured_temperature", "properties_alone"]


def properties_alone(series: Sequence[Series], *, contact: Estimate | None = None) -> dict[str, Estimate]:
    """Properties of one rung from its own repeats, as `rung_properties` gives them.

    Without a bath repeats differ in energy: each is estimated by itself, then they are averaged.
    contact : g at the cutoff, where the bulk modulus needs it
    Raises BadSeries if a series cannot be used.
    """
    if series[0].bath:
        return rung_properties(series, contact=contact)
    each = [rung_properties([one], contact=contact) for one in series]
    found = {name: _mean([properties[name] for properties in each], series) for name in each[0]}
    factor = found["pressure"] / (measured_temperature(series) * series[0].state.density)
    return found | {"compressibility_factor": replace(factor, method=found["pressure"].method)}


def measured_temperature(series: Sequence[Series]) -> Estimate:
    """Of repeats without a bath, from the mean kinetic energy of each."""
    return _mean([kinetic_temperature([one]) for one in series], series)


def _mean(estimates: Sequence[Estimate], series: Sequence[Series]) -> Estimate:
    """Mean over repeats, each by its number of samples."""
    samples = sum(map(len, series))
    shares = [estimate * (len(one) / samples) for estimate, one in zip(estimates, series, strict=True)]
    return reduce(operator.add, shares)
