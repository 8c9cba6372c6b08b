"""The Gamma method against exact autocorrelation times, direct sums and an independent library."""

from __future__ import annotations

import math

import numpy as np
import pyerrors
import pytest
from scipy import stats
from scipy.signal import lfilter

from estimators.errors import BadSeries
from estimators.gamma import WINDOW_FACTOR, autocovariances, block_scatter, coarsened, scatter


def autoregressive(generator, n, tau):
    """(n,) normal AR(1) series of unit variance with integrated autocorrelation time tau."""
    memory = (2.0 * tau - 1.0) / (2.0 * tau + 1.0)
    start = generator.normal(size=1)
    rest = generator.normal(size=n - 1) * math.sqrt(1.0 - memory**2)
    return lfilter([1.0], [1.0, -memory], np.concatenate([start, rest]))


@pytest.mark.parametrize("lengths", [(1,), (7, 3), (500, 61, 2), (5000,)])
@pytest.mark.parametrize("n_lags", [1, 2, 60, 700])
def test_autocovariances_are_lagged_products_over_their_number_of_pairs(lengths, n_lags):
    generator = np.random.default_rng(1)
    repeats = [generator.normal(size=n) + 0.3 for n in lengths]
    found = autocovariances(repeats, n_lags)
    for lag in range(n_lags):
        products = np.concatenate([values[: max(len(values) - lag, 0)] * values[lag:] for values in repeats])
        # Rounding of a transform: a few ulp of the sum of squares over the number of pairs.
        assert found[lag] == pytest.approx(products.mean() if len(products) else 0.0, abs=1e-14 * 5000)


@pytest.mark.parametrize("lengths", [(4000,), (4000, 1700, 900)])
@pytest.mark.parametrize("tau", [0.8, 3.0, 25.0])
def test_error_and_its_error_are_those_of_pyerrors(lengths, tau):
    generator = np.random.default_rng(2)
    repeats = [autoregressive(generator, n, tau) for n in lengths]
    # pyerrors removes each repeat's own mean, we the mean of all: equal once the repeats' means are. It also keeps tau
    # from falling below 1/2, which these series stay clear of.
    repeats = [values - values.mean() + 2.0 for values in repeats]
    theirs = pyerrors.Obs(repeats, [f"state|{index}" for index in range(len(repeats))])
    theirs.gamma_method(S=WINDOW_FACTOR)
    ours = scatter([values / sum(lengths) for values in repeats])
    assert ours.window == theirs.e_windowsize["state"]
    assert math.sqrt(ours.variance) == pytest.approx(theirs.dvalue, rel=1e-8)
    assert 0.5 * ours.relative_error * math.sqrt(ours.variance) == pytest.approx(theirs.ddvalue, rel=1e-8)
    assert ours.tau == pytest.approx(theirs.e_tauint["state"], rel=1e-8)
    fixed = scatter([values / sum(lengths) for values in repeats], window=ours.window)
    assert fixed.variance == pytest.approx(ours.variance, rel=1e-12)


@pytest.mark.parametrize(("tau", "lengths"), [(0.5, (1000,)), (6.0, (6000,)), (6.0, (3000, 2000, 1000))])
def test_intervals_cover_and_error_bars_equal_the_scatter(tau, lengths):
    """400 series of known mean: a binomial test of how many lie within 1.96 errors, and the size of the error."""
    generator = np.random.default_rng(3)
    n_series, samples = 400, sum(lengths)
    means, errors, relative = np.empty(n_series), np.empty(n_series), np.empty(n_series)
    for index in range(n_series):
        repeats = [autoregressive(generator, n, tau) / samples for n in lengths]
        found = scatter(repeats)
        means[index] = sum(values.sum() for values in repeats)
        errors[index], relative[index] = math.sqrt(found.variance), 0.5 * found.relative_error
    inside = int(np.sum(np.abs(means) < 1.96 * errors))
    assert stats.binomtest(inside, n_series, 0.95).pvalue > 1e-4
    memory = (2.0 * tau - 1.0) / (2.0 * tau + 1.0)
    # Exact variance of the sum of one stretch: n + 2 sum (n - t) memory^t, in units of one sample.
    variance = sum(n + 2.0 * sum((n - t) * memory**t for t in range(1, n)) for n in lengths) / samples**2
    error = math.sqrt(variance)
    # The error bars scatter by `relative`; their mean is biased by the truncation, about half of that.
    assert errors.mean() == pytest.approx(error, rel=4.0 * relative.mean() / math.sqrt(n_series) + 0.03)
    # Scatter of the error bars as the engine predicts it; Wolff's formula is good to about a fifth.
    assert errors.std() / error == pytest.approx(relative.mean(), rel=0.25)


def test_tau_of_a_long_series():
    tau = 12.0
    found = scatter([autoregressive(np.random.default_rng(4), 1_000_000, tau)])
    # Wolff's error of tau, tau sqrt(4 (W + 1/2 - tau) / N), and the truncated tail exp(-W / tau).
    tolerance = 4.0 * math.sqrt(4.0 * (found.window + 0.5 - tau) / found.samples) + math.exp(-found.window / tau)
    assert tolerance < 0.14
    assert found.tau == pytest.approx(tau, rel=tolerance)
    assert found.effective_samples == pytest.approx(1_000_000 / 24.0, rel=tolerance)


