"""Health checks of the series alone: exact synthetic rungs with known autocorrelation, false alarms, planted faults."""

from __future__ import annotations

import math
import re
from collections.abc import Callable, Sequence
from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest
from scipy import special, stats
from scipy.signal import lfilter

from estimators.canonical import rung_properties
from estimators.estimate import Estimate
from estimators.health.enough import enough
from estimators.health.equal_shares import equal_shares
from estimators.health.excess import excess, jointly
from estimators.health.kinetic_law import kinetic_law
from estimators.health.ledger import ledger
from estimators.health.pair_slope import pair_slope
from estimators.health.reading import Reading, deviate, threshold
from estimators.health.settled import settled
from sampler.fluid import Fluid, State
from sampler.protocol import Protocol
from sampler.rung import advance, assemble
from sampler.series import Series
from sampler.store import Chain, Segment

Floats = npt.NDArray[np.float64]
Generator = np.random.Generator

LEVEL = 0.01
FLUID = Fluid(cutoff=2.5, truncation="force-shifted")
N, DENSITY, INTERVAL = 256, 0.8, 0.05
CAPACITY = 1.5  # of the potential energy, per particle
TAU_KINETIC, TAU_ENERGY, TAU_MOMENTUM = 3.0, 8.0, 10.0  # samples
RUNGS = 400


def autoregressive(generator: Generator, n: int, tau: float) -> Floats:
    """(n,) normal AR(1) series of unit variance with integrated autocorrelation time tau."""
    memory = (2.0 * tau - 1.0) / (2.0 * tau + 1.0)
    start = generator.normal(size=1)
    rest = generator.normal(size=n - 1) * math.sqrt(1.0 - memory**2)
    return np.asarray(lfilter([1.0], [1.0, -memory], np.concatenate([start, rest])))


@cache
def quantiles(shape: float) -> tuple[Floats, Floats]:
    normal = np.linspace(-7.0, 7.0, 4001)
    return normal, special.gammaincinv(shape, stats.norm.cdf(normal))


def thermal(generator: Generator, n: int, shape: float, temperature: float, tau: float) -> Floats:
    """(n,) correlated samples of Gamma(shape, temperature): an AR(1) series through the normal distribution."""
    return temperature * np.interp(autoregressive(generator, n, tau), *quantiles(shape))


def walk(generator: Generator, n: int, temperature: float, rate: float = 2.0e-3, jitter: float = 0.06) -> Floats:
    """(n,) balance of a healthy bath: jitter, a walk of variance `rate` per unit of time, and the drift it makes."""
    drift = rate / (2.0 * temperature) * INTERVAL
    steps = drift + math.sqrt(rate * INTERVAL) * generator.normal(size=n)
    return np.cumsum(steps) + jitter * generator.normal(size=n)


def rung(
    generator: Generator, n: int, *, temperature: float = 1.0, repeats: int = 2, tau: float = TAU_ENERGY
) -> list[Series]:
    """Repeats of a canonical rung: U and K gamma-distributed, total momentum normal, everything correlated."""
    found = []
    for repeat in range(repeats):
        parts = [thermal(generator, n, 0.5 * N, temperature, TAU_KINETIC) for _ in range(3)]
        momentum = [math.sqrt(N * temperature) * autoregressive(generator, n, TAU_MOMENTUM) for _ in range(3)]
        energy = thermal(generator, n, CAPACITY * N, temperature, tau)
        kinetic = sum(parts)
        found.append(
            Series(
                fluid=FLUID,
                state=State(temperature, DENSITY, N),
                repeat=repeat,
                bath=True,
                interval=INTERVAL,
                energy=energy,
                sampled_energy=energy,
                virial=2.0 * energy + 0.3 * math.sqrt(N) * autoregressive(generator, n, tau),
                hypervirial=4.0 * energy,
                kinetic=kinetic,
                ledger=walk(generator, n, temperature) - kinetic - energy,
                frames=np.empty((0, N, 3)),
                frame_stride=n + 1,
                kinetic_parts=np.stack(parts, axis=1),
                momentum=np.stack(momentum, axis=1),
            )
        )
    return found


