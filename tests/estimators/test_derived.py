"""Derived properties: their formulas against a published equation, their error bars against scatter.

Homogeneous wells: U(V) = V^-m h with h a sum of 3N squares, so that at any N u = 3T/2, c_v,res = 3/2,
P = rho T (1 + 3m/2), gamma_V = P/T, B_T = P; hence alpha = 1/T and c_p = c_v + 1 + 3m/2.
"""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from scipy import special
from scipy.signal import lfilter

from estimators.canonical import kinetic_temperature, rung_properties
from estimators.changes import changes
from estimators.derived import BLOCKS, FEWEST_BLOCKS, PARTS, derived, helmholtz_derivatives, in_blocks, unclear
from estimators.estimate import Estimate, exact, mean
from estimators.reweight import pool
from reference import find
from reference.properties import DERIVED, DIRECT
from sampler.fluid import Fluid, State
from sampler.series import Series

T, RHO, M, IDEAL = 1.3, 0.8, 2.0, 1.5
SMOOTH = Fluid(cutoff=2.5, truncation="force-shifted")
EXACT = {
    "heat_capacity": 3.0,
    "isobaric_heat_capacity": 3.0 + 1.0 + 1.5 * M,
    "thermal_expansion": 1.0 / T,
    "sound_speed": math.sqrt((4.0 + 1.5 * M) / 3.0 * T * (1.0 + 1.5 * M)),
    "joule_thomson": 0.0,
    "grueneisen": (1.0 + 1.5 * M) / 3.0,
    "enthalpy": T * (1.5 + 1.5 + 1.0 + 1.5 * M),
}
NUMBER, REPLICAS = 4000, 200


def series_of(state: State, repeat: int, energy, kinetic, *, bath=True, offset=0.0) -> Series:
    """Of the wells; `offset` is what the energy holds beyond that which is sampled."""
    return Series(
        fluid=SMOOTH,
        state=state,
        repeat=repeat,
        bath=bath,
        interval=0.05,
        energy=energy + offset,
        sampled_energy=energy,
        virial=M * energy,
        hypervirial=M**2 * energy,
        kinetic=kinetic,
        ledger=np.zeros(len(energy)),
        frames=np.empty((0, state.particles, 3)),
        frame_stride=len(energy) + 1,
    )


def correlated(rng, n, *, tau=4.0):
    """(n,) normal, with integrated autocorrelation time tau."""
    memory = (2.0 * tau - 1.0) / (2.0 * tau + 1.0)
    noise = rng.normal(size=n) * math.sqrt(1.0 - memory**2)
    noise[0] /= math.sqrt(1.0 - memory**2)
    return lfilter([1.0], [1.0, -memory], noise)


def thermal(rng, n, shape, temperature=T):
    """Gamma(shape, temperature), correlated: E. B. Wilson, M. M. Hilferty, PNAS 17, 684 (1931), moments to 1e-5."""
    return temperature * shape * (1.0 - 1.0 / (9.0 * shape) + correlated(rng, n) / (3.0 * math.sqrt(shape))) ** 3


def with_bath(rng, n=NUMBER, particles=100) -> list[Series]:
    parts = (thermal(rng, n, 1.5 * particles) for _ in range(2))
    return [series_of(State(T, RHO, particles), 0, *parts)]


def without_bath(rng, n=9000, particles=20) -> list[Series]:
    """K = E Beta(f/2, 3N/2) at the energy E = T (f + 3N)/2."""
    a, b = 1.5 * particles - 1.5, 1.5 * particles
    total = T * (a + b)
    kinetic = total * special.betaincinv(a, b, special.ndtr(correlated(rng, n)))
    return [series_of(State(T, RHO, particles), 0, total - kinetic, kinetic, bath=False)]


def found_in(series: list[Series], ideal: float | None = IDEAL) -> dict[str, Estimate]:
    temperature = T if series[0].bath else kinetic_temperature(series)
    return derived(rung_properties(series), temperature=temperature, density=RHO, ideal_heat_capacity=ideal)


def known(value: float, error: float, seed: int = 3, n: int = NUMBER) -> Estimate:
    """Of uncorrelated samples, with about this standard error."""
    noise = np.random.default_rng(seed).standard_normal(n)
    return replace(mean({(T, RHO, 100, 0): (noise - noise.mean()) / noise.std() * error * math.sqrt(n)}), value=value)


