"""Pair structure against counted pairs, ideal gases, lattices and two particles, whose g(r) is known exactly."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
import numpy.typing as npt
import pytest
from scipy.integrate import quad

from estimators.errors import BadSeries
from estimators.structure import Structure, pair_structure
from sampler.fluid import Fluid, State, Truncation
from sampler.series import Series

Floats = npt.NDArray[np.float64]

LIQUID = State(1.5, 0.6, 108)
TRUNCATIONS: list[Truncation] = ["corrected", "plain", "shifted", "force-shifted"]


def series_of(frames: Floats, state: State, *, fluid: Fluid | None = None, repeat: int = 0) -> Series:
    nothing = np.zeros(len(frames))
    recorded = [nothing] * 6
    return Series(fluid or Fluid(cutoff=1.0), state, repeat, True, 1.0, *recorded, frames=frames, frame_stride=1)


def structure_of(frames: Floats, state: State, **options: float) -> Structure:
    structure = pair_structure([series_of(frames, state)], **options)
    assert structure is not None
    return structure


def distances(frame: Floats, box: float) -> Floats:
    """All nearest-image distances, by rounding to the nearest box."""
    first, second = np.triu_indices(len(frame), 1)
    apart = frame[first] - frame[second]
    return np.linalg.norm(apart - box * np.rint(apart / box), axis=1)


@pytest.fixture(scope="module")
def liquid() -> Floats:
    """Frames of a Lennard-Jones liquid cut at 2.5, from single-particle Metropolis moves; (100, 108, 3)."""
    rng, box, fluid = np.random.default_rng(11), LIQUID.box, Fluid(cutoff=2.5, truncation="shifted")
    cells = np.stack(np.meshgrid(*[np.arange(5)] * 3, indexing="ij"), axis=-1).reshape(-1, 3)[: LIQUID.particles]
    where = (cells + 0.5) * box / 5

    def energy(place: Floats, skip: int) -> float:
        apart = place - where
        apart -= box * np.rint(apart / box)
        squares = np.einsum("ij,ij->i", apart, apart)
        squares[skip] = np.inf
        near = squares[squares < fluid.cutoff**2] ** -3
        return float(np.sum(4.0 * (near * near - near) - fluid.energy_at_cutoff))

    frames = []
    for sweep in range(600):
        for i, (jump, chance) in enumerate(zip(rng.uniform(-0.15, 0.15, (108, 3)), rng.random(108), strict=True)):
            trial = where[i] + jump
            if math.log(chance) < (energy(where[i], i) - energy(trial, i)) / LIQUID.temperature:
                where[i] = trial
        if sweep >= 100 and sweep % 5 == 0:
            frames.append(np.mod(where, box))
    return np.array(frames)


def test_counts_are_those_of_a_direct_count() -> None:
    rng, state = np.random.default_rng(1), State(1.0, 0.5, 60)
    frames = rng.random((7, 60, 3)) * state.box
    structure = structure_of(frames, state, bin_width=0.05)
    edges = 0.05 * np.arange(len(structure.r) + 1)
    assert 0.0 <= 0.5 * state.box - edges[-1] < 0.05
    counted = np.sum([np.histogram(distances(frame, state.box), edges)[0] for frame in frames], axis=0) / 7
    shells = 4.0 / 3.0 * np.pi * np.diff(edges**3) / state.volume
    np.testing.assert_allclose(structure.g, counted / (0.5 * 60 * 59 * shells), rtol=1e-12)
    np.testing.assert_allclose(structure.coordination, np.cumsum(counted) * 2 / 60, rtol=1e-12)
    outside = frames + state.box * rng.integers(-2, 3, frames.shape)
    np.testing.assert_allclose(structure_of(outside, state, bin_width=0.05).g, structure.g, rtol=1e-12)


def test_ideal_gas_has_g_of_one_in_every_bin() -> None:
    """Distances of an ideal gas are pairwise independent, so a bin's count is binomial: chi-square within 5 sigma.

    Without the N - 1 factor g would be 1.02 here, 20 standard errors of the whole. Error bars: each of 400 frames' bin
    is known to 1/sqrt(2 * 400) = 3.5 %, their mean over the bins to 0.4 %, the Gamma method's bias below 1 %.
    """
    rng, state = np.random.default_rng(2), State(1.0, 0.4, 50)
    frames = rng.random((400, 50, 3)) * state.box
    structure = structure_of(frames, state, bin_width=0.04)
    r, pairs = structure.r, 400 * 50 * 49 / 2
    chance = 4.0 / 3.0 * np.pi * ((r + 0.02) ** 3 - (r - 0.02) ** 3) / state.volume
    true_error = np.sqrt((1.0 - chance) / (chance * pairs))
    frequent = chance * pairs > 25.0
    degrees = int(np.sum(frequent))
    assert degrees > 50
    chi_square = np.sum(((structure.g - 1.0) / true_error)[frequent] ** 2)
    assert abs(chi_square - degrees) < 5.0 * math.sqrt(2.0 * degrees)
    assert abs(np.sum((structure.g - 1.0) * chance) / np.sum(chance)) < 4.0 / math.sqrt(pairs * np.sum(chance))
    assert 0.97 < np.mean((structure.standard_error / true_error)[frequent]) < 1.03
    inside = 4.0 / 3.0 * np.pi * (r + 0.02) ** 3 / state.volume
    expected = inside * 49
    spread = np.sqrt(inside * (1.0 - inside) / pairs) * 49
    assert np.all(np.abs(structure.coordination - expected) < 5.0 * spread + 2.0 * 2.0 / (400 * 50))


def test_lattice_shells_are_counted_exactly() -> None:
    """Simple cubic: 6, 12, 8, 6, 24, 24, 12, 30, 24 neighbours at the square roots of 1, 2, 3, 4, 5, 6, 8, 9, 10."""
    spacing, state = 1.013, State(1.0, 1.013**-3, 512)
    cells = np.stack(np.meshgrid(*[np.arange(8)] * 3, indexing="ij"), axis=-1).reshape(1, 512, 3)
    shifts = np.random.default_rng(3).random((5, 1, 3)) * state.box
    structure = structure_of(np.mod(spacing * cells + shifts, state.box), state)
    radii = spacing * np.sqrt([1.0, 2.0, 3.0, 4.0, 5.0, 6.0, 8.0, 9.0, 10.0])
    between = 0.5 * (radii + np.append(radii[1:], spacing * math.sqrt(11.0)))
    counted = structure.coordination[np.searchsorted(structure.r, between) - 1]
    np.testing.assert_allclose(counted, np.cumsum([6, 12, 8, 6, 24, 24, 12, 30, 24]), rtol=1e-12)


@pytest.mark.parametrize("truncation", TRUNCATIONS)
def test_energy_and_pressure_are_the_direct_pair_sums(liquid: Floats, truncation: Truncation) -> None:
    """Paired frame by frame, so only binning is left: mean difference within 4 of its own standard errors.

    100 frames of 108 particles leave 0.0013 in u and 0.0044 in P; averages over the bins without the Boltzmann factor
    miss by 7 of these errors, a missing tail by hundreds.
    """
    fluid = Fluid(cutoff=2.5, truncation=truncation)
    structure = pair_structure([series_of(liquid, LIQUID, fluid=fluid)])
    assert structure is not None
    tail_energy, tail_virial, _ = fluid.tail(LIQUID.density)
    each = [distances(frame, LIQUID.box) for frame in liquid]
    energies = np.array([np.sum(fluid.pair_energy(r)) for r in each]) / LIQUID.particles + tail_energy
    virials = np.array([np.sum(fluid.pair_virial(r)) for r in each]) / (-3.0 * LIQUID.volume)
    pressures = LIQUID.density * (LIQUID.temperature + tail_virial) + virials
    for estimate, direct, most in ((structure.energy, energies, 2e-3), (structure.pressure, pressures, 6e-3)):
        chain = (*(LIQUID.temperature, LIQUID.density, LIQUID.particles), 0)
        binned = estimate.influence[chain] * len(liquid) + estimate.value
        error = float(np.std(binned - direct, ddof=1)) / math.sqrt(len(liquid))
        assert error < most
        assert abs(estimate.value - float(np.mean(direct))) < 4.0 * error
        assert np.corrcoef(binned, direct)[0, 1] > 0.97


def test_liquid_has_its_first_shell(liquid: Floats) -> None:
    """The shell is the number of particles nearer than the minimum, counted directly on the same frames."""
    structure = pair_structure([series_of(liquid[:50], LIQUID), series_of(liquid[50:], LIQUID, repeat=1)])
    assert structure is not None
    assert structure.first_minimum is not None
    assert structure.first_shell is not None
    edge = structure.first_minimum.value
    assert 1.5 < edge < 1.8
    counted = np.mean([np.sum(distances(frame, LIQUID.box) < edge) for frame in liquid]) * 2 / LIQUID.particles
    assert abs(structure.first_shell.value - counted) < 0.01
    assert 0.0 < structure.first_minimum.standard_error < 0.05
    beside = np.searchsorted(structure.r, [1.1, edge, 2.1])
    peak, low, second = (float(np.mean(structure.g[i - 2 : i + 3])) for i in beside)
    assert low < 1.0 < second < peak


def test_influence_of_a_frame_is_what_its_absence_does(liquid: Floats) -> None:
    """Without frame k of m an estimate moves by -m/(m - 1) of the frame's influence; second order is 1/m of that.

    The number of neighbours up to the minimum moves with the minimum too: without this its influences are far smaller.
    """
    whole = structure_of(liquid, LIQUID)
    chain = (LIQUID.temperature, LIQUID.density, LIQUID.particles, 0)
    left_out = range(0, 100, 8)
    without = [structure_of(np.delete(liquid, k, axis=0), LIQUID) for k in left_out]
    for name in ("first_minimum", "first_shell", "contact", "energy", "pressure"):
        value = getattr(whole, name).value
        moves = np.array([getattr(each, name).value - value for each in without])
        expected = getattr(whole, name).influence[chain][left_out] * -100 / 99
        assert np.linalg.norm(moves - expected) < 0.15 * np.linalg.norm(expected), name


def two_particles(
    rng: np.random.Generator, box: float, weight: Callable[[Floats], Floats], most: float, trials: int
) -> Floats:
    """Frames of two particles whose nearest-image vector has the given relative density, by rejection; (m, 2, 3)."""
    apart = (rng.random((trials, 3)) - 0.5) * box
    kept = apart[rng.random(len(apart)) * most < weight(np.linalg.norm(apart, axis=1))]
    first = rng.random((len(kept), 3)) * box
    return np.stack([first, np.mod(first + kept, box)], axis=1)


def test_two_particles_have_g_contact_and_energy_of_their_partition_function() -> None:
    """g = exp(-u/T)/z with z its mean over the box, to quadrature; frames are independent.

    g and its error bar bin by bin, contact, energy and pressure within 4-5 standard errors, which are
    within 5-10 % of the exact ones. A line through g itself would miss the contact value by 7 errors.
    """
    box, temperature, fluid = 3.2, 0.5, Fluid(cutoff=1.5, truncation="shifted")
    state = State(temperature, 2 / box**3, 2)
    boltzmann = lambda r: np.exp(-fluid.pair_energy(np.maximum(r, 0.3)) / temperature)  # noqa: E731
    frames = two_particles(np.random.default_rng(5), box, boltzmann, 5.5, 400_000)
    assert float(np.max(boltzmann(np.linspace(0.9, 1.5, 1000)))) < 5.5

    def over_box(function: Callable[[float], float]) -> float:
        shell = lambda r: 4.0 * math.pi * r * r * function(r)  # noqa: E731
        return quad(shell, 0.3, 1.5, epsabs=1e-10, limit=200)[0] / box**3

    z = 1.0 + over_box(lambda r: float(boltzmann(r)) - 1.0) - 4.0 / 3.0 * math.pi * 0.3**3 / box**3
    structure = pair_structure([series_of(frames, state, fluid=fluid)], bin_width=0.02)
    assert structure is not None
    shells = 4.0 * math.pi * (structure.r**2 + 0.02**2 / 12.0) * 0.02 / box**3
    fine = structure.r[:, None] + 0.02 * (np.arange(200) + 0.5 - 100) / 200
    chance = shells * np.sum(fine**2 * boltzmann(fine), axis=1) / np.sum(fine**2, axis=1) / z
    frequent = chance * len(frames) > 25.0
    error = np.sqrt(chance * (1.0 - chance) / len(frames))[frequent] / shells[frequent]
    chi_square = np.sum(((structure.g - chance / shells)[frequent] / error) ** 2)
    degrees = len(error)
    assert abs(chi_square - degrees) < 5.0 * math.sqrt(2.0 * degrees)
    assert 0.98 < np.mean(structure.standard_error[frequent] / error) < 1.02

    assert abs(structure.contact.value - 1.0 / z) < 4.0 * structure.contact.standard_error
    near = np.abs(structure.r - 1.5) < 0.1
    p = chance[near]
    share = 0.1 / (z * p)  # the line's value in its middle is the mean of its ten bins
    multinomial = math.sqrt((np.sum(share**2 * p) - np.sum(share * p) ** 2) / len(frames))
    assert 0.95 < structure.contact.standard_error / multinomial < 1.05
    mean = over_box(lambda r: float(fluid.pair_energy(r) * boltzmann(r))) / z
    square = over_box(lambda r: float(fluid.pair_energy(r) ** 2 * boltzmann(r))) / z
    assert abs(structure.energy.value - 0.5 * mean) < 4.0 * structure.energy.standard_error
    assert 0.9 < structure.energy.standard_error / (0.5 * math.sqrt((square - mean**2) / len(frames))) < 1.1
    virial = over_box(lambda r: float(fluid.pair_virial(r) * boltzmann(r))) / z
    pressure = state.density * temperature - virial / (3.0 * box**3)
    assert abs(structure.pressure.value - pressure) < 4.0 * structure.pressure.standard_error


def test_first_shell_error_bars_match_the_scatter_of_replicas() -> None:
    """Two particles with g ~ 1 + 0.6 cos(2 pi (r - 1)) up to r = 1.75: minimum at 1.5, neighbours from the integral.

    Means over 60 replicas within 4 of their standard errors; error bars within 4 of theirs (a scatter of 60 is known to
    9 %) of the scatter.
    """
    box = 4.4
    state = State(1.0, 2 / box**3, 2)

    def wave(r: Floats) -> Floats:
        return np.where(r < 0.6, 0.0, np.where(r < 1.75, 1.0 + 0.6 * np.cos(2.0 * np.pi * (r - 1.0)), 1.0))

    r = np.linspace(0.0, 2.0, 20_001)
    shell = 4.0 * np.pi * r**2 / box**3
    z = 1.0 + np.trapezoid((wave(r) - 1.0) * shell, r)
    expected = {"first_minimum": 1.5, "first_shell": np.trapezoid(wave(r) * shell * (r < 1.5), r) / z}
    rng = np.random.default_rng(7)
    structures = [structure_of(two_particles(rng, box, wave, 1.6, 20_000), state, bin_width=0.05) for _ in range(60)]
    for name, truth in expected.items():
        estimates = [getattr(structure, name) for structure in structures]
        values = np.array([estimate.value for estimate in estimates])
        scatter = float(np.std(values, ddof=1))
        assert abs(np.mean(values) - truth) < 4.0 * scatter / math.sqrt(60)
        claimed = math.sqrt(np.mean([estimate.standard_error**2 for estimate in estimates]))
        assert 1.0 - 0.36 < claimed / scatter < 1.0 + 0.36


def test_a_gas_without_a_minimum_has_no_first_shell() -> None:
    state = State(1.0, 0.4, 50)
    structure = structure_of(np.random.default_rng(8).random((100, 50, 3)) * state.box, state)
    assert structure.first_minimum is None
    assert structure.first_shell is None


def test_few_frames_have_infinite_error_bars_and_none_give_nothing() -> None:
    state = State(1.0, 0.4, 50)
    frames = np.random.default_rng(9).random((3, 50, 3)) * state.box
    assert np.all(np.isinf(structure_of(frames, state).standard_error))
    assert pair_structure([series_of(frames[:0], state)]) is None


def test_what_is_no_rung_is_refused() -> None:
    state = State(1.0, 0.4, 50)
    frames = np.random.default_rng(10).random((3, 50, 3)) * state.box
    with pytest.raises(BadSeries, match="share all three"):
        pair_structure([series_of(frames, state), series_of(frames, State(1.1, 0.4, 50), repeat=1)])
    with pytest.raises(BadSeries, match="same repeat number"):
        pair_structure([series_of(frames, state), series_of(frames, state)])
    with pytest.raises(BadSeries, match="bin_width"):
        pair_structure([series_of(frames, state)], bin_width=-0.1)
    frames[1, 2, 0] = np.nan
    with pytest.raises(BadSeries, match="not finite"):
        pair_structure([series_of(frames, state)])
