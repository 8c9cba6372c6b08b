"""Intervals hold the truth as often as they say: the fast version of benchmarks/error_bars.py, by binomial tests."""

from __future__ import annotations

import importlib.util
import math
import sys
from pathlib import Path

import numpy as np
import pytest
from scipy import stats

PATH = Path(__file__).parents[2] / "benchmarks" / "error_bars.py"
SPEC = importlib.util.spec_from_file_location("error_bars", PATH)
error_bars = sys.modules["error_bars"] = importlib.util.module_from_spec(SPEC)
SPEC.loader.exec_module(error_bars)


def judge(rows, truth=None, *, expected=0.95):
    """Share of intervals by a binomial test at 1e-4, and their mean width within 4 errors of the scatter and 15 %."""
    held = error_bars.Held.of(rows, truth)
    inside = round(held.coverage * len(rows))
    assert stats.binomtest(inside, len(rows), expected).pvalue > 1e-4, held
    assert abs(held.width - 1.0) < 0.15 + 4.0 / math.sqrt(2.0 * len(rows)), held
    return held


@pytest.mark.parametrize("quantity", error_bars.QUANTITIES)
@pytest.mark.parametrize(
    ("tau", "length", "series"), [(1.0, 200, 600), (20.0, 200, 500), (1.0, 1500, 500), (8.0, 1000, 400)]
)
def test_intervals_from_correlated_series(quantity, tau, length, series):
    rows = error_bars.estimates_of_series(quantity, tau, round(tau * length), series, seed=71)
    held = judge(rows, error_bars.TRUTHS[quantity])
    # 95 % of them are judged ok; the count of these has a binomial error of 1 %.
    assert held.ok > 0.92
    # Unbiased: four standard errors of the mean of all.
    off = np.array([value for value, _, _ in rows]) - error_bars.TRUTHS[quantity]
    assert abs(off.mean()) < 4.0 * off.std() / math.sqrt(series)


@pytest.mark.parametrize("quantity", error_bars.QUANTITIES)
def test_intervals_from_short_series_are_not_vouched_for(quantity):
    found = {
        length: error_bars.Held.of(error_bars.estimates_of_series(quantity, 5.0, 5 * length, 200, seed=72))
        for length in (50, 100)
    }
    assert found[50].ok < 0.02
    assert found[100].ok < 0.2


def test_intervals_from_an_ideal_gas_in_a_harmonic_well():
    system = error_bars.System("well", 0.3, (1.0, 1.1), 2000, error_bars.wells)
    found = system.estimates(100, seed=73)
    assert set(found) == {*error_bars.PROPERTIES, error_bars.BETWEEN}
    for name, rows in found.items():
        judge(rows, system.truth(name))
        judge(rows)


def test_intervals_from_a_sampled_liquid():
    system = error_bars.System("liquid", 0.8, (1.0, 1.1), 600, error_bars.liquids)
    for rows in system.estimates(50, seed=74).values():
        judge(rows)