def times(series: Series, factor: float, *names: str) -> Series:
    return replace(series, **{name: factor * series.column(name) for name in names})


def listed(found: Reading | Sequence[Reading] | None) -> list[Reading]:
    assert found is not None
    return [found] if isinstance(found, Reading) else list(found)


def passed(found: Reading | Sequence[Reading] | None) -> bool:
    return all(each.passed for each in listed(found))


def neighbours(series: Sequence[Series], *, level: float) -> Reading | None:
    """`pair_slope` to an exact rung at 1.08, drawn from what the given one holds."""
    seed = int(1e6 * abs(series[0].column("energy")[0]))
    return pair_slope(series, rung(np.random.default_rng(seed), len(series[0]), temperature=1.08), level=level)


Check = Callable[..., Reading | Sequence[Reading] | None]
CHECKS: dict[str, Check] = {
    "ledger": ledger,
    "kinetic-law": kinetic_law,
    "equal-shares": equal_shares,
    "pair-slope": neighbours,
    "settled": settled,
}
# Where a two-sided test has no allowance, one reading exceeds the threshold of 10 % about that often.
SHARP = {"equal-shares", "settled", "pair-slope"}


@pytest.fixture(scope="module")
def healthy() -> list[list[Series]]:
    generator = np.random.default_rng(71)
    return [rung(generator, 2000) for _ in range(RUNGS)]


@pytest.mark.parametrize("name", CHECKS)
def test_false_alarms_of_healthy_rungs_are_as_rare_as_stated(name: str, healthy: list[list[Series]]) -> None:
    """Each reading counts by itself. Bounds: what a binomial count exceeds once in 30000 (4 standard deviations)."""
    readings = [listed(CHECKS[name](series, level=LEVEL)) for series in healthy]
    assert {each.check for found in readings for each in found} == {name}
    for column in zip(*readings, strict=True):
        statistics = np.array([each.statistic for each in column])
        assert np.sum(statistics > threshold(LEVEL)) <= stats.binom.isf(3e-5, RUNGS, LEVEL)
        assert np.sum(statistics > threshold(0.1)) <= stats.binom.isf(3e-5, RUNGS, 0.1)
    if name in SHARP:
        first = np.array([found[0].statistic for found in readings])
        # Bonferroni over correlated observables may halve the rate, not more.
        assert np.sum(first > threshold(0.1)) >= stats.binom.ppf(3e-5, RUNGS, 0.05)


@pytest.mark.parametrize("name", CHECKS)
def test_readings_name_their_check_and_share_the_threshold(name: str, healthy: list[list[Series]]) -> None:
    for reading in listed(CHECKS[name](healthy[0], level=0.003)):
        assert (reading.check, reading.level, reading.threshold) == (name, 0.003, threshold(0.003))
        assert reading.meaning[0].islower()
        assert not reading.meaning.endswith(".")


def test_excess_is_students_t_beyond_what_is_allowed() -> None:
    values = np.random.default_rng(72).normal(size=30)
    estimate = Estimate(1.0, {(1.0, 0.8, 10, 0): (values - values.mean()) / 30})
    error = math.sqrt(estimate.variance)
    expected = stats.norm.isf(stats.t.sf(0.4 / error, estimate.freedom))
    assert excess(estimate, 0.2, 0.6) == pytest.approx(expected)
    assert excess(estimate, 1.4, 2.0) == pytest.approx(expected)
    assert excess(estimate, 0.2, 1.0) == 0.0
    sure = Estimate(1.0, {(1.0, 0.8, 10, 0): np.zeros(30)})
    assert excess(sure, 0.0, 1.0) == 0.0
    assert excess(sure, 0.0, 0.999) > 30.0
    assert excess(Estimate(math.nan, estimate.influence), 0.0, 1.0) > 30.0


def test_jointly_is_bonferroni() -> None:
    assert stats.norm.sf(jointly(1.0, 3.0, 2.0)) == pytest.approx(3.0 * stats.norm.sf(3.0))
    assert jointly(0.0, 0.1) == 0.0


# kinetic-law


def test_a_kinetic_energy_without_variance_fails() -> None:
    """Velocities rescaled to the exact temperature at every step."""
    exact = 1.5 * N * np.ones(2000)
    series = [replace(each, kinetic=exact) for each in rung(np.random.default_rng(73), 2000)]
    assert not passed(kinetic_law(series, level=1e-9))


