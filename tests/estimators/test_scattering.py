"""Structure factor against its definition, an ideal gas, pairs of known S(k), g(r) and the equation of state."""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest

from estimators.errors import BadSeries
from estimators.scattering import Scattering, _fit, scattering
from estimators.structure import pair_structure
from reference.catalogue import find
from sampler.fluid import ELSEWHERE, Fluid, State
from sampler.protocol import Protocol
from sampler.rung import advance, assemble
from sampler.series import Series
from sampler.store import Chain, Segment

Floats = npt.NDArray[np.float64]

FLUID = Fluid(cutoff=3.0)
GAS = State(1.5, 0.1, 60)


def series_of(frames: Floats, state: State, *, fluid: Fluid = FLUID, repeat: int = 0) -> Series:
    nothing = np.zeros(len(frames))
    recorded = [nothing] * 6
    return Series(fluid, state, repeat, True, 1.0, *recorded, frames=frames, frame_stride=1)


def scattered(series: list[Series], k_max: float = 10.0) -> Scattering:
    found = scattering(series, k_max=k_max)
    assert found is not None
    return found


def ideal_gas(number: int, seed: int) -> Floats:
    return np.random.default_rng(seed).random((number, GAS.particles, 3)) * GAS.box


def test_factors_are_those_of_the_definition() -> None:
    """All waves of up to 4.2 lengths along an edge, grouped by hand: equal |k|, and bins of less than 0.1."""
    frames, unit = ideal_gas(6, 1), 2.0 * math.pi / GAS.box
    found = scattered([series_of(frames, GAS)], k_max=4.2 * unit)
    line = np.arange(-4, 5)
    waves = np.stack(np.meshgrid(line, line, line, indexing="ij"), axis=-1).reshape(-1, 3)
    length = unit * np.linalg.norm(waves, axis=1)
    sums = np.abs(np.sum(np.exp(1j * unit * np.einsum("fpi,vi->fpv", frames, waves)), axis=1)) ** 2
    factors = np.mean(sums, axis=0) / GAS.particles
    lengths = np.unique(np.round(length[(length > 0.0) & (length < 4.2 * unit)], 9))
    firsts: list[float] = []
    for each in lengths:
        if not firsts or each >= firsts[-1] + 0.1 - 1e-9:
            firsts.append(each)
    assert len(firsts) < len(lengths)
    bins = np.searchsorted(np.array(firsts) - 1e-9, length)
    chosen = [(bins == index + 1) & (length < 4.2 * unit) for index in range(len(firsts))]
    np.testing.assert_allclose(found.k, [np.mean(length[each]) for each in chosen], rtol=1e-12)
    np.testing.assert_allclose(found.s, [np.mean(factors[each]) for each in chosen], rtol=1e-9)


def test_an_ideal_gas_scatters_one_from_every_wave() -> None:
    """|rho_k|^2/N has mean 1 and variance 1 - 1/N at k != 0: chi^2 within 5 of its deviations, the limit within 4."""
    frames = ideal_gas(2000, 2)
    found = scattered([series_of(frames[:800], GAS), series_of(frames[800:], GAS, repeat=1)], k_max=6.0)
    degrees = len(found.k)
    assert degrees > 30
    chi_square = np.sum(((found.s - 1.0) / found.standard_error) ** 2)
    assert abs(chi_square - degrees) < 5.0 * math.sqrt(2.0 * degrees)
    assert 0.9 < found.standard_error[0] / math.sqrt(59 / 60 / (2000 * 3)) < 1.15
    assert found.standard_error[-1] < math.sqrt(1.0 / (2000 * 20)) * 1.15
    assert found.limit is not None
    assert found.bulk_modulus is not None
    assert found.limit.method == found.bulk_modulus.method == "structure"
    assert abs(found.limit.value - 1.0) < 4.0 * found.limit.standard_error
    assert found.limit.standard_error < 0.03
    tail = 2.0 * 0.1 * FLUID.tail(0.1)[1]
    assert abs(found.bulk_modulus.value - 0.15 - tail) < 4.0 * found.bulk_modulus.standard_error
    assert found.bulk_modulus.standard_error == pytest.approx(0.15 * found.limit.standard_error, rel=0.1)


