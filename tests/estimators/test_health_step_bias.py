"""The time step's bias against exact sampling: seen where it is, bounded where it is not."""

import numpy as np
import pytest

from estimators.estimate import mean
from estimators.health.step_bias import step_bias

CHAIN = (1.0, 0.8, 100, 0)


def estimates(seed, shift=0.0):
    values = np.random.default_rng(seed).normal(shift, 1.0, 10_000)
    return {name: mean({CHAIN: values}) for name in ("residual_energy", "pressure", "thermal_pressure")}


def test_alarms_are_as_rare_as_the_level_says():
    readings = [each for seed in range(200) for each in step_bias(estimates(seed), estimates(1000 + seed), level=0.01)]
    assert len(readings) == 400
    # both properties of a seed are one series: 200 independent trials at 1 %, of which 7 are exceeded once in 1000
    assert sum(not each.passed for each in readings) / 2 <= 7
    assert np.std([each.statistic for each in readings]) == pytest.approx(0.603, abs=0.08)  # of a half-normal


def test_a_shift_is_seen_and_one_too_small_is_bounded():
    # standard error of each mean: 1/100
    (energy, _) = step_bias(estimates(1, shift=0.1), estimates(2), level=1e-3)
    assert not energy.passed
    assert energy.statistic == pytest.approx(0.1 * 100 / np.sqrt(2), abs=4)
    assert "shifts u by +0.076 +- 0.01" in energy.meaning
    assert "smaller" in energy.meaning
    (energy, pressure) = step_bias(estimates(3), estimates(4), level=1e-3)
    assert energy.passed
    assert "nothing below 0.028 can be seen" in energy.meaning
    assert "shifts P" in pressure.meaning


def test_nothing_in_common_says_nothing():
    assert step_bias(estimates(1), {}, level=0.01) is None