def test_a_kinetic_energy_of_too_little_variance_fails() -> None:
    """0.7 of the variance. Its logarithm is known to sqrt(2 x 1.57 / 8000) = 0.02 (the tau of squares is 1.57)."""
    series = rung(np.random.default_rng(74), 4000)
    narrow = [replace(each, kinetic=1.5 * N + math.sqrt(0.7) * (each.column("kinetic") - 1.5 * N)) for each in series]
    (reading,) = listed(kinetic_law(narrow, level=LEVEL))
    assert reading.statistic == pytest.approx(0.35 / math.sqrt(4.0 * 1.57 / 8000), abs=4.5)


def with_forces(series: Sequence[Series]) -> list[Series]:
    """Of a scheme of ours that does not lower the kinetic energy, as what was recorded of forces tells."""
    return [replace(each, laplacian=np.full(len(each), 1000.0 * N)) for each in series]


@pytest.mark.parametrize(
    ("factor", "beyond", "ours"),
    [(1.01, 0.010, True), (1.01, 0.005, False), (0.99, 0.005, True), (0.99, 0.005, False)],
    ids=["1 % hot", "1 % hot elsewhere", "1 % cold", "1 % cold elsewhere"],
)
def test_a_kinetic_energy_of_another_temperature_fails(factor: float, beyond: float, ours: bool) -> None:
    """Standard error of the mean, relative: sqrt(2/f x 2 tau/n) = 0.00055 at n = 2 x 25000 and f = 3N."""
    series = [times(each, factor, "kinetic") for each in rung(np.random.default_rng(75), 25_000)]
    (reading,) = listed(kinetic_law(with_forces(series) if ours else series, level=1e-5))
    assert not reading.passed
    expected = beyond / math.sqrt(2.0 / (3 * N) * 2.0 * TAU_KINETIC / 50_000)
    # 4.5 for the mean itself, a tenth for the error bar
    assert reading.statistic == pytest.approx(expected, abs=4.5 + 0.1 * expected)


def test_noise_that_is_3_percent_too_small_fails() -> None:
    """6 % less temperature: with 600 effective samples 30 errors; their number makes Student's t less sure."""
    series = [times(each, 0.97**2, "kinetic") for each in rung(np.random.default_rng(76), 2000)]
    assert listed(kinetic_law(series, level=LEVEL))[0].statistic > 10.0


@pytest.mark.parametrize(("factor", "ours"), [(0.997, True), (0.997, False), (1.003, False)])
def test_the_known_step_bias_of_the_mean_is_allowed(factor: float, ours: bool) -> None:
    """Higher only where the scheme is not known: it may be half a step that velocities are beside positions."""
    series = [times(each, factor, "kinetic") for each in rung(np.random.default_rng(76), 25_000)]
    (reading,) = listed(kinetic_law(with_forces(series) if ours else series, level=LEVEL))
    assert reading.statistic < 1.5  # the variance alone; without the allowance the mean is 5 errors off


def test_the_mean_of_our_schemes_is_not_higher_and_half_steps_have_the_variance_that_goes_with_it() -> None:
    """5 errors of 0.00055 in the mean; a variance 4 % too large where one is allowed, known to 0.3 %."""
    series = [times(each, 1.003, "kinetic") for each in rung(np.random.default_rng(76), 25_000)]
    assert not passed(kinetic_law(with_forces(series), level=LEVEL))
    wide = [replace(each, kinetic=1.5 * N + 1.02 * (each.column("kinetic") - 1.5 * N)) for each in series]
    (reading,) = listed(kinetic_law(wide, level=LEVEL))
    # The logarithm of a variance is known to sqrt(4 x 1.57 / n), 1.57 being the tau of squares.
    assert reading.statistic == pytest.approx(
        (2.0 * math.log(1.02 * 1.003) - 2.0 * math.log(1.005)) / math.sqrt(4.0 * 1.57 / 50_000), abs=4.5
    )
    assert not reading.passed


