"""Reweighting of a harmonic system, known exactly at every temperature, and against pymbar's own answers."""

from __future__ import annotations

import logging
import math
import subprocess
import sys
from collections.abc import Callable, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
import numpy.typing as npt
import pytest
from scipy.signal import lfilter
from scipy.stats import binomtest

from estimators import moments, reweight
from estimators.errors import BadSeries, NotSolved
from estimators.estimate import Estimate
from estimators.gamma import scatter
from estimators.mixture import polished
from estimators.reweight import Pooled, pool
from sampler.fluid import Fluid, State
from sampler.series import Series

Floats = npt.NDArray[np.float64]

PARTICLES, DENSITY = 8, 0.5
FLUID = Fluid(cutoff=1.0, truncation="corrected")
GAP_CLOSED_BY = "set rungs at 1.9282 epsilon/k_B, 3.0984 epsilon/k_B and 4.9787 epsilon/k_B between them"
EXACT: dict[str, Callable[[float], float]] = {
    "residual_energy": lambda t: 1.875 * t,
    "residual_heat_capacity": lambda t: 1.875,
    "pressure": lambda t: 1.3 * DENSITY * t,
    "compressibility_factor": lambda t: 1.3,
    "thermal_pressure": lambda t: 1.3 * DENSITY,
    "bulk_modulus": lambda t: 1.78 * DENSITY * t,
}