def test_window_beyond_the_first_lags_is_found():
    tau = 120.0
    found = scatter([autoregressive(np.random.default_rng(5), 200_000, tau)])
    assert 300 < found.window < 1500
    # Relative error of tau about sqrt(4 W / N) = 0.12.
    assert found.tau == pytest.approx(tau, rel=0.48)


def test_blocks_give_the_same_error():
    repeats = [autoregressive(np.random.default_rng(6), n, 5.0) for n in (40_000, 25_000)]
    variance, relative = block_scatter(repeats, blocks=600)
    found = scatter(repeats)
    assert relative < 0.06
    # Blocks of 108 samples miss the correlation across their edges, about 5 / 108 of the variance.
    assert variance == pytest.approx(65_000 * 10.0, rel=4.0 * relative + 0.05)
    assert variance == pytest.approx(found.variance, rel=4.0 * math.hypot(relative, found.relative_error) + 0.05)
    assert block_scatter(repeats)[1] == pytest.approx(math.sqrt(2.0 / 31.0), rel=0.05)


def test_mean_of_all_repeats_is_removed_not_each_ones_own():
    generator = np.random.default_rng(8)
    first, second = generator.normal(size=300), generator.normal(size=500) + 1.0
    centre = (first.sum() + second.sum()) / 800
    first, second = first - centre, second - centre
    gamma0 = (first @ first + second @ second) / 800
    gamma1 = (first[1:] @ first[:-1] + second[1:] @ second[:-1]) / 798
    expected = 800 * (gamma0 + 2.0 * gamma1) * (1.0 + 3.0 / 800)
    assert scatter([first + 7.0, second + 7.0], window=1).variance == pytest.approx(expected, rel=1e-12)


def test_alternating_series_scatters_less_than_independent_samples():
    noise = np.random.default_rng(7).normal(size=20_001)
    repeats = [noise[1:] - 0.5 * noise[:-1]]
    found = scatter(repeats)
    # Exact: variance 1.25, autocovariance -0.5 at lag one, hence 2 tau = 0.25 / 1.25.
    assert found.variance == pytest.approx(20_000 * 0.25, rel=4.0 * found.relative_error * 5.0)
    assert found.tau < 0.2
    strictly = scatter([np.tile([1.0, -1.0], 50)])
    assert strictly.variance > 0.0


def test_what_cannot_be_told_is_not_told():
    assert scatter([np.array([0.1, -0.1, 0.0])]).variance == math.inf
    assert scatter([]).variance == math.inf
    assert scatter([np.full(100, 0.1)]).variance == 0.0
    assert math.isnan(block_scatter([np.ones(3)])[0])
    with pytest.raises(BadSeries, match="not finite numbers"):
        scatter([np.array([1.0, math.nan, 2.0, 3.0, 1.0])])


@pytest.mark.parametrize(("tau", "length"), [(0.5, 400), (1.0, 200), (8.0, 200), (50.0, 200), (8.0, 2000)])
def test_steady_tau_is_half_as_noisy(tau, length):
    generator = np.random.default_rng(9)
    found = [scatter([autoregressive(generator, round(tau * length), tau)]) for _ in range(300)]
    steady, full = (np.log([getattr(each, name) for each in found]) for name in ("steady_tau", "tau"))
    # One exponential: right but for the lags' discreteness, and for independent samples as it is 1/2 at least.
    assert math.exp(steady.mean()) == pytest.approx(tau, rel=0.05 if tau > 0.5 else 0.1)
    assert steady.std() < 0.65 * full.std()
    # Its own noise, a window of two tau: sqrt(4 (W + 1/2 - tau) / samples), to a third.
    assert steady.std() < 1.33 * math.sqrt(4.0 * (tau + 0.5) / (tau * length))


@pytest.mark.parametrize(("tau", "cube"), [(0.5, 8.0), (6.0, 8.0)])
def test_skewness_of_a_sum_of_squares(tau, cube):
    """Squares of AR(1) normals: third cumulant of their sum 8 n sum over lags of rho(s) rho(t) rho(s - t)."""
    generator, n, count = np.random.default_rng(10), 20_000, 60
    memory = (2.0 * tau - 1.0) / (2.0 * tau + 1.0)
    lags = np.arange(-80, 81)
    rho = memory ** np.abs(lags) if memory else (lags == 0).astype(float)
    gap = np.abs(lags[:, None] - lags)
    third = cube * n * np.sum(rho[:, None] * rho * (memory**gap if memory else gap == 0))
    exact = third / (2.0 * n * np.sum(rho**2)) ** 1.5
    found = [scatter([autoregressive(generator, n, tau) ** 2]).skewness for _ in range(count)]
    error = np.std(found) / math.sqrt(count)
    assert error < 0.06 * exact
    # Blocks of 2 W + 1 samples cut a few per cent of the triple correlations.
    assert np.mean(found) == pytest.approx(exact, abs=4.0 * error + 0.08 * exact)


def test_coarsened_series_keeps_its_sum():
    values = np.arange(11.0)
    assert coarsened(values, 11) is values
    assert coarsened(values, 3) == pytest.approx([0 + 1 + 2, 3 + 4 + 5 + 6, 7 + 8 + 9 + 10])
