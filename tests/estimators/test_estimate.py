"""Estimates: arithmetic that keeps correlations, unbiased covariances, and whether an error bar can be believed."""

from __future__ import annotations

import math

import numpy as np
import pyerrors
import pytest
from arviz_stats.base import array_stats
from scipy import stats
from scipy.signal import lfilter

from estimators.covariance import covariance, covariance_matrix
from estimators.errors import BadSeries
from estimators.estimate import Estimate, combine, exact, mean
from estimators.gamma import WINDOW_FACTOR

COLD, COLD_AGAIN, HOT = (1.0, 0.8, 100, 0), (1.0, 0.8, 100, 1), (1.2, 0.8, 100, 0)


def autoregressive(generator, n, tau):
    """(n,) normal AR(1) series of unit variance with integrated autocorrelation time tau."""
    memory = (2.0 * tau - 1.0) / (2.0 * tau + 1.0)
    start = generator.normal(size=1)
    rest = generator.normal(size=n - 1) * math.sqrt(1.0 - memory**2)
    return lfilter([1.0], [1.0, -memory], np.concatenate([start, rest]))


@pytest.fixture
def generator():
    return np.random.default_rng(11)


def test_mean_pools_repeats_sample_by_sample(generator):
    observables = {COLD: generator.normal(size=3000) + 2.0, COLD_AGAIN: generator.normal(size=1000) + 2.0}
    found = mean(observables)
    everything = np.concatenate(list(observables.values()))
    assert found.value == pytest.approx(everything.mean(), rel=1e-12)
    assert found.method == "average"
    assert (found.trust, found.reason) == ("ok", "")
    # White noise: the plain standard error, known to sqrt((W + 1/2) / 4000), and W is 1 to 4.
    relative = found.error_of_error / found.standard_error
    assert math.sqrt(1.5 / 4000) * 0.999 < relative < math.sqrt(4.501 / 4000)
    assert math.sqrt(found.variance) == pytest.approx(everything.std() / math.sqrt(4000), rel=4.0 * relative)
    assert 1.0 < found.standard_error / math.sqrt(found.variance) < 1.01


def test_functions_of_correlated_means_as_pyerrors_propagates_them(generator):
    common = autoregressive(generator, 5000, 4.0)
    first, second = 3.0 + common, 5.0 + 0.7 * common + 0.4 * autoregressive(generator, 5000, 9.0)
    a, b = mean({COLD: first}), mean({COLD: second})
    their_a, their_b = pyerrors.Obs([first], ["cold"]), pyerrors.Obs([second], ["cold"])
    pairs = [
        (combine(lambda x, y: np.exp(-x) * np.sqrt(y) / (x + y), a, b), None),
        (a / b - b, their_a / their_b - their_b),
        (2.0 - 3.0 * a * b + 1.0 / a, 2.0 - 3.0 * their_a * their_b + 1.0 / their_a),
        ((a - 1.5) ** 3 / 2.0, (their_a - 1.5) ** 3 / 2.0),
        (np.float64(2.0) * a, 2.0 * their_a),
    ]
    pairs[0] = (pairs[0][0], np.exp(-their_a) * np.sqrt(their_b) / (their_a + their_b))
    for ours, theirs in pairs:
        theirs.gamma_method(S=WINDOW_FACTOR)
        # they keep the bias of curved functions, which is far below the error here
        assert abs(ours.value - theirs.value) < 0.1 * ours.standard_error
        assert math.sqrt(ours.variance) == pytest.approx(theirs.dvalue, rel=1e-8)
        assert ours.error_of_error / ours.standard_error == pytest.approx(theirs.ddvalue / theirs.dvalue, rel=1e-8)


def test_shared_samples_cancel_and_states_add_in_quadrature(generator):
    cold = mean({COLD: generator.normal(size=500)})
    hot = mean({HOT: 2.0 * generator.normal(size=800)})
    assert (cold - cold).standard_error == 0.0
    assert (cold + cold).standard_error == pytest.approx(2.0 * cold.standard_error)
    both = cold - hot
    assert both.variance == pytest.approx(cold.variance + hot.variance)
    shares = np.array([cold.variance, hot.variance]) / both.variance
    sizes = np.array([cold.effective_samples, hot.effective_samples])
    assert both.effective_samples == pytest.approx(1.0 / np.sum(shares**2 / sizes))
    assert both.freedom == pytest.approx(1.0 / np.sum(shares**2 / np.array([cold.freedom, hot.freedom])))
    assert both.skewness == pytest.approx(np.sum(shares**1.5 * np.array([cold.skewness, -hot.skewness])))
    assert (cold - hot).skewness != pytest.approx((cold + hot).skewness)