def test_kinetic_law_needs_a_bath_kinetic_energies_and_samples() -> None:
    series = rung(np.random.default_rng(77), 2000)
    assert kinetic_law([replace(each, bath=False) for each in series], level=LEVEL) is None
    assert kinetic_law([series[0], replace(series[1], kinetic=None)], level=LEVEL) is None
    assert kinetic_law([each.after(1950) for each in series], level=LEVEL) is None
    assert kinetic_law([], level=LEVEL) is None


# equal-shares


def test_a_direction_that_is_warmer_fails() -> None:
    """3 % along z: 2 % over the mean; its error is sqrt(2/N (1 - 1/3) x 2 tau/n) = 0.0020."""
    series = [
        replace(each, kinetic_parts=each.column("kinetic_parts") * np.array([1.0, 1.0, 1.03]))
        for each in rung(np.random.default_rng(78), 4000)
    ]
    shares, flow = listed(equal_shares(series, level=1e-4))
    assert flow.passed
    assert not shares.passed
    assert "along z" in shares.meaning
    assert shares.statistic == pytest.approx(0.02 / math.sqrt(2.0 / N * 2.0 / 3.0 * 6.0 / 8000), abs=5.5)


def test_a_flow_fails() -> None:
    """Half a thermal momentum along y; its error is sqrt(2 tau/n) = 0.05."""
    series = [
        replace(each, momentum=each.column("momentum") + 0.5 * math.sqrt(N) * np.array([0.0, 1.0, 0.0]))
        for each in rung(np.random.default_rng(79), 4000)
    ]
    shares, flow = listed(equal_shares(series, level=1e-4))
    assert shares.passed
    assert not flow.passed
    assert "along y" in flow.meaning


def test_a_momentum_that_the_bath_does_not_reach_fails() -> None:
    """Half of the mean square, which is known to sqrt(2 x 5 x 2 / (3 x 8000)) = 3 %."""
    series = [times(each, math.sqrt(0.5), "momentum") for each in rung(np.random.default_rng(80), 4000)]
    assert not passed(equal_shares(series, level=1e-6))


def test_a_conserved_momentum_must_be_zero() -> None:
    series = [
        replace(each, bath=False, momentum=1e-9 * each.column("momentum"))
        for each in rung(np.random.default_rng(81), 4000)
    ]
    assert passed(equal_shares(series, level=LEVEL))
    moving = [replace(each, momentum=each.column("momentum") + 1.0) for each in series]
    assert not passed(equal_shares(moving, level=LEVEL))
    # The same where a bath keeps the momentum at zero.
    held = [replace(each, bath=True, freedom=3 * N - 3) for each in series]
    assert passed(equal_shares(held, level=LEVEL))
    assert not passed(equal_shares([replace(each, freedom=3 * N) for each in held], level=LEVEL))


def test_equal_shares_reads_what_was_recorded() -> None:
    series = rung(np.random.default_rng(82), 2000)
    bare = [replace(each, kinetic_parts=None) for each in series]
    assert len(listed(equal_shares(bare, level=LEVEL))) == 1
    assert equal_shares([replace(each, momentum=None) for each in bare], level=LEVEL) is None


# pair-slope


def slope_told(reading: Reading) -> tuple[float, float]:
    found = re.search(r"has ([\d.]+) of the slope .* \+- ([\d.e-]+);", reading.meaning)
    assert found is not None
    return float(found[1]), float(found[2])


@pytest.mark.parametrize(("true", "samples"), [(1.08, (6000, 6000)), (1.09, (6000, 3000)), (1.06, (3000, 6000))])
def test_the_slope_is_that_of_the_temperatures_sampled(true: float, samples: tuple[int, int]) -> None:
    """Samples of 1 and of `true`, said to be of 1 and 1.08; the error bar to a quarter, from sums over 200 rungs."""
    generator = np.random.default_rng(83)
    told = []
    for _ in range(40):
        cold, warm = rung(generator, samples[0]), rung(generator, samples[1], temperature=true)
        warm = [replace(each, state=State(1.08, DENSITY, N)) for each in warm]
        told.append(slope_told(listed(pair_slope(cold, warm, level=LEVEL))[0]))
    ratios, errors = np.array(told).T
    exact = (1.0 - 1.0 / true) / (1.0 - 1.0 / 1.08)
    assert abs(ratios.mean() - exact) < 4.5 * errors.mean() / math.sqrt(40)
    # The scatter of 40 is known to 11 %; 4 of these. Errors are told to one digit.
    assert ratios.std(ddof=1) / errors.mean() == pytest.approx(1.0, abs=0.45)
    assert errors.mean() < 0.08


