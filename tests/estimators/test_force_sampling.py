"""g(r) from forces: two particles and gases whose g is known, and liquids against the pairs that were counted."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest

from estimators.force_sampling import FEWEST_FRAMES, Forced, force_sampling
from estimators.structure import Structure, pair_structure
from sampler.fluid import ELSEWHERE, Fluid, State
from sampler.forces import evaluate
from sampler.protocol import Protocol
from sampler.rung import advance, assemble
from sampler.series import Series
from sampler.store import Chain

Floats = npt.NDArray[np.float64]


def series_of(frames: Floats, state: State, *, fluid: Fluid | None = None, bath: bool = True) -> Series:
    nothing = [np.zeros(len(frames))] * 6
    return Series(fluid or Fluid(cutoff=1.0), state, 0, bath, 1.0, *nothing, frames=frames, frame_stride=1)


def forced_of(series: list[Series], forces: Callable[[Floats], Floats], **options: float) -> Forced:
    forced = force_sampling(series, forces, **options)  # type: ignore[arg-type]
    assert forced is not None
    return forced


def structure_of(series: Series, **options: float) -> Structure:
    structure = pair_structure([series], evaluate=evaluate, **options)
    assert structure is not None
    return structure


def sampled(state: State, fluid: Fluid, *, frames: int, every: int = 100) -> Series:
    protocol = Protocol(seed=3, equilibration=3000, steps=frames * every, frame_every=every)
    chain = Chain(Path(), fluid, state, protocol, 0)
    before, segments = None, []
    for index, (first, _) in enumerate(chain.segments):
        before = advance(chain, index, before, np.zeros(1, np.uint8))
        assert before is not None
        segments += [before] if first >= protocol.settling else []
    return assemble(chain, segments)


@pytest.fixture(scope="module")
def liquid() -> Series:
    """g has its third shell at half the box."""
    return sampled(State(1.0, 0.8, 108), Fluid(cutoff=2.5), frames=400)


# --- what is known


def test_ideal_gas_has_g_of_one_with_the_error_of_the_ball() -> None:
    """No forces: all pairs within half the box together say what g is, with the error of a binomial number.

    Errors of 400 frames are known to 3.5 %, four fitted coefficients may take 1 % off; all r share the ball's noise.
    """
    state, rng = State(1.0, 0.4, 50), np.random.default_rng(1)
    frames = rng.random((400, 50, 3)) * state.box
    forced = forced_of([series_of(frames, state)], np.zeros_like, width=0.05, number=49, core=False)
    chance = 4.0 / 3.0 * math.pi * (49 * 0.05) ** 3 / state.volume
    error = math.sqrt((1.0 - chance) / (chance * 400 * 50 * 49 / 2))
    assert error < 0.002
    assert np.all(np.abs(forced.standard_error / error - 1.0) < 0.15)
    assert np.all(np.abs(forced.g - 1.0) < 4.0 * error)


def soft(apart: Floats) -> Floats:
    """Force on the first of two particles from the second: u = 2 (1 - r)^2 inside r = 1, harmonic."""
    r = np.linalg.norm(apart, axis=-1, keepdims=True)
    return np.where(r < 1.0, 4.0 * (1.0 - r) * apart / r, 0.0)


def test_two_harmonic_particles_have_the_g_of_their_partition_function() -> None:
    """g = exp(-u/T)/z at exact r, z its mean over the box; they can meet, so nothing is known at r = 0.

    40 independent replicas of 1000 frames: means within 4.5 standard errors at every r. Errors claimed are those of the
    replicas, each of whose scatters is known to 11 %, all together to about 3 %. With N for N - 1 forces count half.
    """
    state, rng, temperature = State(0.8, 2 / 27.0, 2), np.random.default_rng(2), 0.8
    box, number, width = state.box, 29, 0.05

    def boltzmann(r: Floats) -> Floats:
        return np.where(r < 1.0, np.exp(-2.0 * (1.0 - r) ** 2 / temperature), 1.0)

    def forces(frame: Floats) -> Floats:
        apart = frame[0] - frame[1]
        on_first = soft(apart - box * np.rint(apart / box))
        return np.stack([on_first, -on_first])

    found = []
    for _ in range(40):
        apart = (rng.random((2000, 3)) - 0.5) * box
        kept = apart[rng.random(2000) < boltzmann(np.linalg.norm(apart, axis=1))][:1000]
        first = rng.random((1000, 3)) * box
        frames = np.stack([first, first + kept], axis=1)  # some of them outside the box
        found.append(forced_of([series_of(frames, state)], forces, width=width, number=number, core=False))
    values, errors = np.array([each.g for each in found]), np.array([each.standard_error for each in found])
    r = (np.arange(number) + 0.5) * width
    np.testing.assert_allclose(found[0].r, r, rtol=1e-12)
    fine = (np.arange(2000) + 0.5) / 2000
    z = 1.0 + np.mean((boltzmann(fine) - 1.0) * 4.0 * math.pi * fine**2) / box**3
    scatter = np.std(values, axis=0, ddof=1)
    assert np.all(scatter < 0.4)
    assert np.all(scatter[r > 0.5] < 0.12)
    assert np.all(np.abs(np.mean(values, axis=0) - boltzmann(r) / z) < 4.5 * scatter / math.sqrt(40))
    claimed = np.sqrt(np.mean(errors**2, axis=0))
    assert 0.87 < np.median(claimed / scatter) < 1.13


def test_dilute_gas_has_the_g_of_its_virial_expansion() -> None:
    """g = exp(-u/T) (1 + rho c(r)), c the overlap of two Mayer functions; the next order is below 2e-4.

    u is what forces conserve, zero at the cutoff. Within 4.5 standard errors at every r, and at all of them together.
    """
    state, fluid = State(2.0, 0.02, 128), Fluid(cutoff=3.0)
    structure = structure_of(sampled(state, fluid, frames=400, every=50))
    forced = structure.forced
    assert forced is not None
    grid = (np.arange(12_000) + 0.5) * 1e-3
    energy = np.where(grid < 3.0, fluid.pair_energy(grid) - fluid.energy_at_cutoff, 0.0)
    mayer = np.expm1(-energy / state.temperature)
    below = np.concatenate([[0.0], np.cumsum(grid * mayer) * 1e-3])

    def overlap(r: float) -> float:
        far = np.minimum(np.rint((grid + r) * 1e3).astype(int), len(grid))
        near = np.rint(np.abs(grid - r) * 1e3).astype(int)
        return float(2.0 * math.pi / r * np.sum(grid * mayer * (below[far] - below[near])) * 1e-3)

    seen = (forced.r > 0.9) & (forced.r < 6.0)
    r = forced.r[seen]
    expected = np.interp(r, grid, 1.0 + mayer) * (1.0 + state.density * np.array([overlap(float(each)) for each in r]))
    deviates = (forced.g[seen] - expected) / forced.standard_error[seen]
    assert np.max(np.abs(deviates)) < 4.5
    assert np.all(forced.standard_error[seen & (forced.r > 1.5)] < 0.012)
    assert abs(np.mean(deviates)) < 4.0  # they are nearly one and the same far out
    assert structure.median_gain is not None
    assert structure.median_gain > 20.0


# --- against counted pairs


def at_middle(r: Floats, width: float, fluid: Fluid, temperature: float) -> Floats:
    """Factor from the mean of g over a bin to g in its middle, as far as exp(-u/T) makes it."""
    within = r[:, None] + width * (np.arange(51) - 25) / 51
    energies = fluid.pair_energy(within)
    boltzmann = np.exp((energies[:, 25:26] - energies) / temperature)
    return np.asarray(np.sum(within**2, axis=1) / np.sum(boltzmann * within**2, axis=1))


@pytest.mark.parametrize("width", [0.02, 0.01])
def test_liquid_has_the_g_of_its_counted_pairs(liquid: Series, width: float) -> None:
    """Differences have the errors of counted pairs, as the others are small: at every r up to half the box.

    rms of n nearly independent deviates: 1 within 4 / sqrt(2 n); none beyond 4.5; the 15 last ones by themselves, too.
    Where few pairs were seen their number is not normal: bins with 50 or more are looked at.
    """
    structure = structure_of(liquid, bin_width=width)
    forced, state = structure.forced, liquid.state
    assert forced is not None
    np.testing.assert_allclose(forced.r, structure.r, rtol=1e-12)
    assert 0.5 * state.box - structure.r[-1] < 1.5 * width
    pairs = structure.g * 2.0 * math.pi * structure.r**2 * width * 108 * 107 / state.volume * len(liquid.frames)
    seen = pairs > 50.0
    middle = structure.g[seen] * at_middle(structure.r[seen], width, liquid.fluid, state.temperature)
    deviates = (middle - forced.g[seen]) / structure.standard_error[seen]
    assert len(deviates) > 75
    assert np.max(np.abs(deviates)) < 4.5
    most = 4.0 / math.sqrt(2.0 * len(deviates))
    assert 1.0 - most < math.sqrt(np.mean(deviates**2)) < 1.0 + most
    assert abs(np.mean(deviates[-15:])) < 4.0 / math.sqrt(15.0)
    assert np.all(forced.standard_error[forced.r > 1.5] < 0.006)


def test_gain_is_the_ratio_of_variances_and_grows_as_bins_get_narrow(liquid: Series) -> None:
    """Counted pairs have a variance that goes as 1/width, forces none to speak of: twice the gain at half the width.

    Errors of 400 frames are known to 4 %, gains to 8 % each, medians of 128 to better than 3 %.
    """
    wide, narrow = structure_of(liquid, bin_width=0.02), structure_of(liquid, bin_width=0.01)
    assert wide.forced is not None
    known = np.isfinite(wide.gain)
    ratio = (wide.standard_error[known] / wide.forced.standard_error[known]) ** 2
    np.testing.assert_allclose(wide.gain[known], ratio, rtol=1e-12)
    assert np.array_equal(known, (wide.g > 0.0) & (wide.forced.standard_error > 0.0))
    assert wide.median_gain is not None
    assert narrow.median_gain is not None
    assert 6.0 < wide.median_gain < 20.0
    assert 1.8 < narrow.median_gain / wide.median_gain < 2.2


def test_g_does_not_know_the_width_of_bins(liquid: Series) -> None:
    """Bins of 0.06 and 0.02 share middles: the same g there, but for shells of slightly different widths."""
    forces = lambda where: evaluate(liquid.fluid, where, box=liquid.state.box)[0]  # noqa: E731
    wide = forced_of([liquid], forces, width=0.06, number=42)
    narrow = forced_of([liquid], forces, width=0.02, number=126)
    np.testing.assert_allclose(wide.r, narrow.r[1::3], rtol=1e-12)
    off = np.abs(wide.g - narrow.g[1::3])
    assert np.median(off[15:] / wide.standard_error[15:]) < 0.5
    assert np.all(off < 3.0 * wide.standard_error + 1e-12)
    assert np.all(wide.g[wide.r < 0.8] == 0.0)


def test_repeats_and_images_count_as_what_they_are(liquid: Series) -> None:
    """Two halves as two repeats, some particles given by their images: the same g; errors differ by autocorrelation."""
    moved = liquid.frames + liquid.state.box * np.random.default_rng(4).integers(-2, 3, liquid.frames.shape)
    halves = [replace(liquid, frames=moved[:200]), replace(liquid, frames=moved[200:], repeat=1)]
    forces = lambda where: evaluate(liquid.fluid, where, box=liquid.state.box)[0]  # noqa: E731
    whole, split = (forced_of(each, forces, width=0.04, number=60) for each in ([liquid], halves))
    np.testing.assert_allclose(split.g, whole.g, atol=1e-6)
    seen = whole.standard_error > 1e-4
    np.testing.assert_allclose(split.standard_error[seen], whole.standard_error[seen], rtol=0.5)
    assert abs(np.median(split.standard_error[seen] / whole.standard_error[seen]) - 1.0) < 0.05


def test_without_bath_or_frames_or_forces_nothing_is_said(liquid: Series) -> None:
    def forced(series: Series) -> Forced | None:
        structure = pair_structure([series], evaluate=evaluate)
        assert structure is not None
        return structure.forced

    frames = liquid.frames
    assert forced(liquid) is not None
    assert forced(replace(liquid, bath=False, kinetic=np.full(len(liquid), 160.0))) is None
    assert forced(replace(liquid, frames=frames[: FEWEST_FRAMES - 1])) is None
    assert forced(replace(liquid, frames=frames[:FEWEST_FRAMES])) is not None
    assert forced(replace(liquid, fluid=Fluid(cutoff=3.0))) is None
    assert forced(replace(liquid, fluid=replace(liquid.fluid, potential=ELSEWHERE))) is None
    structure = pair_structure([liquid])
    assert structure is not None
    assert structure.forced is None
    assert structure.median_gain is None
    assert np.all(np.isnan(structure.gain))