def test_exact_values_carry_no_error(generator):
    four = exact(4.0)
    assert (four.value, four.standard_error, four.error_of_error, four.trust) == (4.0, 0.0, 0.0, "ok")
    assert four.effective_samples == math.inf
    cold = mean({COLD: generator.normal(size=500) + 9.0})
    assert (cold * four).standard_error == pytest.approx((cold * 4.0).standard_error)


def test_a_constant_changes_the_value_and_shares_the_error(generator):
    """Of long series both are large and dear."""
    values = mean({COLD: generator.normal(size=500), HOT: generator.normal(size=300)})
    for moved, value in ((values + 2.5, values.value + 2.5), (1.0 + values - 4.0, values.value - 3.0)):
        assert moved.value == pytest.approx(value, abs=1e-15)
        assert moved.influence is values.influence
        assert moved.scatters is values.scatters
    assert (2.5 - values).influence[COLD] == pytest.approx(-values.influence[COLD])


def test_method_survives_numbers_and_becomes_derived_between_methods(generator):
    values = {COLD: generator.normal(size=500) + 9.0}
    average, fluctuation = mean(values), covariance(values, values)
    assert (average * 2.0 + 1.0).method == "average"
    assert (fluctuation / 3.0).method == "fluctuation"
    assert (average * fluctuation).method == "derived"
    assert combine(lambda x: x * x, average).method == "derived"


def test_rare_frames_meet_frequent_samples_block_by_block(generator):
    """A mean over every 20th sample less the mean over all: correlated exactly so far as the series is."""
    stride, n_frames, tau, n_series = 20, 400, 15.0, 120
    gaps, errors = np.empty(n_series), np.empty(n_series)
    for index in range(n_series):
        values = autoregressive(generator, stride * n_frames + 7, tau)
        frames = values[stride - 1 :: stride]
        assert len(frames) == n_frames
        gap = mean({COLD: frames}) - mean({COLD: values})
        assert len(gap.influence[COLD]) == n_frames
        assert gap.influence[COLD].sum() == pytest.approx(0.0, abs=1e-12)
        gaps[index], errors[index] = gap.value, gap.standard_error
    # Scatter of 120 known to 6.5 %; four of these.
    assert errors.mean() / math.sqrt(np.mean(gaps**2)) == pytest.approx(1.0, abs=0.26)
    apart = math.hypot(mean({COLD: frames}).standard_error, mean({COLD: values}).standard_error)
    assert errors.mean() < 0.5 * apart


def test_effective_samples_against_arviz(generator):
    repeats = [autoregressive(generator, 20_000, 6.0) for _ in range(4)]
    ours = mean({(1.0, 0.8, 100, index): values for index, values in enumerate(repeats)}).effective_samples
    assert ours == pytest.approx(float(array_stats.ess(np.array(repeats), method="mean")), rel=0.10)
    assert ours == pytest.approx(80_000 / 12.0, rel=0.10)


@pytest.mark.parametrize("lengths", [(400,), (300, 150)])
def test_covariances_of_short_correlated_series_are_unbiased(lengths):
    """AR(1) of tau 8 over 400 samples: means removed cost 2 tau / N = 4 %; 2500 series tell it from zero."""
    generator = np.random.default_rng(12)
    tau, n_series, slope = 8.0, 2500, -0.6
    own, shared, biased = np.empty(n_series), np.empty(n_series), np.empty(n_series)
    for index in range(n_series):
        first = {(1.0, 0.8, 100, r): autoregressive(generator, n, tau) for r, n in enumerate(lengths)}
        second = {
            chain: 10.0 * (slope * values + math.sqrt(1.0 - slope**2) * autoregressive(generator, len(values), tau))
            for chain, values in first.items()
        }
        own[index] = covariance(first, first).value
        shared[index] = covariance(first, second).value / 10.0
        biased[index] = np.var(np.concatenate(list(first.values())))
    error = own.std() / math.sqrt(n_series)
    assert error < 0.008
    assert own.mean() == pytest.approx(1.0, abs=4.0 * error)
    assert shared.mean() == pytest.approx(slope, abs=4.0 * shared.std() / math.sqrt(n_series))
    assert biased.mean() < 1.0 - 4.0 * error


