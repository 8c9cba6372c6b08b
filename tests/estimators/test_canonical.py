"""Properties of one rung on exactly solvable systems, at constant temperature and at constant energy.

Homogeneous wells: U(V) = V^-m h with h a sum of 3N squares, so W = m U, X = m^2 U, and the partition function is
V^N (T V^m)^(3N/2): u = 3T/2, c_v,res = 3/2, P = rho T (1 + 3m/2), gamma_V = P/T, B_T = P at any N.
With a bath U ~ Gamma(3N/2, T); without one K = E Beta(f/2, 3N/2) with f = 3N - 3, and T = E / (f/2 + 3N/2).
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy import special, stats
from scipy.signal import lfilter

from estimators.canonical import kinetic_temperature, rung_properties
from estimators.errors import BadSeries
from estimators.estimate import mean
from sampler.fluid import Fluid, State
from sampler.series import Series

TEMPERATURE, DENSITY, EXPONENT = 1.3, 0.8, 2.0
SMOOTH = Fluid(cutoff=2.5, truncation="force-shifted")
SAMPLES = (9000, 5000)
TAU = 4.0


def autoregressive(generator, n, tau):
    """(n,) normal AR(1) series of unit variance with integrated autocorrelation time tau."""
    memory = (2.0 * tau - 1.0) / (2.0 * tau + 1.0)
    start = generator.normal(size=1)
    rest = generator.normal(size=n - 1) * math.sqrt(1.0 - memory**2)
    return lfilter([1.0], [1.0, -memory], np.concatenate([start, rest]))


def record(fluid, particles, repeat, *, bath, energy, kinetic):
    """A Series of the homogeneous wells with the fluid's own long-range part on top of U, W and X."""
    n = len(energy)
    tail = [particles * each for each in fluid.tail(DENSITY)]
    return Series(
        fluid=fluid,
        state=State(TEMPERATURE, DENSITY, particles),
        repeat=repeat,
        bath=bath,
        interval=0.05,
        energy=energy + tail[0],
        sampled_energy=energy,
        virial=EXPONENT * energy + tail[1],
        hypervirial=EXPONENT**2 * energy + tail[2],
        kinetic=kinetic,
        ledger=np.zeros(n),
        frames=np.empty((0, particles, 3)),
        frame_stride=n + 1,
    )


def thermal(generator, n, shape):
    """(n,) correlated samples of Gamma(shape, T): an AR(1) series through the normal distribution."""
    return TEMPERATURE * special.gammaincinv(shape, stats.norm.cdf(autoregressive(generator, n, TAU)))


def with_bath(generator, particles, fluid=SMOOTH):
    return [
        record(
            fluid,
            particles,
            repeat,
            bath=True,
            energy=thermal(generator, n, 1.5 * particles),
            kinetic=thermal(generator, n, 1.5 * particles),
        )
        for repeat, n in enumerate(SAMPLES)
    ]


def without_bath(generator, particles, fluid=SMOOTH):
    freedom = 3 * particles - 3
    total = TEMPERATURE * 0.5 * (freedom + 3 * particles)
    found = []
    for repeat, n in enumerate(SAMPLES):
        uniform = stats.norm.cdf(autoregressive(generator, n, TAU))
        kinetic = total * special.betaincinv(0.5 * freedom, 1.5 * particles, uniform)
        found.append(record(fluid, particles, repeat, bath=False, energy=total - kinetic, kinetic=kinetic))
    return found


def test_constant_energy_repeats_of_different_energy_do_not_count_as_fluctuation():
    """Half of the repeats 2 % warmer: pooled, their distance would count as scatter of K within a repeat."""
    cold, warm = without_bath(np.random.default_rng(61), 256)
    hotter = {name: 1.02 * getattr(warm, name) for name in ("energy", "sampled_energy", "kinetic")}
    same, apart = rung_properties([cold, warm]), rung_properties([cold, replace(warm, **hotter)])
    share = len(warm) / (len(cold) + len(warm))
    for name in ("residual_heat_capacity", "thermal_pressure"):
        # the well's heat capacity is the same at every energy; gamma_V keeps its virials
        assert apart[name].value == pytest.approx(same[name].value, rel=0.02)
        assert apart[name].standard_error == pytest.approx(same[name].standard_error, rel=0.1)
    assert apart["residual_energy"].value == pytest.approx(
        same["residual_energy"].value * (1 + 0.02 * share), rel=0.005
    )
    assert apart["residual_energy"].standard_error == pytest.approx(same["residual_energy"].standard_error, rel=0.1)
    found = kinetic_temperature([cold, replace(warm, **hotter)])
    assert found.value == pytest.approx(TEMPERATURE * (1 + 0.02 * share), rel=0.005)
    assert found.trust == "ok"


