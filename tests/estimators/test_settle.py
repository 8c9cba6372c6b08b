"""Equilibration cut and split R-hat: against known transients and an independent library."""

from __future__ import annotations

import math

import numpy as np
import pytest
from arviz_stats.base import array_stats
from scipy.signal import lfilter

from estimators.errors import BadSeries
from estimators.settle import rank_normalised_split_rhat, repeats_disagree, settled_start


def autoregressive(generator, n, tau):
    """(n,) normal AR(1) series of unit variance with integrated autocorrelation time tau."""
    memory = (2.0 * tau - 1.0) / (2.0 * tau + 1.0)
    start = generator.normal(size=1)
    rest = generator.normal(size=n - 1) * math.sqrt(1.0 - memory**2)
    return lfilter([1.0], [1.0, -memory], np.concatenate([start, rest]))


@pytest.mark.parametrize("tau", [0.5, 10.0, 40.0])
def test_settled_series_keep_nearly_everything(tau):
    generator = np.random.default_rng(21)
    cuts = np.array([settled_start(autoregressive(generator, 5000, tau)) for _ in range(200)]) / 5000
    # Four correlated comparisons at 2.5 errors: 2 to 5 % false alarms (measured), more where 60 effective samples make
    # the errors themselves uncertain; 200 series, so three standard errors are 4 %.
    assert np.mean(cuts > 0.0) < (0.12 if tau == 40.0 else 0.08)
    assert cuts.mean() < 0.02


def test_the_cut_leaves_the_variance_of_short_settled_series_alone():
    """100 effective samples: the variance about the own mean is low by 1 %; cuts by noise would take 2 % more."""
    generator = np.random.default_rng(29)
    variances, coverage = [], []
    for _ in range(800):
        values = autoregressive(generator, 1000, 5.0)
        rest = values[settled_start(values) :]
        variances.append(rest.var())
        coverage.append(abs(rest.mean()) < 2.0 * math.sqrt(10.0 / len(rest)))
    # standard error of the mean variance: sqrt(2 * 5/1000 / 800) = 0.0035 (tau of squares is half)
    assert np.mean(variances) == pytest.approx(0.99, abs=0.014)
    assert np.mean(coverage) > 0.93  # 95.4 % less three standard errors of 0.75 %


@pytest.mark.parametrize(("height", "relaxation"), [(10.0, 50.0), (10.0, 200.0), (-3.0, 300.0), (1.0, 500.0)])
@pytest.mark.parametrize("tau", [0.5, 10.0])
def test_transients_are_cut_until_they_no_longer_matter(height, relaxation, tau):
    generator = np.random.default_rng(22)
    n = 10_000
    transient = height * np.exp(-np.arange(n) / relaxation)
    errors, shifts, kept = [], [], []
    for _ in range(100):
        start = settled_start(autoregressive(generator, n, tau) + transient)
        errors.append(math.sqrt(2.0 * tau / (n - start)))
        shifts.append(transient[start:].mean())
        kept.append((n - start) / n)
    # What is left shifts the mean by well under its standard error, at the price of a fifth of the samples at most.
    assert abs(np.mean(shifts)) < 0.6 * np.mean(errors)
    assert np.mean(kept) > 0.8


def test_series_that_never_settles_is_cut_by_half():
    drift = np.linspace(0.0, 30.0, 4001) + np.random.default_rng(23).normal(size=4001)
    assert 1900 <= settled_start(drift) <= 2000


def test_offset_does_not_hide_a_transient():
    generator = np.random.default_rng(24)
    values = generator.normal(size=5000) + 5.0 * np.exp(-np.arange(5000) / 100.0)
    assert settled_start(values) == settled_start(values - 1e9) > 0


def test_short_series_are_left_alone():
    assert settled_start(np.array([5.0, 1.0, 1.0, 1.0, 1.0])) == 0
    assert settled_start(np.empty(0)) == 0
    assert settled_start(np.full(1000, 3.0)) == 0
    with pytest.raises(BadSeries, match="not finite"):
        settled_start(np.array([1.0] * 20 + [math.nan]))