def test_energies_of_another_temperature_or_width_fail() -> None:
    generator = np.random.default_rng(84)
    cold, warm = rung(generator, 20_000), rung(generator, 20_000, temperature=1.08)
    assert passed(pair_slope(cold, warm, level=LEVEL))
    hot = [replace(each, state=State(1.08, DENSITY, N)) for each in rung(generator, 20_000, temperature=1.0908)]
    assert not passed(pair_slope(cold, hot, level=1e-3))
    centre = CAPACITY * N * 1.08
    narrow = [replace(each, sampled_energy=centre + 0.8 * (each.column("energy") - centre)) for each in warm]
    assert not passed(pair_slope(cold, narrow, level=1e-3))


def test_no_slope_without_overlap_bath_or_samples() -> None:
    generator = np.random.default_rng(85)
    cold, warm, far = (rung(generator, 2000, temperature=each) for each in (1.0, 1.08, 1.6))
    assert pair_slope(cold, far, level=LEVEL) is None
    assert pair_slope(cold, [replace(each, bath=False) for each in warm], level=LEVEL) is None
    assert pair_slope(cold, [replace(each, sampled_energy=None) for each in warm], level=LEVEL) is None
    assert pair_slope([each.after(1990) for each in cold], [each.after(1990) for each in warm], level=LEVEL) is None
    assert pair_slope(cold, [], level=LEVEL) is None


# settled


def test_a_temperature_ramp_fails() -> None:
    """2 % of sqrt(1.5 N) = 19.6 deviations of U are 0.39; 2500 effective samples tell a slope to sqrt(12/2500)."""
    series = []
    for each in rung(np.random.default_rng(86), 20_000):
        ramp = np.linspace(0.99, 1.01, len(each))
        series.append(
            replace(each, **{name: ramp * each.column(name) for name in ("energy", "sampled_energy", "virial")})
        )
    trend, *_ = listed(settled(series, level=1e-3))
    assert not trend.passed
    assert "trend" in trend.meaning
    assert trend.statistic == pytest.approx(0.39 / math.sqrt(12.0 / 2500), abs=4.5)


def test_a_ramp_is_seen_in_the_kinetic_energy_alone() -> None:
    series = [
        replace(each, kinetic=np.linspace(0.99, 1.01, len(each)) * each.column("kinetic"))
        for each in rung(np.random.default_rng(87), 8000)
    ]
    trend, agreement = listed(settled(series, level=1e-3))
    assert "kinetic" in trend.meaning
    assert not trend.passed
    assert agreement.passed


def test_a_ramp_of_the_bath_alone_is_seen_in_its_kicks() -> None:
    """Of N particles they scatter by sqrt(2/3N) = 5 % a sample, so that 1000 tell a slope to 0.6 %."""
    generator = np.random.default_rng(89)
    steady = [replace(each, bath_temperature=generator.normal(1.0, 0.05, 500)) for each in rung(generator, 500)]
    trend, _ = listed(settled(steady, level=1e-3))
    assert trend.passed
    rising = [replace(each, bath_temperature=each.bath_temperature + np.linspace(0, 0.04, 500)) for each in steady]
    trend, _ = listed(settled(rising, level=1e-3))
    assert "temperature of the bath" in trend.meaning
    assert not trend.passed


def test_a_frozen_repeat_fails_and_is_named() -> None:
    series = rung(np.random.default_rng(88), 2000, repeats=3)
    names = ("energy", "sampled_energy", "virial", "kinetic")
    held = {name: np.full(2000, series[1].column(name)[0]) for name in names}
    (reading,) = listed(settled([series[0], replace(series[1], **held), series[2]], level=1e-9))
    assert not reading.passed
    assert reading.repeat == 1