def test_the_limit_of_pairs_is_found_where_no_wave_is_long_enough_to_see_it() -> None:
    """Particles in pairs, each displaced by a normal of width 0.5 from their middle: S = 1 + exp(-k^2/4), 2 at k = 0.

    The longest wave of a cube of 10 has S = 1.906. Of 60 replicas, 95 % of intervals should hold 2: 57 +- 1.7, at least
    50 (4 deviations). The error bar is at most twice the scatter, which 60 tell to 9 %. What a choice of polynomials
    shifts does not average out; a quarter of the scatter is allowed, which widens an error by 3 %.
    """
    state = State(1.0, 0.2, 200)
    rng = np.random.default_rng(3)
    limits = []
    for _ in range(60):
        middles = np.repeat(rng.random((100, 100, 3)) * state.box, 2, axis=1)
        limit = scattered([series_of(middles + rng.normal(0.0, 0.5, middles.shape), state)], k_max=3.0).limit
        assert limit is not None
        limits.append((limit.value, limit.standard_error))
    values, errors = np.array(limits).T
    scatter = float(np.std(values, ddof=1))
    assert abs(np.mean(values) - 2.0) < 4.0 * scatter / math.sqrt(60) + 0.25 * scatter
    assert np.sum(np.abs(values - 2.0) < 1.96 * errors) >= 50
    assert math.sqrt(np.mean(errors**2)) < 2.0 * scatter
    assert scatter < 0.15


@pytest.mark.parametrize("order", [1, 2, 3])
def test_the_slopes_of_a_fit_are_its_derivatives(order: int) -> None:
    """Where the fit is exact; by central differences, good to their square, 1e-8."""
    square, counts = np.arange(1.0, 8.0), np.array([3.0, 6.0, 4.0, 3.0, 12.0, 12.0, 6.0])
    s = 1.0 / (0.4 + 0.3 * square)
    fit = _fit(square, s, counts, order)
    assert fit is not None
    assert fit[0] == pytest.approx(2.5, rel=1e-9)
    for index, slope in enumerate(fit[1]):
        change = 1e-4 * s[index] * np.eye(len(s))[index]
        high, low = _fit(square, s + change, counts, order), _fit(square, s - change, counts, order)
        assert high is not None
        assert low is not None
        assert (high[0] - low[0]) / (2.0 * change[index]) == pytest.approx(slope, rel=1e-4, abs=1e-4)


def sampled(state: State, cutoff: float, effort: float, frame_every: int) -> Series:
    """A short run, frames of every so many steps."""
    steps = round(effort / state.particles / 1000) * 1000
    protocol = Protocol(seed=6, repeats=1, equilibration=4000, steps=steps, record_every=10, frame_every=frame_every)
    chain = Chain(Path(), Fluid(cutoff=cutoff), state, protocol, 0)
    before: Segment | None = None
    segments = []
    for index, (first, _) in enumerate(chain.segments):
        before = advance(chain, index, before, np.zeros(1, np.uint8))
        if before is not None and first >= protocol.settling:
            segments.append(before)
    return assemble(chain, segments)


@pytest.fixture(scope="module")
def liquid() -> Series:
    return sampled(State(1.0, 0.8, 500), 3.0, 1.5e7, 150)


@pytest.fixture(scope="module")
def gas() -> Series:
    return sampled(State(2.0, 0.3, 500), 5.0, 1.5e7, 150)


