"""Reweighting over densities: scaled samples, rungs of neighbouring densities together, and fluids evaluated again."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from estimators.canonical import rung_properties
from estimators.errors import BadSeries
from estimators.estimate import mean
from estimators.field import field, rescaled
from estimators.mixture import polished
from estimators.reweight import pool
from sampler.fluid import Fluid, State
from sampler.forces import evaluate
from sampler.protocol import Protocol
from sampler.rung import advance, assemble
from sampler.series import Series
from sampler.store import Chain

PARTICLES, CUTOFF = 108, 2.3
FLUID = Fluid(cutoff=CUTOFF)
PROPERTIES = ("residual_energy", "residual_heat_capacity", "pressure", "thermal_pressure", "bulk_modulus")


def sampled(temperature: float, density: float, *, seed: int, steps: int = 12_000, fluid: Fluid = FLUID) -> Series:
    protocol = Protocol(seed=seed, equilibration=2000, steps=steps, frame_every=100)
    chain = Chain(Path(), fluid, State(temperature, density, PARTICLES), protocol, 0)
    segments, before = [], None
    for index, (first, _) in enumerate(chain.segments):
        before = advance(chain, index, before, np.zeros(1, np.uint8))
        assert before is not None
        if first >= protocol.settling:
            segments.append(before)
    return assemble(chain, segments)


@pytest.fixture(scope="module")
def liquid() -> list[Series]:
    return [sampled(temperature, 0.75, seed=1) for temperature in (1.2, 1.32)]


def evaluated(series: Series, density: float) -> Series:
    """The frames of a series, in the box of another density, with the fluid's own cutoff."""
    there = State(series.state.temperature, density, PARTICLES)
    edge = there.box / series.state.box
    sums = np.array([evaluate(series.fluid, edge * frame, box=there.box)[1][:4] for frame in series.frames])
    totals = series.fluid.totals(sums, there)
    columns = {name: getattr(totals, name) for name in ("energy", "sampled_energy", "virial", "hypervirial")}
    return replace(series, state=there, **columns)


def virial_of_the_shifted(series: Series) -> np.ndarray:
    """-dU_dyn/d ln V where the cutoff grows with the box: that of U less 16 r_c^-12 - 8 r_c^-6 a pair."""
    pairs = (series.column("energy") - series.column("sampled_energy")) / FLUID.energy_at_cutoff
    return series.column("virial") - pairs * (16.0 * CUTOFF**-12 - 8.0 * CUTOFF**-6)


@pytest.mark.parametrize("density", [0.742, 0.76])
def test_scaled_sums_are_those_of_scaled_positions(liquid: list[Series], density: float) -> None:
    """With a cutoff that is scaled too; to rounding of some thousand terms."""
    series = liquid[0]
    there, edge = State(1.2, density, PARTICLES), (0.75 / density) ** (1.0 / 3.0)
    fluid, scaled = Fluid(cutoff=CUTOFF * edge), rescaled(series, density)
    for frame, sample in list(zip(series.frames, series.frame_samples, strict=True))[:3]:
        _, sums = evaluate(fluid, edge * frame, box=there.box)
        totals = fluid.totals(sums[None, :4], there)
        for name in ("energy", "sampled_energy", "virial", "hypervirial"):
            assert scaled.column(name)[sample] == pytest.approx(getattr(totals, name)[0], rel=1e-11)
    assert scaled.state == there
    back = rescaled(replace(scaled, fluid=fluid), 0.75)
    assert back.column("virial") == pytest.approx(series.column("virial"), rel=1e-9)


def test_at_the_density_that_was_sampled_both_ways_agree(liquid: list[Series]) -> None:
    """Two features or one energy: the same equations."""
    known, found = pool(liquid).at(1.25), field(liquid).at(1.25, 0.75)
    assert found.effective_samples == pytest.approx(known.effective_samples, rel=1e-9)
    for name in PROPERTIES:
        assert found.properties[name].value == pytest.approx(known.properties[name].value, rel=1e-8)
        assert found.properties[name].standard_error == pytest.approx(known.properties[name].standard_error, rel=1e-6)


@pytest.mark.parametrize(("temperature", "density"), [(1.25, 0.756), (1.2, 0.745)])
def test_another_density_is_as_sampled_there(liquid: list[Series], temperature: float, density: float) -> None:
    """Within 4.5 combined errors, which are less than 4 times those of sampling there as long as one rung."""
    found = field(liquid).at(temperature, density)
    direct = rung_properties([sampled(temperature, density, seed=7)])
    for name in PROPERTIES:
        difference = found.properties[name] - direct[name]
        assert abs(difference.value) < 4.5 * difference.standard_error, name
        assert found.properties[name].standard_error < 4.0 * direct[name].standard_error, name
    shift = direct["pressure"] - pool(liquid).at(temperature).properties["pressure"]
    assert abs(shift.value) > 0.05  # the density matters