@pytest.mark.parametrize("fault", ["repeat", "half"])
def test_repeats_or_halves_of_another_mean_fail(fault: str) -> None:
    """One standard deviation off, where means are known to sqrt(16/4000) = 0.06 of one."""
    series = rung(np.random.default_rng(89), 4000, repeats=4 if fault == "repeat" else 1)
    values = series[-1].column("sampled_energy").copy()
    values[2000 * (fault == "half") :] += math.sqrt(CAPACITY * N)
    series[-1] = replace(series[-1], sampled_energy=values)
    trend, agreement = listed(settled(series, level=1e-4))
    assert not agreement.passed
    assert trend.passed or fault == "half"


def test_repeats_without_a_bath_may_differ_in_energy() -> None:
    series = [replace(each, bath=False) for each in rung(np.random.default_rng(90), 4000)]
    other = replace(series[1], **{name: series[1].column(name) + 40.0 for name in ("sampled_energy", "virial")})
    assert passed(settled([series[0], other], level=LEVEL))
    assert not passed(settled([replace(each, bath=True) for each in (series[0], other)], level=LEVEL))


def test_a_cut_at_half_the_run_fails() -> None:
    series = rung(np.random.default_rng(91), 2000)
    readings = listed(settled(series, level=LEVEL, cut=[(500, 2500), (1950, 3950)]))
    assert [(each.repeat, each.passed) for each in readings] == [(None, True), (None, True), (0, True), (1, False)]
    assert "49 %" in readings[-1].meaning


def test_settled_says_nothing_of_too_few_samples() -> None:
    series = [each.after(1900) for each in rung(np.random.default_rng(92), 2000)]
    assert settled([replace(each, kinetic=None) for each in series], level=LEVEL) is None
    assert settled([], level=LEVEL) is None


# enough


@pytest.mark.parametrize(("n", "tau", "ok"), [(4000, 8.0, True), (1000, 40.0, False)])
def test_effective_samples_behind_energy_and_heat_capacity(n: int, tau: float, ok: bool) -> None:
    """n/tau effective samples: 500 and 25; counted to a sixth near 50, more loosely below."""
    for seed in range(5):
        series = rung(np.random.default_rng(930 + seed), n, tau=tau)
        readings = listed(enough(rung_properties(series)))
        assert [each.passed for each in readings] == [ok, ok]
        assert 50.0 * tau / n * 0.5 < readings[0].statistic < 50.0 * tau / n * 2.5 + 0.3


def test_enough_fails_where_trust_says_no() -> None:
    for seed in range(12):
        series = rung(np.random.default_rng(940 + seed), 400, tau=8.0)
        found = rung_properties(series)
        for name, reading in zip(
            ("residual_energy", "residual_heat_capacity"), listed(enough(rung_properties(series))), strict=True
        ):
            if found[name].trust == "no":
                assert not reading.passed, seed


def test_frozen_energies_are_never_enough() -> None:
    (series, *_) = rung(np.random.default_rng(95), 500)
    still = replace(series, energy=np.ones(500), sampled_energy=np.ones(500))
    assert not any(each.passed for each in listed(enough(rung_properties([still]))))
    assert enough(rung_properties([replace(series, energy=None, sampled_energy=None)])) is None


# ledger


def with_balance(series: Series, more: Floats) -> Series:
    return replace(series, ledger=series.column("ledger") + more)


def test_a_drift_fails() -> None:
    """1e-4 per particle and time; a walk of 2e-3 per time over 2 x 200 is known to sqrt(2e-3/400)/N = 9e-6 of that."""
    series = rung(np.random.default_rng(96), 4000)
    assert passed(ledger(series, level=LEVEL))
    drifting = [with_balance(each, 1e-4 * N * each.times) for each in series]
    drift, fast, slow = listed(ledger(drifting, level=1e-4))
    assert (drift.passed, fast.passed, slow.passed) == (False, True, True)
    assert drift.statistic == pytest.approx((1e-4 - 1e-5 - 1e-3 / N) / 8.7e-6, abs=5.0)


