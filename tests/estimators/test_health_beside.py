"""Two sizes, and two routes to a heat capacity from different ensembles: known answers, noise and planted faults."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pytest
from scipy import stats

from estimators.canonical import rung_properties
from estimators.estimate import Estimate, mean
from estimators.health.box import two_sizes
from estimators.health.heat_routes import AT_CONSTANT_ENERGY, heat_routes
from estimators.health.reading import Reading
from estimators.reweight import pool
from sampler.fluid import Fluid, State
from sampler.series import Series

LEVEL = 0.01
SAMPLES = 10_000
STATE = State(1.2, 0.8, 100)


def values(seed: int, particles: int, **shifts: float) -> dict[str, Estimate]:
    """Independent u, P and c_v of mean 0 but for the shifts, each with standard error 0.01."""
    rng = np.random.default_rng((seed, particles))
    chain = (1.2, 0.8, particles, 0)
    names = ("residual_energy", "pressure", "residual_heat_capacity")
    return {name: mean({chain: rng.normal(shifts.get(name, 0.0), 1.0, SAMPLES)}) for name in names}


def compared(seed: int, known: Mapping[str, float], **shifts: float) -> Reading:
    own, other = values(seed, 100, **shifts), values(seed, 200)
    reading = two_sizes(own, other, known, particles=(100, 200), level=LEVEL)
    assert reading is not None
    return reading


def test_two_sizes_alarm_as_rarely_as_the_level_says() -> None:
    readings = [compared(seed, {}) for seed in range(300)]
    # three independent values, Bonferroni: 1 % of 300 at most; of a Poisson variable of mean 3, 9 is exceeded in 0.1 %
    assert sum(not each.passed for each in readings) <= 9
    # of the least of three uniform p: the deviate of 3 p, and 0 where that is above 1; its scatter is 0.7
    p = (np.arange(100_000) + 0.5) / 300_000
    expected = float(np.mean(stats.norm.isf(1.5 * p) * 3.0 * (1.0 - p) ** 2)) / 3.0
    assert np.mean([each.statistic for each in readings]) == pytest.approx(expected, abs=5 * 0.7 / np.sqrt(300))


def test_what_a_closed_box_is_known_to_do_is_no_fault_and_more_is() -> None:
    # the error of the difference is 0.014, a shift of 0.2 is 14 of them, and half as much again is allowed
    known = {"pressure": -0.2}
    assert not compared(1, {}, pressure=-0.2).passed
    assert compared(1, known, pressure=-0.2).passed
    assert compared(2, known, pressure=-0.29).passed
    assert compared(3, known, pressure=-0.11).passed
    assert not compared(4, known, pressure=-0.4).passed
    wrong_way = compared(5, known, pressure=0.2)
    assert not wrong_way.passed
    assert "100 particles differ from 200" in wrong_way.meaning
    assert "(-0.2 expected), c_v by" in wrong_way.meaning
    assert "take more than 200 particles" in wrong_way.meaning


@pytest.mark.parametrize("name", ["residual_energy", "pressure", "residual_heat_capacity"])
def test_a_size_effect_on_any_value_is_seen(name: str) -> None:
    # 0.1 is seven errors of the difference
    readings = [compared(seed, {}, **{name: 0.1}) for seed in range(20)]
    assert not any(each.passed for each in readings)
    assert np.mean([each.statistic for each in readings]) == pytest.approx(7.0, abs=1.0)


def test_few_samples_say_nothing_of_sizes() -> None:
    short = {name: mean({(1.2, 0.8, 200, 0): np.arange(20.0)}) for name in ("residual_energy", "pressure")}
    assert two_sizes(values(1, 100), short, {}, particles=(100, 200), level=LEVEL) is None
    assert two_sizes(values(1, 100), {}, {}, particles=(100, 200), level=LEVEL) is None


def harmonic(seed: int, *, bath: bool, spring: float = 1.0) -> list[Series]:
    """Repeats of 3N - 3 oscillators, whose residual heat capacity is (3N - 3)/(2N) at any temperature.

    spring : what stored energies are multiplied by: a canonical heat capacity is then off by its square
    Without a bath K is a share of E with the law Beta(f/2, f/2), and each repeat has an energy of its own.
    """
    rng = np.random.default_rng((seed, bath))
    half = 0.5 * (3 * STATE.particles - 3)
    series = []
    for repeat in range(3):
        if bath:
            kinetic = rng.gamma(1.5 * STATE.particles, STATE.temperature, SAMPLES)
            energy = rng.gamma(half, STATE.temperature, SAMPLES)
        else:
            whole = rng.gamma(2.0 * half, STATE.temperature)
            kinetic = whole * rng.beta(half, half, SAMPLES)
            energy = whole - kinetic
        energy = spring * energy
        series.append(
            Series(
                Fluid(cutoff=2.0, truncation="force-shifted"), STATE, repeat, bath, 0.1,
                energy=energy, sampled_energy=energy, virial=None, hypervirial=None, kinetic=kinetic, ledger=None,
                frames=np.empty((0, STATE.particles, 3)), frame_stride=1,
            )
        )  # fmt: skip
    return series


def routes(seed: int, spring: float = 1.0) -> Reading:
    canonical = pool(harmonic(seed, bath=True, spring=spring)).at(STATE.temperature)
    own = canonical.properties["residual_heat_capacity"]
    rung = [Series(**{**vars(each), "state": State(1.21, 0.8, 100)}) for each in harmonic(seed, bath=False)]
    other = rung_properties(rung)["residual_heat_capacity"]
    for each in (own, other):
        # relative errors of a variance of 30000 normal samples are 0.8 %; at constant energy c_v goes about as twice it
        assert each.standard_error < 0.03
    reading = heat_routes(own, other, level=LEVEL, routes=AT_CONSTANT_ENERGY)
    assert reading is not None
    return reading


def test_heat_capacity_at_constant_energy_is_that_in_a_bath() -> None:
    readings = [routes(seed) for seed in range(60)]
    # 1 % of 60: more than 5 once in 10^4
    assert sum(not each.passed for each in readings) <= 5
    assert "those of the kinetic energy at constant energy" in readings[0].meaning
    assert "is allowed for the time step" in readings[0].meaning


def test_a_wrong_heat_capacity_is_seen_at_constant_energy() -> None:
    # 10 % more in the energy are 21 % in its variance, 0.3 in c_v: ten errors
    assert not any(routes(seed, spring=1.1).passed for seed in range(10))
    assert not any(routes(seed, spring=0.9).passed for seed in range(10))


def test_only_the_share_of_the_time_step_is_allowed() -> None:
    rng = np.random.default_rng(8)
    chain, other = (1.2, 0.8, 100, 0), (1.21, 0.8, 100, 0)
    sharp = {key: rng.normal(size=1000) * 1e-3 for key in (chain, other)}  # errors of 3e-5
    own = mean({chain: 1.0 + sharp[chain]})
    passed = [
        heat_routes(own, mean({other: 1.0 + off + sharp[other]}), level=LEVEL, routes=AT_CONSTANT_ENERGY)
        for off in (-0.0045, 0.0045, -0.006, 0.006)
    ]
    assert [each is not None and each.passed for each in passed] == [True, True, False, False]