@pytest.mark.parametrize(("temperature", "density"), [(0.8, 0.85), (1.5, 0.3), (3.0, 0.05), (3.0, 0.9)])
def test_formulas_are_those_of_a_published_equation(temperature: float, density: float) -> None:
    """Exact parts; the rounding of a few operations."""
    equation, at = find("thol-2016"), {"temperature": temperature, "density": density}
    direct = {name: exact(equation.value(name, **at).value) for name in DIRECT}
    found = derived(direct, ideal_heat_capacity=2.5, **at)
    assert set(found) == set(PARTS) | {"heat_capacity"} == set(DERIVED) - {"compressibility_factor"}
    for name, each in found.items():
        assert each.value == pytest.approx(equation.value(name, **at, ideal_heat_capacity=2.5).value, rel=1e-11)
        assert each.standard_error == 0.0
    by_order = helmholtz_derivatives(direct, **at)
    published = equation.derivatives(temperature, density)
    for name, each in by_order.items():
        assert each.value == pytest.approx(float(published[int(name[1]), int(name[2])]), rel=1e-10, abs=1e-11)
    assert list(by_order) == ["A10", "A01", "A20", "A11", "A02"]


@pytest.mark.parametrize("sampled", [with_bath, without_bath])
def test_error_bars_are_the_scatter_of_independent_runs(sampled) -> None:
    """Of 200 runs: scatter over mean error bar within 4.5 of its own 5 %, mean within 4.5 standard errors of exact.

    With the temperature taken as exact where it is measured, that of the enthalpy would be almost twice as wide.
    """
    runs = [found_in(sampled(np.random.default_rng(seed))) for seed in range(REPLICAS)]
    assert set(runs[0]) == set(EXACT)
    for name, value in EXACT.items():
        values = np.array([run[name].value for run in runs])
        errors = np.array([run[name].standard_error for run in runs])
        ratio = values.std(ddof=1) / math.sqrt(np.mean(errors**2))
        assert abs(ratio - 1.0) <= 4.5 / math.sqrt(2.0 * REPLICAS), (name, ratio)
        allowed = 4.5 * values.std(ddof=1) / math.sqrt(REPLICAS)
        assert abs(values.mean() - value) <= allowed + 1e-4 * abs(value), (name, values.mean(), value)
        assert np.mean(errors) <= 0.15 * max(value, 1.0), name


def test_only_what_has_its_parts_is_there() -> None:
    (series,) = with_bath(np.random.default_rng(5))
    assert set(found_in([series], ideal=None)) == {"thermal_expansion"}
    stiffless = replace(series, hypervirial=None)
    assert set(found_in([stiffless])) == {"heat_capacity", "grueneisen", "enthalpy"}
    assert set(found_in([replace(stiffless, virial=None)])) == {"heat_capacity"}
    pressures = {"pressure": known(1.0, 0.1), "bulk_modulus": known(5.0, 0.1)}
    assert set(helmholtz_derivatives(pressures, temperature=T, density=RHO)) == {"A01", "A02"}
    whole = {"heat_capacity": known(4.0, 0.1), "thermal_pressure": known(2.0, 0.1)}
    assert set(derived(whole, temperature=T, density=RHO, ideal_heat_capacity=1.5)) == {"grueneisen"}


def test_derivatives_keep_the_method_of_their_parts() -> None:
    properties = rung_properties(with_bath(np.random.default_rng(6)))
    found = helmholtz_derivatives(properties, temperature=T, density=RHO)
    methods = {name: each.method for name, each in found.items()}
    assert methods == {
        "A10": "average",
        "A01": "average",
        "A20": "fluctuation",
        "A11": "derived",
        "A02": "derived",
    }
    assert found["A10"].value == pytest.approx(properties["residual_energy"].value / T, rel=1e-12)
    assert found["A10"].standard_error == pytest.approx(properties["residual_energy"].standard_error / T, rel=1e-9)
    pooled = {name: replace(each, method="reweighted") for name, each in properties.items()}
    reweighted = helmholtz_derivatives(pooled, temperature=T, density=RHO)
    assert {each.method for each in reweighted.values()} == {"reweighted"}


@pytest.mark.parametrize("value", [-3.0, 0.0, 0.39])
@pytest.mark.parametrize(
    ("part", "lost"),
    [
        ("bulk_modulus", {"isobaric_heat_capacity", "thermal_expansion", "sound_speed", "joule_thomson"}),
        ("residual_heat_capacity", {"sound_speed", "joule_thomson", "grueneisen"}),
    ],
)
def test_what_is_divided_by_a_number_about_zero_has_a_reason_and_no_value(
    value: float, part: str, lost: set[str]
) -> None:
    """0.39 is 3.9 standard errors above zero; 0.41 would do."""
    parts = {name: known(2.0, 0.1, seed) for seed, name in enumerate(DIRECT)}
    ideal = 0.5
    near = parts | {part: known(value - (ideal if part != "bulk_modulus" else 0.0), 0.1)}
    at = {"temperature": T, "density": RHO, "ideal_heat_capacity": ideal}
    whole, found = derived(parts, **at), derived(near, **at)
    assert set(whole) - set(found) == lost
    told = unclear(near, ideal_heat_capacity=ideal)
    assert set(told) == lost
    words = part.removeprefix("residual_").replace("_", " ")
    assert set(told.values()) == {f"the {words} that it is divided by is not clearly above zero"}
    assert all(math.isfinite(each.value) and math.isfinite(each.standard_error) for each in found.values())
    clear = parts | {part: known(0.43 - (ideal if part != "bulk_modulus" else 0.0), 0.1)}
    assert set(derived(clear, **at)) == set(whole)
    assert unclear(clear, ideal_heat_capacity=ideal) == {}