def harmonic(
    rng: np.random.Generator, temperature: float, samples: int, *, memory: float = 0.0, repeat: int = 0
) -> Series:
    """3N modes, each an autoregressive Gaussian of variance T, with energy U_dyn = sum x^2 / 2.

    H is the energy of half of them: U = U_dyn + H/2, W = 0.4 H and X = 2 W, so that with h = <H>/(NT) = 3/4
    U/N = (3/2 + h/2) T, c_v = 3/2 + h/2, Z = gamma_V/rho = 1 + 0.4 h and B_T/(rho T) = 1 + 1.2 h - 0.16 h: EXACT.
    """
    modes = 3 * PARTICLES
    noise = rng.standard_normal((samples, modes))
    noise[1:] *= math.sqrt(1.0 - memory**2)
    energies = 0.5 * temperature * lfilter([1.0], [1.0, -memory], noise, axis=0) ** 2
    half, whole, nothing = np.sum(energies[:, : modes // 2], axis=1), np.sum(energies, axis=1), np.zeros(samples)
    state = State(temperature, DENSITY, PARTICLES)
    recorded = (whole + 0.5 * half, whole, 0.4 * half, 0.8 * half, nothing, nothing)
    return Series(FLUID, state, repeat, True, 1.0, *recorded, frames=np.zeros((0, PARTICLES, 3)), frame_stride=1)


def free_energy(temperature: float, start: float) -> float:
    """F/T less that at `start`: the partition function goes as T^(3N/2)."""
    return 1.5 * PARTICLES * math.log(start / temperature)


@pytest.fixture(scope="module")
def independent() -> list[Series]:
    """Rungs of unequal length without correlation, the second one in two repeats."""
    rng = np.random.default_rng(21)
    plan = [(1.0, 3000, 0), (1.3, 2000, 0), (1.3, 1000, 1), (1.7, 4000, 0), (2.2, 2500, 0)]
    return [harmonic(rng, temperature, samples, repeat=repeat) for temperature, samples, repeat in plan]


def solved_by_pymbar(series: Sequence[Series]) -> tuple[Any, Floats, Floats]:
    """pymbar's solution, and U_dyn and U of all samples, in the order of `series`, which is that of the rungs."""
    logging.getLogger("pymbar").setLevel(logging.ERROR)
    from pymbar import MBAR

    temperatures = sorted({each.state.temperature for each in series})
    counts = [sum(len(each) for each in series if each.state.temperature == t) for t in temperatures]
    sampled = np.concatenate([each.sampled_energy for each in series])
    beta = 1.0 / np.array(temperatures)
    solver = MBAR(np.multiply.outer(beta, sampled), counts, relative_tolerance=1e-13, maximum_iterations=1000)
    return solver, sampled, np.concatenate([each.energy for each in series])


def without_window(estimate: Estimate) -> float:
    """Standard error of an estimate whose samples are known to be independent of one another."""
    return math.sqrt(sum(scatter(repeats, window=0).variance for repeats in estimate.repeats.values()))


def test_values_are_those_of_pymbar_and_so_are_errors_of_independent_samples(independent: list[Series]) -> None:
    """Values to 1e-8, asymptotic errors within 5 %, the heat capacity's as that of a mean product.

    10^4 samples know an error to 1 %, the heaviest of an extrapolation to 2 %; influences at fixed free energies miss
    by more than 5. The window, which is to find that there is no correlation, may add its own noise of about 5 %.
    """
    pooled = pool(independent)
    solver, sampled, energy = solved_by_pymbar(independent)
    differences = solver.compute_free_energy_differences()
    ours = pooled.free_energies
    np.testing.assert_allclose([each.value for each in ours], differences["Delta_f"][0], atol=1e-8)
    np.testing.assert_allclose([without_window(each) for each in ours], differences["dDelta_f"][0], rtol=0.05)
    np.testing.assert_allclose([each.standard_error for each in ours], differences["dDelta_f"][0], rtol=0.2)
    np.testing.assert_allclose(pooled.overlap, solver.compute_overlap()["matrix"], atol=1e-8)
    virial = np.concatenate([each.virial for each in independent])
    for temperature in (1.15, 1.7, 2.4):
        means = solver.compute_multiple_expectations(np.stack([energy, sampled]), sampled / temperature)["mu"]
        observables = np.stack([energy, (energy - means[0]) * (sampled - means[1]), virial])
        theirs = solver.compute_multiple_expectations(observables, sampled / temperature)
        per_particle = np.array([1.0, temperature**-2, DENSITY]) / PARTICLES
        values = theirs["mu"] * per_particle + np.array([0.0, 0.0, DENSITY * temperature])
        names = ("residual_energy", "residual_heat_capacity", "pressure")
        expected = dict(zip(names, zip(values, theirs["sigma"] * per_particle, strict=True), strict=True))
        properties = pooled.at(temperature).properties
        for name, (value, error) in expected.items():
            bias_removed = 0.01 * value if name == "residual_heat_capacity" else 1e-8
            assert abs(properties[name].value - value) < bias_removed
            assert abs(without_window(properties[name]) / error - 1.0) < 0.05, (temperature, name)
            assert abs(properties[name].standard_error / error - 1.0) < 0.2, (temperature, name)


def test_influences_are_those_of_the_estimating_equations(independent: list[Series]) -> None:
    """Written out in full matrices.

    Sums over each rung vanish: centred over all samples at once, they would carry the differences between rungs.
    """
    temperature = 1.5
    beta = 1.0 / np.array([1.0, 1.3, 1.7, 2.2])
    rungs = [0, 1, 1, 2, 3]
    pooled = pool(independent)
    state = np.concatenate([np.full(len(each), rung) for rung, each in zip(rungs, independent, strict=True)])
    sampled = np.concatenate([each.sampled_energy for each in independent])
    counts = np.bincount(state).astype(float)
    f = np.array([each.value for each in pooled.free_energies])
    terms = counts[:, None] * np.exp(f[:, None] - np.multiply.outer(beta, sampled))
    density = np.sum(terms, axis=0)
    p = terms / density
    hessian = (np.diag(counts) - p @ p.T)[1:, 1:]
    w = np.exp(-sampled / temperature) / density
    w /= np.sum(w)

    def centred(values: Floats) -> Floats:
        return values - (np.bincount(state, values) / counts)[state]

    psi = -np.linalg.solve(hessian, np.array([centred(row) for row in p[1:]]))
    energy, virial, hypervirial = (
        np.concatenate([getattr(each, name) for each in independent]) for name in ("energy", "virial", "hypervirial")
    )
    e, u, v = (each - w @ each for each in (sampled, energy, virial))
    volume, correction = PARTICLES / DENSITY, 1.0 / (1.0 - np.sum(w**2))
    integrands = {
        "residual_energy": energy / PARTICLES,
        "residual_heat_capacity": u * e / (PARTICLES * temperature**2),
        "pressure": virial / volume,
        "thermal_pressure": v * e / (volume * temperature**2),
        "bulk_modulus": (virial + hypervirial - v**2 / temperature) / volume,
    }
    properties = pooled.at(temperature).properties
    for name, values in integrands.items():
        deviations = values - w @ values
        phi = centred(w * deviations) - (p[1:] @ (w * deviations)) @ psi
        found = np.concatenate(list(properties[name].influence.values()))
        assert np.linalg.norm(found - phi) < 0.01 * np.linalg.norm(phi)  # the corrections of covariances scale some
        assert np.max(np.abs(np.bincount(state, found))) < 1e-9 * np.sum(np.abs(found))
        if name in ("residual_energy", "pressure"):
            np.testing.assert_allclose(found, phi, atol=1e-8 * np.max(np.abs(phi)))
    assert abs(properties["residual_heat_capacity"].value / (w @ integrands["residual_heat_capacity"]) - 1.0) < 0.01
    assert correction < 1.01
    for index, estimate in enumerate(pooled.free_energies[1:]):
        found = np.concatenate([estimate.influence[chain] for chain in estimate.influence])
        np.testing.assert_allclose(found, psi[index], atol=1e-8 * np.max(np.abs(psi[index])))


def test_values_and_error_bars_of_correlated_samples_hold() -> None:
    """120 replicas of four rungs of unequal length, memory 0.7: each value's mean within 4 of its standard errors.

    The scatter of 120 is known to 6.5 %, so the median error bar lies within 4 times that of it; without the
    correlation it would be too small by 1.7. Of nominal 95 % intervals as many hold the truth as a binomial
    distribution allows at a chance of 1e-4. Targets: a rung, between two, and beyond the last.
    """
    rng = np.random.default_rng(22)
    targets = (1.3, 1.5, 2.4)
    plan = [(1.0, 1200, 0), (1.3, 700, 0), (1.3, 500, 1), (1.7, 1600, 0), (2.2, 1000, 0)]
    found: dict[tuple[float, str], list[tuple[float, float]]] = {}
    for _ in range(120):
        pooled = pool([harmonic(rng, t, samples, memory=0.7, repeat=repeat) for t, samples, repeat in plan])
        assert pooled.gaps == []
        for target in targets:
            for name, estimate in pooled.at(target).properties.items():
                found.setdefault((target, name), []).append((estimate.value, estimate.standard_error))
        for temperature, estimate in zip(pooled.temperatures[1:], pooled.free_energies[1:], strict=True):
            found.setdefault((temperature, "F"), []).append((estimate.value, estimate.standard_error))
    assert len(found) == len(targets) * len(EXACT) + 3
    for (temperature, name), pairs in found.items():
        values, errors = np.array(pairs).T
        assert len(values) == 120
        truth = free_energy(temperature, 1.0) if name == "F" else EXACT[name](temperature)
        scatter = float(np.std(values, ddof=1))
        assert abs(float(np.mean(values)) - truth) < 4.0 * scatter / math.sqrt(120), (temperature, name)
        claimed = float(np.median(errors))
        assert abs(claimed / scatter - 1.0) < 0.26, (temperature, name, claimed / scatter)
        covered = int(np.sum(np.abs(values - truth) < 1.96 * errors))
        assert binomtest(covered, len(values), 0.95).pvalue > 1e-4, (temperature, name, covered)


def test_error_bars_of_correlated_samples_are_those_of_a_refitted_block_bootstrap() -> None:
    """Within 15 %: 300 bootstraps know an error to 4 %, both methods the correlation to 3 %.

    Memory 0.8 reaches 2.3 samples, so that blocks of 60 lose 4 % of the variance at their ends.
    """
    rng = np.random.default_rng(34)
    temperatures, samples, block, targets = np.array([1.0, 1.3, 1.7]), 6000, 60, np.array([1.15, 1.3, 1.5])
    series = [harmonic(rng, temperature, samples, memory=0.8) for temperature in temperatures]
    pooled = pool(series)
    sampled, energy = (np.array([getattr(s, name) for s in series]) for name in ("sampled_energy", "energy"))
    start = np.array([each.value for each in pooled.free_energies])
    replicas = []
    for _ in range(300):
        drawn = rng.integers(0, samples - block + 1, (3, samples // block))
        picked = (drawn[:, :, None] + np.arange(block)).reshape(3, samples)
        e, u = (np.take_along_axis(each, picked, axis=1) for each in (sampled, energy))
        mixture = polished(1.0 / temperatures[:, None], np.full(3, float(samples)), start, [each[None] for each in e])
        assert mixture is not None
        e, u = e.ravel(), u.ravel()
        weights = np.exp(-np.multiply.outer(1.0 / targets, e) - mixture.claims(e[None])[1])
        mean_u, mean_e, mean_ue = (weights @ each / np.sum(weights, axis=1) for each in (u, e, u * e))
        replicas.append([mean_u, (mean_ue - mean_u * mean_e) / targets**2])
    expected = np.std(replicas, axis=0, ddof=1) / PARTICLES
    for index, each in enumerate(pooled.curve(targets.tolist())):
        for row, name in enumerate(("residual_energy", "residual_heat_capacity")):
            assert abs(each.properties[name].standard_error / expected[row, index] - 1.0) < 0.15, (targets[index], name)


def test_effective_samples_count_correlation() -> None:
    """A rung at its own temperature: n (1 - m^2)/(1 + m^2), as squares of the modes forget with m^2; within 12 %."""
    series = harmonic(np.random.default_rng(23), 1.0, 20_000, memory=0.8)
    expected = 20_000 * (1.0 - 0.64) / (1.0 + 0.64)
    assert abs(pool([series]).at(1.0).effective_samples / expected - 1.0) < 0.12


def test_the_bias_of_a_variance_is_removed() -> None:
    """Beside the variance about the mean that is known exactly, which has no bias, on the same 400 samples.

    About their own mean they miss 1 in 188 of it; 600 replicas see that to 5 %.
    """
    rng = np.random.default_rng(35)
    pairs = []
    for _ in range(600):
        series = harmonic(rng, 1.0, 400, memory=0.6)
        found = pool([series]).at(1.0)
        known = np.mean((series.energy - 1.875 * PARTICLES) * (series.sampled_energy - 1.5 * PARTICLES)) / PARTICLES
        value = found.properties["residual_heat_capacity"].value
        pairs.append([value - known, value * (1.0 - 1.0 / found.effective_samples) - known])
    removed, biased = np.mean(pairs, axis=0)
    errors = np.std(pairs, axis=0, ddof=1) / math.sqrt(len(pairs))
    assert abs(removed) < 4.0 * errors[0]
    assert biased < -10.0 * errors[1]
    assert biased == pytest.approx(-1.875 / 188.0, rel=0.2)


def test_temperatures_that_samples_do_not_support_are_refused() -> None:
    """Of samples at T 1 the share ((1 + d)^2/(1 + 2 d))^-12, d = 1/T - 1, survives: 32 % at T 1.3, 0.5 % at T 1.6.

    The weights alone claim 226 of 4000 at T 1.6, where the heat capacity is too small by more than its standard error.
    """
    pooled = pool([harmonic(np.random.default_rng(24), 1.0, 4000)])
    near, far = pooled.at(1.3), pooled.at(1.6)
    assert near.effective_samples == pytest.approx(1300.0, rel=0.1)
    assert near.refused == ""
    assert set(near.properties) == set(EXACT)
    thin = pooled.at(1.4)  # 12 %, 500 samples, but of one end only
    assert thin.effective_samples == 0.0
    assert thin.refused
    assert far.effective_samples < 50.0
    assert (near.surviving, far.surviving) == pytest.approx((0.32, 0.005), rel=0.1)
    assert pooled.at(1.0).surviving == 1.0
    assert far.properties == {}
    assert "50 are needed" in far.refused
    assert "nearest rung is at 1 epsilon/k_B," in far.refused
    assert pooled.at(2.5).effective_samples == 0.0
    assert pooled.at(0.2).properties == {}
    assert "positive number" in pooled.at(-1.0).refused
    assert "positive number" in pooled.at(math.nan).refused


@pytest.mark.parametrize("seed", range(40, 50))
def test_three_spacings_outside_is_refused_every_time_and_inside_never(seed: int) -> None:
    """Rungs 1.4 deviations of the energy apart (ln 1.5 sqrt(12)), short ones and long ones."""
    rng = np.random.default_rng(seed)
    temperatures = 1.5 ** np.arange(4)
    for samples in (400, 4000, 20_000):
        pooled = pool([harmonic(rng, float(temperature), samples) for temperature in temperatures])
        outside = pooled.curve([float(temperatures[0] / 1.5**3), float(temperatures[-1] * 1.5**3)])
        assert all(each.refused and not each.properties for each in outside)
        inside = pooled.curve(np.geomspace(temperatures[0], temperatures[-1], 41).tolist())
        assert all(each.properties and not each.refused for each in inside)


def test_rungs_that_do_not_overlap_are_solved_apart() -> None:
    rng = np.random.default_rng(25)
    cold = [harmonic(rng, temperature, 1000) for temperature in (1.0, 1.2)]
    hot = [harmonic(rng, temperature, 1000) for temperature in (8.0, 9.5)]
    pooled = pool([*hot, *cold])
    assert pooled.temperatures == [1.0, 1.2, 8.0, 9.5]
    (gap,) = pooled.gaps
    assert (gap.low, gap.high) == (1.2, 8.0)
    assert np.all(pooled.overlap[:2, 2:] == 0.0)
    np.testing.assert_allclose(np.sum(pooled.overlap, axis=1), 1.0, rtol=1e-8)
    assert pooled.free_energies[2].value == 0.0
    for alone, temperature in ((pool(cold), 1.1), (pool(hot), 8.8)):
        for name, estimate in alone.at(temperature).properties.items():
            assert abs(pooled.at(temperature).properties[name].value / estimate.value - 1.0) < 1e-8
    refused = pooled.at(3.0)
    assert refused.properties == {}
    assert f"the rungs at 1.2 epsilon/k_B and 8 epsilon/k_B do not overlap, {GAP_CLOSED_BY}" in refused.refused


def test_the_rungs_that_are_named_close_a_gap() -> None:
    """C = 12: sqrt(12) ln(8/1.2) = 6.6 standard deviations, so three rungs make steps below two of them."""
    rng = np.random.default_rng(25)
    ends = [harmonic(rng, temperature, 1000) for temperature in (1.2, 8.0)]
    (gap,) = pool(ends).gaps
    np.testing.assert_allclose(gap.rungs, 1.2 * (8.0 / 1.2) ** (np.arange(1, 4) / 4), rtol=1e-12)
    assert gap.told("{:.5g} epsilon/k_B".format).endswith(GAP_CLOSED_BY)
    closed = pool([*ends, *(harmonic(rng, temperature, 1000) for temperature in gap.rungs)])
    assert closed.gaps == []
    assert np.min(np.diag(closed.overlap, 1)) > 0.1
    assert all(each.refused == "" for each in closed.curve(np.linspace(1.2, 8.0, 20).tolist()))


def test_one_rung_is_named_where_one_is_enough() -> None:
    """Gap of 3.8 deviations, which 20 samples do not span."""
    rng = np.random.default_rng(33)
    (gap,) = pool([harmonic(rng, temperature, 20) for temperature in (1.0, 3.0)]).gaps
    assert gap.rungs == pytest.approx([math.sqrt(3.0)])
    assert gap.told("{:.4g}".format) == "the rungs at 1 and 3 do not overlap, set a rung at 1.732 between them"


def test_close_rungs_with_too_few_samples_want_more_of_them() -> None:
    rng = np.random.default_rng(33)
    (gap,) = pool([harmonic(rng, temperature, 8) for temperature in (1.0, 1.4)]).gaps
    assert gap.told("{:.4g}".format) == "the rungs at 1 and 1.4 hold too few samples to be joined, sample them longer"


def test_a_short_rung_between_does_not_part_its_neighbours() -> None:
    """Nor does it part the coldest from the warmest, which only the one between connects."""
    rng = np.random.default_rng(26)
    plan = [(1.0, 500), (1.4, 4), (2.0, 500), (5.0, 500)]
    series = [harmonic(rng, temperature, samples) for temperature, samples in plan]
    pooled = pool(series)
    assert pooled.overlap[0, 2] > 0.1
    assert pooled.overlap[2, 3] > 0.05
    assert pooled.overlap[0, 3] > 0.0
    assert pooled.overlap[0, 1] < 0.01
    assert pooled.gaps == []
    assert pooled.at(1.4).effective_samples > 200.0
    assert len(pool([series[0], series[3]]).gaps) == 1


def test_long_series_enter_as_block_sums(monkeypatch: pytest.MonkeyPatch) -> None:
    """Error bars are those of full influences whether blocks are short or long against 5 samples of correlation.

    4096 blocks of 10 correlation times know an error bar to about sqrt(5/4096) = 3.5 %; allowed are 4 times that.
    Values equal pymbar's on all samples though a start was found on fewer, and do not depend on the blocks.
    """
    rng = np.random.default_rng(27)
    series = [harmonic(rng, temperature, 100_000, memory=0.9) for temperature in (1.0, 1.2)]
    solver, _, _ = solved_by_pymbar(series)
    found = {}
    for entries, each in ((10**6, 100_000), (10**5, 50_000), (2**14, 7692), (2**12, 2040)):
        monkeypatch.setattr(moments, "BLOCKS", entries)
        pooled = pool(series)
        free_energy = pooled.free_energies[1]
        assert abs(free_energy.value - solver.f_k[1]) < 1e-8
        found[each] = {**pooled.at(1.1).properties, "F": free_energy}
        for name, estimate in found[each].items():
            full = found[100_000][name]
            assert {len(values) for values in estimate.influence.values()} == {each}
            assert abs(estimate.standard_error / full.standard_error - 1.0) < 0.14, (each, name)
            assert abs(estimate.value - full.value) < 1e-9
            starts = np.arange(each) * 100_000 // each
            for chain, values in estimate.influence.items():
                whole = np.add.reduceat(full.influence[chain], starts)
                np.testing.assert_allclose(values, whole, atol=1e-9 * np.max(np.abs(whole)))


def test_a_curve_is_what_each_temperature_gives() -> None:
    """More temperatures than are worked on at once, some of them refused, in the order asked, one of them twice."""
    rng = np.random.default_rng(31)
    pooled = pool([harmonic(rng, temperature, 300) for temperature in (1.0, 1.2, 8.0)])
    asked = [1.1, math.nan, *np.linspace(8.1, 0.9, 70).tolist(), 1.1, -1.0, 0.01, 100.0]
    curve = pooled.curve(asked)
    np.testing.assert_array_equal([each.temperature for each in curve], asked)
    assert any(each.refused for each in curve)
    for each, temperature in zip(curve, asked, strict=True):
        alone = pooled.at(temperature)
        assert each.refused == alone.refused
        assert each.effective_samples == pytest.approx(alone.effective_samples, rel=1e-9)
        assert set(each.properties) == set(alone.properties)
        for name, estimate in alone.properties.items():
            assert each.properties[name].value == pytest.approx(estimate.value, rel=1e-9)
            assert each.properties[name].standard_error == pytest.approx(estimate.standard_error, rel=1e-6)
    assert pooled.curve([]) == []


def test_a_fluid_whose_force_jumps_has_no_reweighted_bulk_modulus() -> None:
    series = harmonic(np.random.default_rng(28), 1.0, 1000)
    shifted = replace(series, fluid=Fluid(cutoff=1.2, truncation="shifted"))
    assert set(pool([shifted]).at(1.0).properties) == set(EXACT) - {"bulk_modulus"}


def test_what_cannot_be_pooled_is_refused() -> None:
    rng = np.random.default_rng(29)
    series = harmonic(rng, 1.0, 100)
    other = harmonic(rng, 1.1, 100)
    with pytest.raises(BadSeries, match="no samples"):
        pool([series.after(100)])
    with pytest.raises(BadSeries, match="bath"):
        pool([replace(series, bath=False)])
    with pytest.raises(BadSeries, match="one density"):
        pool([series, replace(other, state=State(1.1, 0.6, PARTICLES))])
    with pytest.raises(BadSeries, match="twice"):
        pool([series, series])
    with pytest.raises(BadSeries, match="not finite"):
        pool([series, replace(other, virial=np.full(100, np.nan))])


def test_equations_without_a_solution_are_reported_in_our_words(monkeypatch: pytest.MonkeyPatch) -> None:
    energies = [np.linspace(0.0, 1.0, 50)[None], np.linspace(1e6, 1e6 + 1.0, 50)[None]]
    assert polished(np.array([[1.0], [0.5]]), np.array([50.0, 50.0]), np.zeros(2), energies) is None
    rungs = [harmonic(np.random.default_rng(36), temperature, 500) for temperature in (1.0, 1.2)]
    monkeypatch.setattr(reweight, "polished", lambda *_: None)
    with pytest.raises(NotSolved, match=r"2 rungs at temperatures 1, 1\.2 could not be found"):
        pool(rungs)


def test_no_notice_of_a_library_reaches_the_user() -> None:
    program = (
        "import logging, numpy as np\n"
        "logging.basicConfig()\n"
        "from sampler.fluid import Fluid, State\n"
        "from sampler.series import Series\n"
        "from estimators.reweight import pool\n"
        "rng = np.random.default_rng(1)\n"
        "def series(t):\n"
        "    columns = [t * rng.gamma(12.0, size=500)] * 6\n"
        "    return Series(Fluid(1.0), State(t, 0.5, 8), 0, True, 1.0, *columns, np.zeros((0, 8, 3)), 1)\n"
        "assert pool([series(1.0), series(1.2)]).at(1.1).properties\n"
        "import sys; assert 'pymbar' in sys.modules\n"
    )
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True, check=False)
    assert (done.returncode, done.stdout, done.stderr) == (0, "", "")


def test_single_rung_is_its_own_average() -> None:
    series = harmonic(np.random.default_rng(30), 1.0, 2000, memory=0.5)
    pooled: Pooled = pool([series])
    at_rung = pooled.at(1.0).properties
    assert abs(at_rung["residual_energy"].value - float(np.mean(series.energy)) / PARTICLES) < 1e-10
    assert [each.value for each in pooled.free_energies] == [0.0]
    assert pooled.overlap.tolist() == [[pytest.approx(1.0)]]