def test_covariance_error_bars_cover():
    generator = np.random.default_rng(13)
    n_series, slope = 300, -0.5
    off, errors = np.empty(n_series), np.empty(n_series)
    for index in range(n_series):
        first = autoregressive(generator, 8000, 5.0)
        second = slope * first + math.sqrt(1.0 - slope**2) * autoregressive(generator, 8000, 5.0)
        found = covariance({COLD: first}, {COLD: second})
        off[index], errors[index] = found.value - slope, found.standard_error
    inside = int(np.sum(np.abs(off) < 1.96 * errors))
    assert stats.binomtest(inside, n_series, 0.95).pvalue > 1e-4
    # Scatter of 300 known to 4.1 %; four of these.
    assert errors.mean() / off.std() == pytest.approx(1.0, abs=0.165)


def test_covariance_matrix_of_errors(generator):
    common, other = autoregressive(generator, 40_000, 3.0), autoregressive(generator, 40_000, 3.0)
    a, b = mean({COLD: common}), mean({COLD: 0.6 * common + 0.8 * other})
    c = mean({HOT: generator.normal(size=500)})
    matrix = covariance_matrix([a, b, c, exact(1.0), a * -2.0])
    assert np.diag(matrix) == pytest.approx(
        [each.standard_error**2 for each in (a, b, c, exact(1.0), a * 2.0)], rel=1e-12, abs=1e-300
    )
    assert np.linalg.eigvalsh(matrix).min() > -1e-12 * matrix.max()
    assert matrix[0, 2] == matrix[1, 2] == matrix[0, 3] == 0.0
    assert matrix[0, 4] == pytest.approx(-2.0 * matrix[0, 0])
    # Correlation 0.6 from several hundred blocks: (1 - 0.36) / sqrt(500) = 0.03.
    assert matrix[0, 1] / math.sqrt(matrix[0, 0] * matrix[1, 1]) == pytest.approx(0.6, abs=0.12)


@pytest.mark.parametrize("tau", [1.0, 20.0])
def test_short_series_are_not_judged_ok_and_longer_ones_are(tau):
    """Below 200 autocorrelation times mostly not, at 50 never; from 200 on in 95 % (binomial error of 300: 1.3 %)."""
    generator, judged = np.random.default_rng(15), {}
    for length in (50, 100, 200, 800):
        found = [mean({COLD: autoregressive(generator, round(length * tau), tau)}) for _ in range(300)]
        judged[length] = np.mean([each.trust == "ok" for each in found])
        assert all(bool(each.reason) == (each.trust != "ok") for each in found)
    assert judged[50] < 0.02
    assert judged[100] < 0.2
    assert judged[200] > 0.92
    assert judged[800] > 0.97


def test_reasons_of_short_series(generator):
    short = mean({COLD: autoregressive(generator, 600, 20.0)})
    assert (short.trust, short.reason) == ("no", "too short to tell")
    none = mean({COLD: np.array([1.0, 2.0])})
    assert (none.standard_error, none.error_of_error, none.effective_samples) == (math.inf, math.inf, 0.0)
    assert (none.trust, none.reason) == ("no", "too short to tell")
    some = mean({COLD: generator.normal(size=60)})
    assert some.trust == "caution"
    assert "only about" in some.reason
    assert "effective samples" in some.reason


def test_fluctuations_are_told_no_better_than_the_means_they_are_about(generator):
    """Squares forget twice as fast: 100 correlation times of the series are 200 of its squares."""
    n_series, tau = 100, 10.0
    found = []
    for _ in range(n_series):
        values = {COLD: autoregressive(generator, round(100 * tau), tau)}
        found.append(covariance(values, values))
    assert np.median([each.effective_samples for each in found]) > 80.0
    assert np.mean([each.trust == "ok" for each in found]) < 0.2
    assert np.mean([(each * 2.0 + 1.0).trust == "ok" for each in found]) < 0.2
    assert np.median([each.underlying[COLD[:3]] for each in found]) == pytest.approx(50.0, rel=0.15)