def test_densities_that_overlap_are_solved_together(liquid: list[Series]) -> None:
    """The free energy from one density to the next is the work of the virial.

    d(A_res/T)/d ln rho = <W>/T of the energy whose ensemble is drawn; over 0.8 % the middle is the mean of both ends.
    """
    beside = [sampled(temperature, 0.756, seed=2) for temperature in (1.2, 1.32)]
    both = field([*liquid, *beside])
    assert len(both.groups) == 1
    alone, together = (each.at(1.26, 0.753) for each in (field(liquid), both))
    assert together.effective_samples > 1.5 * alone.effective_samples
    (group,) = both.groups
    change = group.seen(0.75, both.look).free_energies(np.zeros(2))
    step = change[2] - change[0]  # from (1.2, 0.75) to (1.2, 0.756)
    drawn = [mean({each.chain: virial_of_the_shifted(each) / 1.2}) for each in (liquid[0], beside[0])]
    expected = 0.5 * (drawn[0] + drawn[1]) * np.log(0.756 / 0.75)
    difference = step - expected
    assert abs(difference.value) < 4.5 * difference.standard_error
    assert difference.standard_error < 0.05
    assert abs(step.value) > 0.5


def test_densities_far_apart_are_solved_apart(liquid: list[Series]) -> None:
    far = sampled(1.2, 0.65, seed=3, steps=4000)
    both = field([*liquid, far])
    assert len(both.groups) == 2
    between = both.at(1.2, 0.70)
    assert between.refused
    assert between.properties == {}
    assert both.at(1.2, 0.65).properties["pressure"].value == pytest.approx(
        pool([far]).at(1.2).properties["pressure"].value
    )


@pytest.mark.parametrize("density", [0.80, 0.70, 0.5])
def test_support_ends(liquid: list[Series], density: float) -> None:
    """7 % in density is 20 standard deviations of the work: nothing is left."""
    found = field(liquid).at(1.25, density)
    assert found.effective_samples < 1.0
    assert "effective samples" in found.refused


def test_a_shifted_fluid_is_evaluated_again(liquid: list[Series]) -> None:
    """Frames of every tenth sample; against sampling there, within 4.5 combined errors."""
    shifted = Fluid(cutoff=CUTOFF, truncation="shifted")
    rungs = [sampled(temperature, 0.75, seed=4, fluid=shifted) for temperature in (1.2, 1.32)]
    with pytest.raises(BadSeries, match="evaluated again"):
        field(rungs)
    frames = [replace(each.every(10), frames=each.frames, frame_stride=1) for each in rungs]
    found = field(frames, look=evaluated).at(1.25, 0.754)
    direct = rung_properties([sampled(1.25, 0.754, seed=5, fluid=shifted)])
    for name in ("residual_energy", "pressure"):
        difference = found.properties[name] - direct[name]
        assert abs(difference.value) < 4.5 * difference.standard_error, name
        assert found.properties[name].standard_error < 6.0 * direct[name].standard_error, name


def test_free_energies_of_harmonic_oscillators_apart_in_place_and_stiffness() -> None:
    """pymbar's own test system, known exactly: u = K (x - O)^2 / (2 T) is linear in x^2 and x, two features.

    Values as pymbar solves them to 1e-7; the exact ones within 4.5 of its asymptotic errors, which are below 0.1.
    """
    from pymbar import MBAR
    from pymbar.testsystems import HarmonicOscillatorsTestCase

    system = HarmonicOscillatorsTestCase(O_k=[0.0, 0.7, 1.2, 2.0], K_k=[1.0, 1.8, 3.0, 5.0], beta=1.0)
    counts = [1500, 1000, 2000, 800]
    x, reduced, _, _ = system.sample(counts, mode="u_kn", seed=7)
    stiffness, centre = np.array(system.K_k), np.array(system.O_k)
    slopes = np.stack([0.5 * stiffness, -stiffness * centre], axis=1)
    constants = 0.5 * stiffness * centre**2
    ends = np.cumsum(counts)[:-1]
    features = np.split(np.stack([x**2, x]), ends, axis=1)
    mixture = polished(slopes, np.array(counts, dtype=float), np.zeros(4), features)
    assert mixture is not None
    found = mixture.free_energies + constants - constants[0]
    solved = MBAR(reduced, counts, relative_tolerance=1e-13).compute_free_energy_differences()
    assert found == pytest.approx(solved["Delta_f"][0], abs=1e-7)
    known = system.analytical_free_energies()
    errors = solved["dDelta_f"][0][1:]
    assert (np.abs(found - (known - known[0]))[1:] < 4.5 * errors).all()
    assert errors.max() < 0.1
    shares, _ = mixture.claims(np.concatenate(features, axis=1))
    assert shares.sum(axis=1) == pytest.approx(counts)