def exact_values(fluid):
    energy, virial, hypervirial = fluid.tail(DENSITY)
    pressure = DENSITY * TEMPERATURE * (1.0 + 1.5 * EXPONENT)
    return {
        "residual_energy": 1.5 * TEMPERATURE + energy,
        "residual_heat_capacity": 1.5,
        "pressure": pressure + DENSITY * virial,
        "compressibility_factor": (pressure + DENSITY * virial) / (DENSITY * TEMPERATURE),
        "thermal_pressure": pressure / TEMPERATURE,
        "bulk_modulus": pressure + DENSITY * (virial + hypervirial),
    }


def expected_errors(fluid, particles, *, bath):
    """Standard errors to leading order, from var(U) = 3 N T^2 / 2 with a bath and f / (f + 3N) of it without."""
    freedom = 3 * particles - 3
    share = 1.0 if bath else freedom / (freedom + 3 * particles)
    cooling = 0.0 if bath else 2.0 * particles / freedom  # fall of T for a rise of U/N
    memory = (2.0 * TAU - 1.0) / (2.0 * TAU + 1.0)
    tau_of_squares = 0.5 * (1.0 + memory**2) / (1.0 - memory**2)
    energy = TEMPERATURE * math.sqrt(1.5 / particles * share * 2.0 * TAU / sum(SAMPLES))
    capacity = 1.5 / share * math.sqrt(2.0 * 2.0 * tau_of_squares / sum(SAMPLES))
    virial = 1.5 * EXPONENT + fluid.tail(DENSITY)[1] / TEMPERATURE  # <W> / (N T)
    return {
        "residual_energy": energy,
        "residual_heat_capacity": capacity,
        "pressure": DENSITY * (EXPONENT - cooling) * energy,
        "compressibility_factor": (EXPONENT + virial * cooling) * energy / TEMPERATURE,
        "thermal_pressure": EXPONENT * DENSITY * capacity,
        "bulk_modulus": EXPONENT**2 * DENSITY * TEMPERATURE * capacity,
    }


@pytest.mark.parametrize(
    "fluid", [SMOOTH, Fluid(cutoff=1.5, truncation="corrected")], ids=lambda fluid: fluid.truncation
)
@pytest.mark.parametrize("particles", [12, 256])
@pytest.mark.parametrize("bath", [True, False], ids=["bath", "no bath"])
def test_homogeneous_wells(bath, particles, fluid):
    generator = np.random.default_rng(31)
    found = rung_properties((with_bath if bath else without_bath)(generator, particles, fluid))
    exact, errors = exact_values(fluid), expected_errors(fluid, particles, bath=bath)
    assert list(found) == list(exact)
    for name, estimate in found.items():
        assert estimate.trust == "ok", name
        assert abs(estimate.value - exact[name]) < 4.0 * estimate.standard_error, name
        # The error bars are known to 3 to 4.5 %; the formula leaves out the skew of few particles.
        assert estimate.standard_error == pytest.approx(errors[name], rel=0.2), name
    fluctuations = {"residual_heat_capacity", "thermal_pressure", "bulk_modulus"}
    assert {name for name, each in found.items() if each.method == "fluctuation"} == fluctuations
    assert {name for name, each in found.items() if each.method == "average"} == set(found) - fluctuations


@pytest.mark.parametrize("particles", [12, 256])
def test_error_bars_equal_the_scatter_of_many_rungs(particles):
    generator = np.random.default_rng(32)
    for make in (with_bath, without_bath):
        many = [rung_properties(make(generator, particles)) for _ in range(60)]
        for name, exact in exact_values(SMOOTH).items():
            off = np.array([each[name].value - exact for each in many])
            errors = np.array([each[name].standard_error for each in many])
            # Scatter of 60 known to 9.1 %; four of these.
            assert math.sqrt(np.mean(off**2)) / errors.mean() == pytest.approx(1.0, abs=0.37), (make.__name__, name)
            assert abs(off.mean()) < 4.0 * errors.mean() / math.sqrt(60), (make.__name__, name)


def test_heat_capacity_is_the_covariance_of_both_energies():
    """An energy that is reported but not sampled: its independent noise must not enter, its slope must."""
    generator = np.random.default_rng(33)
    series = []
    for each in with_bath(generator, 100):
        pairs = 40.0 * autoregressive(generator, len(each), TAU)
        series.append(replace(each, energy=1.2 * each.energy + pairs))
    found = rung_properties(series)["residual_heat_capacity"]
    assert abs(found.value - 1.2 * 1.5) < 4.0 * found.standard_error
    assert found.standard_error < 0.15
    # The variance of the reported energy alone would be (1.2^2 * 1.5 * 100 T^2 + 40^2) / (100 T^2) = 11.6.


def test_constant_energy_heat_capacity_follows_the_reported_energy_too():
    generator = np.random.default_rng(34)
    series = [replace(each, energy=1.2 * each.energy) for each in without_bath(generator, 100)]
    found = rung_properties(series)["residual_heat_capacity"]
    assert abs(found.value - 1.2 * 1.5) < 4.0 * found.standard_error
    assert found.standard_error < 0.12