def test_repeats_each_shorter_than_fifty_correlation_times_are_too_short(generator):
    many = {(1.0, 0.8, 100, r): autoregressive(generator, 300, 12.0) for r in range(20)}
    found = mean(many)
    assert found.effective_samples > 100
    assert (found.trust, found.reason) == ("no", "too short to tell")


@pytest.mark.parametrize("lengths", [(4000, 4000), (9000, 3000, 5000)])
def test_repeats_that_disagree_are_not_trusted(generator, lengths):
    """In location, and in scale where the means agree."""
    moved = mean({(1.0, 0.8, 100, r): generator.normal(size=n) + 0.3 * r for r, n in enumerate(lengths)})
    wider = mean({(1.0, 0.8, 100, r): generator.normal(size=n) * (1.0 + r) for r, n in enumerate(lengths)})
    for found in (moved, wider):
        assert found.trust in ("caution", "no")
        assert "repeats disagree" in found.reason


def test_agreeing_repeats_rarely_raise_caution():
    """R-hat: one false alarm in 500; blocks: three combined errors, one in 100. So 4 of 300 are expected."""
    generator = np.random.default_rng(14)
    found = [
        mean({COLD: autoregressive(generator, 6000, 3.0), COLD_AGAIN: autoregressive(generator, 3000, 3.0)})
        for _ in range(300)
    ]
    assert sum(each.trust != "ok" for each in found) <= 15
    assert sum("repeats" in each.reason for each in found) <= 4


def test_blocks_that_disagree_raise_caution(generator):
    """A slow mode too faint for the window: 1 % of the variance, but half of the error bar's square."""
    slow = autoregressive(generator, 200_000, 400.0)
    found = mean({COLD: generator.normal(size=200_000) + 0.12 * slow})
    assert found.trust == "caution"
    assert found.reason == "error bars from autocorrelation and from blocks disagree"


def test_error_bars_widen_for_their_noise_and_for_skewness(generator):
    values = np.exp(generator.normal(size=150))
    found = mean({COLD: values})
    (spread,) = found.scatters.values()
    assert found.freedom == pytest.approx(2.0 / spread.relative_error**2)
    student = stats.t.ppf(0.975, found.freedom) / stats.norm.ppf(0.975)
    # Hall's second-order term at z = 1.96: (14.76 + 7.68 - 3) / 18 = 1.080.
    expected = math.sqrt(found.variance) * student * (1.0 + 1.080 * found.skewness**2)
    assert found.standard_error == pytest.approx(expected, rel=1e-4)
    assert found.error_of_error == pytest.approx(0.5 * spread.relative_error * found.standard_error)
    assert spread.skewness == pytest.approx(found.skewness)
    assert found.skewness == pytest.approx((found * 3.0).skewness)
    assert found.skewness == pytest.approx(-(-found).skewness)


def test_values_that_are_no_numbers_are_not_trusted():
    assert Estimate(math.nan, {}).trust == "no"
    assert Estimate(math.inf, {}).reason == "not a finite number"


def test_nothing_to_average_is_refused():
    with pytest.raises(BadSeries, match="no samples"):
        mean({COLD: np.empty(0)})
    with pytest.raises(BadSeries, match="not finite numbers"):
        mean({COLD: np.array([1.0, math.nan])})


def test_curved_functions_of_short_correlated_means_are_unbiased():
    """Series of 200 samples, tau 2, mean and deviation 1: 1/x is high by var(mean) = 0.02, a/b by var/2 where a is
    half of b and noise; removing that leaves 3 var^2 = 0.0012. The mean of 1200 repetitions scatters by 0.004.
    """
    generator = np.random.default_rng(71)
    inverse, ratio, raw = [], [], []
    for _ in range(1200):
        shared = 1.0 + autoregressive(generator, 200, 2.0)
        a, b = mean({COLD: 0.5 * shared + 0.5 + autoregressive(generator, 200, 2.0)}), mean({COLD: shared})
        inverse.append((1.0 / b).value)
        ratio.append((a / b).value)
        raw.append((1.0 / b.value, a.value / b.value))
    for found, biased, off in zip((inverse, ratio), np.transpose(raw), (0.02, 0.01), strict=True):
        error = np.std(found) / math.sqrt(len(found))
        assert abs(np.mean(found) - 1.0) < 4.0 * error + 0.0012
        # what is taken off is itself curved: up to 6 var = 12 % more on average, and the variance is noisy
        assert np.mean(biased) - np.mean(found) == pytest.approx(off, rel=0.3)