def test_a_walk_and_its_own_drift_are_allowed() -> None:
    """A walk of 0.3 per time drifts by 0.15/N, five errors, and is far wider than the jitter after half a unit."""
    generator = np.random.default_rng(97)
    drifts, slows = [], []
    for _ in range(50):
        series = rung(generator, 4000)
        wandering = [with_balance(each, walk(generator, len(each), 1.0, rate=0.3, jitter=0.0)) for each in series]
        drift, _, slow = listed(ledger(wandering, level=LEVEL))
        drifts.append(drift.statistic)
        slows.append(slow.statistic)
    for statistics in (drifts, slows):
        assert np.sum(np.array(statistics) > threshold(LEVEL)) <= stats.binom.isf(3e-5, 50, LEVEL)


@pytest.mark.parametrize(("share", "ok"), [(0.07, True), (0.15, False)])
def test_a_tenth_of_the_scatter_of_the_kinetic_energy_is_allowed(share: float, ok: bool) -> None:
    generator = np.random.default_rng(101)
    width = share * math.sqrt(1.5 * N)
    series = [with_balance(each, width * generator.normal(size=4000)) for each in rung(generator, 4000)]
    assert [each.passed for each in listed(ledger(series, level=LEVEL))] == [True, ok, True]


def test_energies_that_wander_with_the_structure_fail() -> None:
    """A part of correlation time 0.5 and three times the variance of the jitter."""
    generator = np.random.default_rng(98)
    foreign = [
        with_balance(each, 0.06 * math.sqrt(3.0) * autoregressive(generator, 4000, 10.0))
        for each in rung(generator, 4000)
    ]
    drift, fast, slow = listed(ledger(foreign, level=1e-4))
    assert (drift.passed, fast.passed, slow.passed) == (True, True, False)


def test_energies_of_another_instant_fail() -> None:
    series = rung(np.random.default_rng(99), 4000)
    late = [replace(each, sampled_energy=np.roll(each.column("sampled_energy"), 1)).after(1) for each in series]
    _, fast, _ = listed(ledger(late, level=1e-9))
    assert not fast.passed


def test_ledger_reads_what_was_recorded() -> None:
    series = rung(np.random.default_rng(100), 2000)
    rare = [replace(each, interval=0.5) for each in series]
    assert len(listed(ledger(rare, level=LEVEL))) == 2
    assert ledger([replace(series[0], ledger=None), series[1]], level=LEVEL) is None
    assert ledger([each.after(1990) for each in series], level=LEVEL) is None
    assert ledger([], level=LEVEL) is None


@pytest.fixture(scope="module")
def sampled(tmp_path_factory: pytest.TempPathFactory) -> tuple[Chain, list[Segment]]:
    """100 units of time of a liquid with force-shifted forces."""
    protocol = Protocol(seed=7, equilibration=2000, steps=20_000)
    folder: Path = tmp_path_factory.mktemp("study")
    chain = Chain(folder, Fluid(cutoff=2.3, truncation="force-shifted"), State(1.0, DENSITY, 108), protocol, 0)
    segments: list[Segment] = []
    for index in range(len(chain.segments)):
        segment = advance(chain, index, segments[-1] if segments else None, np.zeros(1, np.uint8))
        assert segment is not None
        segments.append(segment)
    return chain, [
        each for each, (first, _) in zip(segments, chain.segments, strict=True) if first >= protocol.settling
    ]


def test_a_real_run_passes_and_energies_of_another_truncation_fail(sampled: tuple[Chain, list[Segment]]) -> None:
    chain, segments = sampled
    series = assemble(chain, segments)
    assert len(series) == 2000
    for check in (ledger, kinetic_law, equal_shares, settled):
        assert passed(check([series], level=1e-3)), check.__name__
    foreign = assemble(replace(chain, fluid=Fluid(cutoff=2.3, truncation="plain")), segments)
    drift, fast, slow = listed(ledger([foreign], level=1e-3))
    assert (drift.passed, fast.passed, slow.passed) == (True, True, False)


def test_deviates_are_those_of_a_normal_variable_and_finite_for_no_chance_at_all() -> None:
    assert deviate(2.0 * float(stats.norm.sf(3.0))) == pytest.approx(3.0)
    assert deviate(1.0) == 0.0
    assert 38.0 < deviate(0.0) < 39.0
    assert deviate(LEVEL) == pytest.approx(threshold(LEVEL))