@pytest.mark.parametrize("n_chains", [2, 5])
@pytest.mark.parametrize("n", [4, 501, 2000])
@pytest.mark.parametrize("story", ["same", "location", "scale", "drift", "ties"])
def test_rhat_against_arviz(n_chains, n, story):
    generator = np.random.default_rng(25)
    chains = generator.standard_t(2, size=(n_chains, n))
    if story == "location":
        chains += 0.5 * np.arange(n_chains)[:, None]
    elif story == "scale":
        chains *= 1.0 + np.arange(n_chains)[:, None]
    elif story == "drift":
        chains += np.linspace(0.0, 1.0, n)
    elif story == "ties":
        chains = np.round(chains)
    found = rank_normalised_split_rhat(list(chains))
    assert found == pytest.approx(float(array_stats.rhat(chains, method="rank")), rel=1e-10)


def test_rhat_tells_agreement_from_disagreement_in_location_and_in_scale():
    generator = np.random.default_rng(26)
    agree = [autoregressive(generator, n, 3.0) for n in (9000, 7001)]
    assert rank_normalised_split_rhat(agree) < 1.01
    assert rank_normalised_split_rhat([agree[0], agree[1] + 0.5]) > 1.02
    assert rank_normalised_split_rhat([agree[0], 2.0 * agree[1]]) > 1.05
    assert rank_normalised_split_rhat([agree[0] + np.linspace(0.0, 2.0, 9000)]) > 1.05


def test_rhat_of_constants_and_of_nothing():
    assert rank_normalised_split_rhat([np.ones(10), np.ones(10)]) == 1.0
    assert rank_normalised_split_rhat([np.ones(10), np.zeros(10)]) == math.inf
    with pytest.raises(BadSeries, match="at least 4 samples"):
        rank_normalised_split_rhat([np.ones(3)])
    with pytest.raises(BadSeries, match="finite"):
        rank_normalised_split_rhat([np.array([1.0, 2.0, math.nan, 1.0])])
    with pytest.raises(BadSeries, match="at least one"):
        rank_normalised_split_rhat([])


@pytest.mark.parametrize("lengths", [(500, 500), (3000, 1200, 700), (400,) * 8])
@pytest.mark.parametrize("story", ["normal", "squares", "heavy"])
def test_agreeing_repeats_are_seldom_said_to_disagree(lengths, story):
    """One in 500 of 400: Poisson with mean 0.8; five or more happen once in a thousand."""
    generator = np.random.default_rng(27)
    turn = {"normal": lambda x: x, "squares": np.square, "heavy": lambda x: np.exp(1.5 * x)}[story]
    alarms = [repeats_disagree([turn(autoregressive(generator, n, 3.0)) for n in lengths]) for _ in range(400)]
    assert sum(alarms) < 5


@pytest.mark.parametrize("tau", [0.5, 5.0])
def test_repeats_that_differ_beyond_their_noise_are_found(tau):
    """Means twelve standard errors of one repeat apart, spreads by a half, or a drift by 24 within each.

    The halves of two then scatter by 12^2 / 6 + 1 = 25 times what is expected; Fisher's F allows about 6.
    """
    generator = np.random.default_rng(28)
    n = round(1000 * tau)
    error = math.sqrt(2.0 * tau / n)
    for _ in range(20):
        first, second = (autoregressive(generator, n, tau) for _ in range(2))
        assert repeats_disagree([first, second + 12.0 * error])
        assert repeats_disagree([first, first[::-1], 1.5 * second])
        assert repeats_disagree([each + np.linspace(0.0, 24.0 * error, n) for each in (first, second)])


def test_repeats_without_scatter_disagree_if_they_differ():
    assert repeats_disagree([np.ones(10), np.zeros(10)])
    assert not repeats_disagree([np.ones(10), np.ones(10)])