@pytest.mark.parametrize(("name", "bound"), [("liquid", 0.08), ("gas", 0.15)])
def test_the_limit_is_the_compressibility_of_the_reference_equation(
    name: str, bound: float, request: pytest.FixtureRequest
) -> None:
    """rho T/B_T and B_T of the equation within 4 errors, these bounded relative to the value; S(0) is that of the fluid
    without its long-range part, twice which makes up the difference."""
    series: Series = request.getfixturevalue(name)
    found = scattered([series])
    temperature, density = series.state.temperature, series.state.density
    derivatives = find("thol-2016").derivatives(temperature, density)
    modulus = density * temperature * float(1.0 + 2.0 * derivatives[0, 1] + derivatives[0, 2])
    assert found.limit is not None
    assert found.bulk_modulus is not None
    assert abs(found.bulk_modulus.value - modulus) < 4.0 * found.bulk_modulus.standard_error
    assert found.bulk_modulus.standard_error < bound * modulus
    expected = density * temperature / (modulus - 2.0 * density * series.fluid.tail(density)[1])
    assert abs(found.limit.value - expected) < 4.0 * found.limit.standard_error
    assert found.limit.standard_error < bound * expected


def test_factors_are_the_transform_of_g(gas: Series) -> None:
    """S = 1 + (N - 1)/V int (g - 1) sin(kr)/(kr) 4 pi r^2 dr over the sphere in the cube, for k from 2 to 9.

    g levels off at its value there, 1 + O(1/N), rather than at 1: waves of g have died out at this density. Tolerance:
    4 errors of S, and 0.01 for the end of the sphere.
    """
    found, pairs = scattered([gas], k_max=9.0), pair_structure([gas])
    assert pairs is not None
    level = float(np.mean(pairs.g[pairs.r > 0.85 * pairs.r[-1]]))
    shells = 4.0 * np.pi * pairs.r**2 * (pairs.r[1] - pairs.r[0]) * gas.state.density
    chosen = found.k > 2.0
    transform = 1.0 + np.sinc(np.outer(found.k[chosen], pairs.r) / np.pi) @ (shells * (pairs.g - level))
    assert np.all(np.abs(found.s[chosen] - transform) < 4.0 * found.standard_error[chosen] + 0.01)
    assert np.max(found.standard_error[chosen] / found.s[chosen]) < 0.03
    assert np.ptp(found.s[chosen]) > 0.5


def test_what_frames_cannot_tell_is_left_out() -> None:
    frames = ideal_gas(40, 4)
    assert scattering([series_of(frames[:0], GAS)]) is None
    few = scattered([series_of(frames[:3], GAS)])
    assert np.all(np.isinf(few.standard_error))
    assert few.limit is few.bulk_modulus is None
    small = State(1.5, 0.4, 60)  # longest wave 2 pi/5.3
    short = scattered([series_of(np.mod(frames, small.box), small)])
    assert short.limit is short.bulk_modulus is None
    unknown = scattered([series_of(frames, GAS, fluid=Fluid(potential=ELSEWHERE))], k_max=3.0)
    assert unknown.limit is not None
    assert unknown.bulk_modulus is None


def test_without_a_bath_the_temperature_is_the_kinetic_one() -> None:
    with_bath = series_of(ideal_gas(40, 5), GAS)
    kinetic = np.full(40, 0.5 * 1.8 * (3 * GAS.particles - 3))
    found = [
        scattered([each], 3.0).bulk_modulus for each in (with_bath, replace(with_bath, bath=False, kinetic=kinetic))
    ]
    tail = 2.0 * 0.1 * FLUID.tail(0.1)[1]
    assert found[0] is not None
    assert found[1] is not None
    assert found[1].value - tail == pytest.approx((found[0].value - tail) * 1.8 / 1.5, rel=1e-9)


def test_what_is_no_rung_is_refused() -> None:
    frames = ideal_gas(5, 10)
    with pytest.raises(BadSeries, match="share all three"):
        scattering([series_of(frames, GAS), series_of(frames, State(1.1, 0.1, 60), repeat=1)])
    with pytest.raises(BadSeries, match="same repeat number"):
        scattering([series_of(frames, GAS), series_of(frames, GAS)])
    with pytest.raises(BadSeries, match="longest wave"):
        scattering([series_of(frames, GAS)], k_max=0.5)
    frames[1, 2, 0] = np.nan
    with pytest.raises(BadSeries, match="not finite"):
        scattering([series_of(frames, GAS)])