def test_too_few_samples_give_no_value_and_no_traceback() -> None:
    (series,) = with_bath(np.random.default_rng(7), n=3)
    properties = rung_properties([series])
    found = derived(properties, temperature=T, density=RHO, ideal_heat_capacity=IDEAL)
    assert found["enthalpy"].trust == "no"
    assert set(found) | set(unclear(properties, ideal_heat_capacity=IDEAL)) == set(EXACT)


def test_long_influences_are_summed_over_blocks_and_say_the_same() -> None:
    """Chains of unequal length in blocks of equal length; the error bar within 5 times its own noise, 1/sqrt(2 B)."""
    rng = np.random.default_rng(8)
    chains = {(T, RHO, 100, 0): correlated(rng, 200_000), (T, RHO, 100, 1): correlated(rng, 50_000)}
    whole = mean(chains | {(T, RHO, 100, 2): correlated(rng, 100)})
    short = in_blocks(whole)
    lengths = [len(each) for each in short.influence.values()]
    assert sum(lengths) <= BLOCKS + 100
    assert lengths[0] == pytest.approx(4 * lengths[1], rel=0.01)
    assert (lengths[2], FEWEST_BLOCKS) == (100, 128)
    assert short.value == whole.value
    assert short.standard_error == pytest.approx(whole.standard_error, rel=5.0 / math.sqrt(2.0 * BLOCKS))
    few = known(1.0, 0.1, n=BLOCKS)
    assert in_blocks(few) is few
    assert sum(map(np.sum, short.influence.values())) == pytest.approx(sum(map(np.sum, whole.influence.values())))


def ladder(temperatures: list[float], n: int = NUMBER, particles: int = 40) -> list[Series]:
    """Wells whose energy holds -0.3 - 0.02/T per particle more than is sampled."""
    rng = np.random.default_rng(9)
    return [
        series_of(
            State(each, RHO, particles),
            0,
            thermal(rng, n, 1.5 * particles, each),
            np.ones(n),
            offset=particles * (-0.3 - 0.02 / each),
        )
        for each in temperatures
    ]


def test_changes_along_a_ladder_of_wells() -> None:
    """A_res/T changes by the integral of u over 1/T; what is not sampled is linear in 1/T: the trapezoid is exact."""
    temperatures = [1.0, 1.15, 1.32, 1.5]
    series = ladder(temperatures)
    pooled = pool(series)
    energies = {
        at: found.properties["residual_energy"]
        for at, found in zip(temperatures, pooled.curve(temperatures), strict=True)
    }
    found = changes(pooled, series, energies)
    assert list(found) == temperatures[1:]
    for at, change in found.items():
        beta = 1.0 / at
        helmholtz = 1.5 * math.log(beta) - 0.3 * (beta - 1.0) - 0.01 * (beta**2 - 1.0)
        entropy = -0.3 * (beta - 1.0) - 0.02 * (beta**2 - 1.0) - helmholtz
        assert change.start == 1.0
        for estimate, value, largest in ((change.helmholtz, helmholtz, 0.004), (change.entropy, entropy, 0.02)):
            assert estimate.method == "reweighted"
            assert 0.0 < estimate.standard_error <= largest
            assert abs(estimate.value - value) <= 4.5 * estimate.standard_error


def test_changes_start_anew_beyond_a_gap_and_need_an_energy() -> None:
    temperatures = [1.0, 1.15, 3.0, 3.3]
    series = ladder(temperatures)
    energies = {at: known(1.5 * at, 0.01) for at in temperatures}
    assert {at: each.start for at, each in changes(pool(series), series, energies).items()} == {1.15: 1.0, 3.3: 3.0}
    flexible = [replace(each, energy=None) for each in series]
    assert changes(pool(flexible), flexible, energies) == {}
    assert set(changes(pool(series), series, {at: energies[at] for at in temperatures[:2]})) == {1.15}