@pytest.mark.parametrize("bath", [True, False], ids=["bath", "no bath"])
def test_virial_with_a_life_of_its_own_softens_the_fluid_only(bath):
    """Noise of variance s^2 on W alone: B_T falls by s^2 / (V T), nothing else moves.

    At constant energy by s^2 (f/2 - 1) <1/K> / V, with (f/2 - 1) <1/K> = (1 - 1/C) / T, C the capacity of the box.
    """
    generator, particles, width = np.random.default_rng(41), 12, 9.0
    series = (with_bath if bath else without_bath)(generator, particles)
    noisy = [replace(each, virial=each.virial + width * autoregressive(generator, len(each), TAU)) for each in series]
    found = rung_properties(noisy)
    capacity = math.inf if bath else 0.5 * (3 * particles - 3) + 1.5 * particles
    exact = exact_values(SMOOTH)
    softening = width**2 * DENSITY / particles / TEMPERATURE * (1.0 - 1.0 / capacity)
    exact["bulk_modulus"] -= softening
    for name, estimate in found.items():
        assert abs(estimate.value - exact[name]) < 4.0 * estimate.standard_error, name
    assert found["bulk_modulus"].standard_error < softening / 8.0


def test_constant_energy_reduces_to_lebowitz_percus_verlet():
    """Their formula with f kinetic degrees: C = (f/2) / (1 - f var(K) / (2 <K>^2)), to order 1/N."""
    series = without_bath(np.random.default_rng(35), 256)
    found = rung_properties(series)["residual_heat_capacity"]
    kinetic = np.concatenate([each.kinetic for each in series])
    freedom = series[0].kinetic_freedom
    ratio = freedom * np.var(kinetic) / (2.0 * np.mean(kinetic) ** 2)
    published = 0.5 * freedom / (1.0 - ratio) - 0.5 * freedom
    assert found.value == pytest.approx(published / 256, rel=0.01)


def test_kinetic_temperature_counts_the_degrees_of_freedom():
    series = without_bath(np.random.default_rng(36), 12)
    found = kinetic_temperature(series)
    assert abs(found.value - TEMPERATURE) < 4.0 * found.standard_error
    # 3N degrees instead of 3N - 3 would be off by a twelfth.
    assert found.standard_error < TEMPERATURE / 12.0 / 8.0


def test_nominal_temperature_is_not_used_at_constant_energy():
    series = without_bath(np.random.default_rng(37), 50)
    moved = [replace(each, state=State(2.0, DENSITY, 50)) for each in series]
    here, there = rung_properties(series), rung_properties(moved)
    assert {name: each.value for name, each in here.items()} == {name: each.value for name, each in there.items()}


@pytest.mark.parametrize("make", [with_bath, without_bath])
@pytest.mark.parametrize("truncation", ["shifted", "plain"])
def test_bulk_modulus_needs_contact_where_the_force_jumps(truncation, make):
    fluid = Fluid(cutoff=2.5, truncation=truncation)
    series = make(np.random.default_rng(38), 100, fluid)
    chain = (TEMPERATURE, DENSITY, 100, 0)
    contact = mean({chain: 1.05 + 0.2 * np.random.default_rng(39).normal(size=300)})
    without, found = rung_properties(series), rung_properties(series, contact=contact)
    assert "bulk_modulus" not in without
    assert set(found) - set(without) == {"bulk_modulus"}
    smooth = rung_properties([replace(each, fluid=SMOOTH) for each in series])["bulk_modulus"]
    # -(2 pi/9) rho^2 r_c^3 w(r_c) g(r_c), w = 24 (r^-6 - 2 r^-12) at 2.5.
    surface = -2.0 * math.pi / 9.0 * DENSITY**2 * 2.5**3 * 24.0 * (2.5**-6 - 2.0 * 2.5**-12) * contact.value
    assert surface == pytest.approx(-0.715 * contact.value, rel=0.05)
    assert found["bulk_modulus"].value == pytest.approx(smooth.value + surface, rel=1e-10)
    assert found["bulk_modulus"].standard_error == pytest.approx(
        math.hypot(smooth.standard_error, contact.standard_error * surface / contact.value), rel=0.25
    )


def test_series_that_do_not_belong_together_are_refused():
    series = with_bath(np.random.default_rng(40), 20)
    with pytest.raises(BadSeries, match="at least one repeat"):
        rung_properties([])
    with pytest.raises(BadSeries, match="share all three"):
        rung_properties([series[0], replace(series[1], state=State(1.4, DENSITY, 20))])
    with pytest.raises(BadSeries, match="share all three"):
        rung_properties([series[0], replace(series[1], bath=False)])
    with pytest.raises(BadSeries, match="same repeat number"):
        rung_properties([series[0], series[0]])
    with pytest.raises(BadSeries, match="no samples"):
        rung_properties([each.after(10**6) for each in series])
