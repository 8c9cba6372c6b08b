"""Health checks that look at configurations and at routes to one value: exact systems, lattices, planted faults."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest
from scipy import special

from estimators.canonical import rung_properties
from estimators.estimate import Chain, Estimate, mean
from estimators.health.box import box
from estimators.health.force_temperature import force_temperature, surface_laplacian
from estimators.health.heat_routes import heat_routes
from estimators.health.one_phase import crystalline_order, number_variance, one_phase
from estimators.health.quantum import quantum, quantum_shifts
from estimators.health.reading import Reading, threshold
from estimators.health.virial_routes import ALLOWED_BINNING, virial_routes
from estimators.structure import Structure, pair_structure
from sampler import store
from sampler.fluid import Fluid, State
from sampler.frames import reevaluate
from sampler.protocol import Protocol
from sampler.rung import advance, assemble
from sampler.series import FrameSums, Series

Floats = npt.NDArray[np.float64]

LEVEL = 0.01
STEADY = Fluid(cutoff=2.5, truncation="force-shifted")  # no jump of the force, no long-range part


def series_of(frames: Floats, state: State, *, fluid: Fluid = STEADY, **columns: object) -> Series:
    nothing = dict.fromkeys(("energy", "sampled_energy", "virial", "hypervirial", "kinetic", "ledger"))
    known = {"bath": True, "repeat": 0, **nothing, **columns}
    return Series(fluid=fluid, state=state, interval=1.0, frames=frames, frame_stride=1, **known)  # type: ignore[arg-type]


def sums_of(squares: Floats, curvatures: Floats, energies: Floats, power: float = 0.0) -> FrameSums:
    """Energies go as that power of the volume."""
    change = 1e-4
    return FrameSums(
        squares, curvatures, energies, energies * (1.0 + change) ** power, energies * (1.0 - change) ** power, change
    )


def structure_of(series: Sequence[Series], **options: float) -> Structure:
    structure = pair_structure(series, **options)
    assert structure is not None
    return structure


def failed(readings: Reading | Sequence[Reading] | None) -> list[str]:
    assert readings is not None
    found = [readings] if isinstance(readings, Reading) else readings
    return [reading.meaning for reading in found if not reading.passed]


def fcc(cells: int, edge: float) -> Floats:
    basis = np.array([[0.0, 0.0, 0.0], [0.0, 0.5, 0.5], [0.5, 0.0, 0.5], [0.5, 0.5, 0.0]])
    return lattice(basis, cells, edge)


def lattice(basis: Floats, cells: int, edge: float) -> Floats:
    corners = np.stack(np.meshgrid(*[np.arange(cells)] * 3, indexing="ij"), axis=-1).reshape(-1, 1, 3)
    return np.asarray((corners + basis + 0.1).reshape(-1, 3) * (edge / cells))


def sampled(state: State, *, fluid: Fluid, steps: int, start: Floats | None = None, seed: int = 1) -> Series:
    """Two thousand steps or more of settling and as many as asked for, with a frame every 250."""
    protocol = Protocol(seed=seed, equilibration=4000, steps=steps, frame_every=250)
    chain = store.Chain(Path(), fluid, state, protocol, 0)
    before = None
    if start is not None:
        velocities = math.sqrt(state.temperature) * np.random.default_rng(seed).normal(size=start.shape)
        before = store.Segment(0, 0, np.empty((0, 12)), np.empty((0, *start.shape)), start, velocities, 0.0)
    segments = []
    for index, (first, _) in enumerate(chain.segments):
        before = advance(chain, index, before, np.zeros(1, np.uint8))
        assert before is not None
        segments += [before] if first >= protocol.settling else []
    return assemble(chain, segments)


Rung = tuple[list[Series], dict[Chain, FrameSums]]


def rung(series: Series) -> Rung:
    return [series], {series.chain: reevaluate(series.fluid, series.frames, state=series.state)}


@pytest.fixture(scope="module")
def liquid() -> Rung:
    return rung(sampled(State(1.0, 0.8, 256), fluid=Fluid(cutoff=3.0), steps=40_000))


# --- force-temperature


@pytest.mark.parametrize("truncation", ["shifted", "plain", "corrected", "force-shifted"])
def test_surface_term_completes_the_identity_of_two_particles(truncation: str) -> None:
    """<sum F^2> = T <sum nabla^2 U> by quadrature over the distance of two particles, cut where the force is large."""
    fluid, state = Fluid(cutoff=1.6, truncation=truncation), State(0.9, 0.05, 2)  # type: ignore[arg-type]
    edge = float(fluid.pair_energy(np.array(np.nextafter(1.6, 0.0))))

    def mean_inside(values: Floats, r: Floats, weights: Floats) -> float:
        return float(np.sum(weights * r**2 * np.exp(-(fluid.pair_energy(r) - edge) / state.temperature) * values))

    nodes, weights = np.polynomial.legendre.leggauss(400)
    r, weights = 1.05 + 0.55 * nodes, 0.55 * weights
    slope = fluid.pair_virial(r) / r
    curvature = (fluid.pair_hypervirial(r) - fluid.pair_virial(r)) / r**2
    square = mean_inside(2.0 * slope**2, r, weights)
    laplacian = mean_inside(2.0 * (curvature + 2.0 * slope / r), r, weights)
    surface = surface_laplacian(fluid, state) * state.volume / (4.0 * math.pi)  # with g(r_c) = V / (4 pi) in this norm
    assert square == pytest.approx(state.temperature * (laplacian + surface), rel=1e-9)
    assert (abs(surface) > 0.02 * laplacian) == (truncation != "force-shifted")


def oscillators(temperature: float, *, particles: int = 100, frames: int = 3000, seed: int = 1) -> Rung:
    """Particles in wells of stiffness 3, at a temperature that need not be the one stated (1)."""
    rng, state = np.random.default_rng(seed), State(1.0, 0.5, particles)
    squares = rng.chisquare(3 * particles, frames) * temperature / 3.0
    series = series_of(np.zeros((frames, particles, 0)), state)
    return [series], {series.chain: sums_of(9.0 * squares, np.full(frames, 9.0 * particles), 1.5 * squares)}


def test_force_temperature_of_oscillators_is_that_of_their_bath() -> None:
    """Error sqrt(2 / (300 * 3000)) = 0.15 %: 1 % off is 5.4 of them beyond what is allowed."""
    readings = [force_temperature(*oscillators(t), level=LEVEL) for t in (1.0, 1.01, 0.99)]
    assert [reading is not None and reading.passed for reading in readings] == [True, False, False]
    assert "-1." in readings[2].meaning or "-0.9" in readings[2].meaning  # type: ignore[union-attr]
    assert force_temperature(*oscillators(1.0, frames=20), level=LEVEL) is None


def test_force_temperature_cries_wolf_no_more_than_it_says() -> None:
    """Without the allowance 1 % of 400 would be 4 +- 2; with it (0.2 % of errors of 0.4 %) fewer."""
    healthy = [force_temperature(*oscillators(1.0, frames=400, seed=seed), level=LEVEL) for seed in range(400)]
    assert sum(not reading.passed for reading in healthy if reading) <= 12
    assert sum(reading.statistic > 0.0 for reading in healthy if reading) > 150


def test_surface_term_enters_with_contact() -> None:
    series, frames = oscillators(1.0)
    jumping = [replace(each, fluid=Fluid(cutoff=1.2, truncation="shifted")) for each in series]
    surface = surface_laplacian(jumping[0].fluid, jumping[0].state) / 900.0
    assert surface < -0.02
    off = force_temperature(jumping, frames, level=LEVEL, contact=1.5)
    assert off is not None
    assert not off.passed
    assert f"{100.0 / (1.0 + 1.5 * surface) - 100.0:+.0f}."[:-1] in off.meaning


def test_without_a_bath_the_weight_of_configurations_is_exact_for_few_particles() -> None:
    """Oscillators of one total energy: K/E is of Beta(f/2, f/2). With a in place of a - 1 it would be 11 % off."""
    rng, particles, frames = np.random.default_rng(3), 6, 20_000
    state, freedom = State(1.0, 0.5, particles), 18
    share = rng.beta(0.5 * freedom, 0.5 * freedom, frames)
    energy = 18.0
    series = series_of(np.zeros((frames, particles, 0)), state, bath=False, freedom=freedom, kinetic=energy * share)
    squares = 2.0 * 3.0 * energy * (1.0 - share)
    frames_of = {series.chain: sums_of(squares, np.full(frames, 3.0 * freedom), energy * (1.0 - share))}
    reading = force_temperature([series], frames_of, level=LEVEL)
    assert reading is not None
    assert reading.passed
    hotter = {series.chain: replace(frames_of[series.chain], force_square=1.04 * squares)}
    assert failed(force_temperature([series], hotter, level=LEVEL))


# --- one-phase


def test_number_variance_is_that_of_counts_in_all_places() -> None:
    rng, edge = np.random.default_rng(5), 3.0
    frame = rng.random((40, 3)) * edge
    for parts in (2, 3):
        squares = []
        for corner in np.ndindex(6, 6, 6):
            inside = np.mod(frame - np.array(corner) * edge / 6.0, edge) < edge / parts
            squares.append((np.sum(np.all(inside, axis=1)) - 40.0 / parts**3) ** 2)
        share = 1.0 / parts**3
        expected = np.mean(squares) / (40.0 * share * (1.0 - share))
        found = number_variance(frame[None] + edge * rng.integers(-1, 2, (1, 40, 1)), edge, parts)
        np.testing.assert_allclose(found, [expected], rtol=1e-12)


def test_ideal_gas_has_number_variance_one_and_is_one_phase() -> None:
    """Of 3000 frames: variance known to some sqrt(2 / 8) a frame at most, so 4 errors are 0.04."""
    frames = np.random.default_rng(6).random((3000, 60, 3)) * 4.0
    for parts in (2, 3):
        values = number_variance(frames, 4.0, parts)
        error = np.std(values) / math.sqrt(3000)
        assert error < 0.01
        assert abs(np.mean(values) - 1.0) < 4.0 * error
    assert not failed(one_phase([series_of(frames[:200], State(1.0, 60 / 64.0, 60))], level=LEVEL))


def two_densities(rng: np.random.Generator, *, frames: int, inside: float, width: float = 0.4) -> Floats:
    """200 particles each in one of two layers that move through the box, `inside` of them in the first."""
    where = rng.random((frames, 200, 3))
    first = rng.random((frames, 200)) < inside
    where[..., 0] = np.where(first, width * where[..., 0], width + (1.0 - width) * where[..., 0])
    where[..., 0] += rng.random((frames, 1))
    return np.asarray(6.0 * np.mod(where, 1.0))


def test_two_layers_of_different_density_are_not_one_phase() -> None:
    rng, state = np.random.default_rng(7), State(1.0, 200 / 216.0, 200)
    layered = two_densities(rng, frames=200, inside=0.8)
    assert any("sub-boxes" in meaning for meaning in failed(one_phase([series_of(layered, state)], level=LEVEL)))
    even = two_densities(rng, frames=200, inside=0.4)
    assert not failed(one_phase([series_of(even, state)], level=LEVEL))
    assert one_phase([series_of(layered[:7], state)], level=LEVEL) is None


def test_order_is_that_of_the_definition() -> None:
    """Spherical harmonics of every bond, from scipy."""
    rng, edge, n = np.random.default_rng(8), 5.0, 50
    frame = rng.random((n, 3)) * edge
    reach = 1.4 * edge / n ** (1.0 / 3.0)
    first, second = np.triu_indices(n, 1)
    apart = frame[second] - frame[first]
    apart -= edge * np.rint(apart / edge)
    r = np.linalg.norm(apart, axis=1)
    apart, r = apart[r < reach], r[r < reach]
    assert len(r) > 100
    polar, azimuth = np.arccos(apart[:, 2] / r), np.arctan2(apart[:, 1], apart[:, 0])
    means = np.array([np.mean(special.sph_harm_y(6, m, polar, azimuth)) for m in range(-6, 7)])
    expected = math.sqrt(4.0 * math.pi / 13.0 * np.sum(np.abs(means) ** 2))
    np.testing.assert_allclose(crystalline_order(frame[None], edge), [expected], rtol=1e-10)
    np.testing.assert_allclose(crystalline_order(frame[None] + edge, edge), [expected], rtol=1e-10)


@pytest.mark.parametrize(
    ("basis", "order"),
    [
        (np.array([[0.0, 0.0, 0.0], [0.0, 0.5, 0.5], [0.5, 0.0, 0.5], [0.5, 0.5, 0.0]]), 0.57452),
        (np.array([[0.0, 0.0, 0.0], [0.5, 0.5, 0.5]]), 0.51069),
        (np.array([[0.0, 0.0, 0.0]]), 0.35355),
    ],
)
def test_lattices_have_their_published_order(basis: Floats, order: float) -> None:
    """fcc, bcc (14 neighbours), sc: W. Mickel, S. C. Kapfer, G. E. Schroeder-Turk, K. Mecke, J. Chem. Phys. 138, 044501
    (2013), table I, and Steinhardt et al. (1983), from memory; computed from bonds to the same digits."""
    assert crystalline_order(lattice(basis, 4, 7.0)[None], 7.0)[0] == pytest.approx(order, abs=1e-5)


def test_nobody_within_reach_has_no_order() -> None:
    far = np.array([[[0.0, 0.0, 0.0], [5.0, 5.0, 5.0]]])
    assert crystalline_order(far, 10.0)[0] == 0.0


@pytest.mark.parametrize(
    ("state", "cutoff"),
    [(State(1.2, 0.1, 256), 5.0), (State(1.4, 0.3, 256), 4.5), (State(2.0, 0.95, 256), 3.0)],
)
def test_sampled_gas_critical_fluid_and_dense_liquid_are_one_phase(state: State, cutoff: float) -> None:
    series = sampled(state, fluid=Fluid(cutoff=cutoff), steps=20_000)
    modulus = rung_properties([series])["bulk_modulus"]
    assert not failed(one_phase([series], level=LEVEL, bulk_modulus=modulus))


def test_liquid_and_vapour_in_one_box_are_not_one_phase() -> None:
    """Coexisting densities at T 0.85 are 0.77 and 0.02 (computed from the equation of Thol et al. (2016))."""
    series = sampled(State(0.85, 0.3, 256), fluid=Fluid(cutoff=4.5), steps=20_000)
    assert any("sub-boxes" in meaning for meaning in failed(one_phase([series], level=LEVEL)))
    assert failed(box([series], structure_of([series]), level=LEVEL))


def test_crystal_is_found_by_its_order() -> None:
    state = State(0.7, 0.95, 256)
    series = sampled(state, fluid=Fluid(cutoff=3.0), steps=5_000, start=fcc(4, state.box))
    readings = one_phase([series], level=LEVEL)
    assert any("Q6" in meaning for meaning in failed(readings))
    assert [reading.repeat for reading in readings or [] if "Q6" in reading.meaning] == [0]


def test_negative_bulk_modulus_is_no_phase() -> None:
    values = np.random.default_rng(9).normal(size=400)
    series = series_of(np.zeros((0, 10, 3)), State(1.0, 0.5, 10))
    for centre, healthy in ((-0.05, True), (-0.5, False), (0.5, True)):
        modulus = mean({series.chain: values + centre})
        assert (not failed(one_phase([series], level=LEVEL, bulk_modulus=modulus))) == healthy
    assert one_phase([series], level=LEVEL) is None


# --- box


def test_g_of_an_ideal_gas_is_flat_whatever_the_number_of_particles() -> None:
    """g and its mean in the corners are 1 with N - 1 neighbours; error bars of the tail are some 0.01."""
    frames = np.random.default_rng(10).random((400, 12, 3)) * 6.0
    series = series_of(frames, State(1.0, 12 / 216.0, 12))
    reading = box([series], structure_of([series]), level=LEVEL)
    assert reading is not None
    assert reading.passed
    assert reading.threshold == threshold(LEVEL)
    assert abs(float(reading.meaning.split()[6])) < 0.05


def test_layers_across_the_box_are_seen_at_half_of_it() -> None:
    rng, state = np.random.default_rng(11), State(1.0, 200 / 216.0, 200)
    series = series_of(two_densities(rng, frames=100, inside=0.95), state)
    assert failed(box([series], structure_of([series]), level=LEVEL))
    assert box([series], None, level=LEVEL) is None


def test_sampled_liquid_of_default_size_has_room(liquid: Rung) -> None:
    assert not failed(box(liquid[0], structure_of(liquid[0]), level=LEVEL))


# --- virial-routes


def test_routes_to_the_pressure_of_a_sampled_liquid_agree(liquid: Rung) -> None:
    series, frames = liquid
    structure = structure_of(series)
    readings = virial_routes(series, structure, frames, level=LEVEL)
    assert readings is not None
    assert len(readings) == 3
    assert not failed(readings)
    assert readings[0].statistic < 1e-9  # the same positions in the same precision
    assert readings[1].statistic < 1e-3  # differences of second order in a change of 1e-4
    assert virial_routes(series, None, None, level=LEVEL) is None


def test_records_one_sample_late_or_in_another_unit_are_found(liquid: Rung) -> None:
    series, frames = liquid
    structure = structure_of(series)
    late = [
        replace(
            each,
            energy=np.roll(each.column("energy"), 1),
            sampled_energy=np.roll(each.column("sampled_energy"), 1),
            virial=np.roll(each.column("virial"), 1),
        )
        for each in series
    ]
    assert len(failed(virial_routes(late, structure, frames, level=LEVEL))) == 2
    scaled = [replace(each, virial=1.3 * each.column("virial")) for each in series]
    assert len(failed(virial_routes(scaled, structure, frames, level=LEVEL))) == 2
    assert len(failed(virial_routes(scaled, structure, None, level=LEVEL))) == 1
    longer = [replace(each, fluid=replace(each.fluid, cutoff=3.2)) for each in series]
    foreign = {each.chain: reevaluate(each.fluid, each.frames, state=each.state) for each in longer}
    assert failed(virial_routes(series, None, foreign, level=LEVEL))


def test_difference_from_g_has_the_error_of_a_difference(liquid: Rung) -> None:
    """Both routes see the same frames: the error of their difference is a small part of that of the pressure."""
    series, _ = liquid
    structure = structure_of(series)
    virial = mean({each.chain: each.column("virial")[each.frame_samples] for each in series}) / series[0].state.volume
    assert structure.pressure is not None
    assert (structure.pressure - virial).standard_error < 0.2 * virial.standard_error


def test_binning_leaves_less_than_is_allowed(liquid: Rung) -> None:
    """Over the same frames, so that only binning is left, with its own error; eight times wider bins leave 0.015."""
    series, _ = liquid
    state = series[0].state
    virial = mean({each.chain: each.column("virial")[each.frame_samples] for each in series}) / state.volume
    fine, coarse = (structure_of(series, bin_width=width).pressure for width in (0.02, 0.16))
    assert fine is not None
    assert coarse is not None
    own = virial + state.density * state.temperature
    off: Estimate = fine - own
    assert 0.0 < off.standard_error < 1e-3
    assert abs(off.value) < ALLOWED_BINNING * own.value + 4.0 * off.standard_error
    off = coarse - own
    assert abs(off.value + 0.015) < 4.0 * off.standard_error < 0.015


# --- heat-routes


def test_heat_capacities_by_two_routes_are_held_against_each_other() -> None:
    """Errors of 0.2 each, most of them shared: the difference has an error of 0.1, and 0.5 is five of them."""
    rng = np.random.default_rng(12)
    one, other, shared = rng.normal(size=(3, 2000)) * math.sqrt(2000 / 2) * 0.1
    shared *= 2.6
    chain = (1.0, 0.5, 100, 0)
    own = mean({chain: 2.0 + shared + one})
    passed = []
    for off in (0.0, 0.5):
        slope = mean({chain: 2.0 + off + shared + other})
        assert (own - slope).standard_error == pytest.approx(0.1, rel=0.1)
        reading = heat_routes(own, slope, level=LEVEL)
        assert reading is not None
        passed.append(reading.passed)
    assert passed == [True, False]
    assert heat_routes(own, None, level=LEVEL) is None
    assert heat_routes(own, mean({chain: other[:20]}), level=LEVEL) is None


# --- quantum


def wells(power: float, *, particles: int = 50, frames: int = 20_000) -> tuple[Rung, float]:
    """Particles in wells of a stiffness that goes as volume^-power, at T 1.3; and the stiffness."""
    rng, state, stiffness = np.random.default_rng(13), State(1.3, 0.7, particles), 40.0
    squares = rng.chisquare(3 * particles, frames) * state.temperature / stiffness
    energy = 0.5 * stiffness * squares
    series = series_of(
        np.zeros((frames, particles, 0)),
        state,
        energy=energy,
        sampled_energy=energy,
        virial=energy * (power - 2.0 / 3.0),
    )
    sums = sums_of(stiffness**2 * squares, np.full(frames, 3.0 * particles * stiffness), energy, 2.0 / 3.0 - power)
    return ([series], {series.chain: sums}), stiffness


@pytest.mark.parametrize("power", [0.0, 3.0])
def test_quantum_shifts_of_oscillators_are_those_of_the_exact_partition_function(power: float) -> None:
    """A = 3 T ln(2 sinh(x/2)) a particle, x = hbar omega / T; classically 3 T ln x. At x = 0.05 the next order is 1e-5.

    E = A - T dA/dT by hand: 3 T (x/2) coth(x/2), classically 3 T. P = -dA/dV with omega as volume^(-power/2).
    """
    (series, frames), stiffness = wells(power)
    state, x = series[0].state, 0.05
    wavelength = math.sqrt(2.0 * math.pi * (x**2 * state.temperature / stiffness))  # hbar^2/(m T) = x^2 T / stiffness
    shifts = quantum_shifts(series, frames, wavelength=wavelength)
    assert shifts is not None
    free_energy = 3.0 * state.temperature * math.log(2.0 * math.sinh(0.5 * x) / x)
    energy = 3.0 * state.temperature * (0.5 * x / math.tanh(0.5 * x) - 1.0)
    assert shifts.free_energy.value == pytest.approx(free_energy, rel=1e-4)
    assert shifts.kinetic.value == pytest.approx(0.5 * energy, rel=1e-4)
    assert shifts.energy.value == pytest.approx(energy, rel=1e-4)
    pressure = state.density * 0.5 * power * energy
    unit = state.density * energy
    assert 0.0 < shifts.pressure.standard_error < 0.05 * unit
    assert abs(shifts.pressure.value - pressure) < 4.0 * shifts.pressure.standard_error


def quartic_wells(power: float, *, particles: int = 50, frames: int = 20_000) -> tuple[Rung, float]:
    """Particles at U = k r^4, k as volume^-power, at T 1.3; and the mean Laplacian of one, 20 k <r^2>."""
    rng, state, stiffness = np.random.default_rng(14), State(1.3, 0.7, particles), 5.0
    squares = np.sqrt(rng.gamma(0.75, state.temperature / stiffness, (frames, particles)))
    energy = stiffness * np.sum(squares**2, axis=1)
    curvature = 20.0 * stiffness * np.sum(squares, axis=1)
    series = series_of(np.zeros((frames, particles, 0)), state, energy=energy, virial=(power - 4.0 / 3.0) * energy)
    sums = sums_of(16.0 * stiffness**2 * np.sum(squares**3, axis=1), curvature, energy, 4.0 / 3.0 - power)
    mean_square = math.sqrt(state.temperature / stiffness) * special.gamma(1.25) / special.gamma(0.75)
    return ([series], {series.chain: sums}), 20.0 * stiffness * float(mean_square)


def test_quantum_shifts_of_quartic_wells_are_derivatives_of_the_free_energy() -> None:
    """b <L> goes as (k T)^(1/2) times 1/T in b: by hand E = 3/2 of it and P = power/2 of it times the density."""
    power = 2.0
    (series, frames), curvature = quartic_wells(power)
    shifts = quantum_shifts(series, frames, wavelength=0.1)
    assert shifts is not None
    unit = 0.01 / (48.0 * math.pi) * curvature
    exact = (
        (shifts.free_energy, unit),
        (shifts.kinetic, unit),
        (shifts.energy, 1.5 * unit),
        (shifts.pressure, 0.5 * power * series[0].state.density * unit),
    )
    for estimate, value in exact:
        assert 0.0 < estimate.standard_error < 0.03 * unit
        assert abs(estimate.value - value) < 4.0 * estimate.standard_error


def test_quantum_effects_are_held_against_error_bars() -> None:
    (series, frames), _ = quartic_wells(3.0)
    light, heavy = (quantum(series, frames, wavelength=wavelength) for wavelength in (0.3, 0.001))
    assert len(failed(light)) == 2
    assert not failed(heavy)
    energies = mean({each.chain: each.column("energy") for each in series}) / series[0].state.particles
    shifts = quantum_shifts(series, frames, wavelength=0.3)
    assert light is not None
    assert shifts is not None
    expected = (abs(shifts.energy.value) - shifts.energy.standard_error) / energies.standard_error
    assert shifts.energy.standard_error > 1e-4 * shifts.energy.value
    assert light[0].statistic == pytest.approx(expected, rel=1e-6)
    constant = [replace(each, bath=False) for each in series]
    assert quantum(constant, frames, wavelength=0.3) is None


def test_quantum_shift_of_pressure_is_the_slope_of_the_free_energy_of_a_sampled_liquid(liquid: Rung) -> None:
    """-d A_1/dV from sampling at two more densities; errors of both are some 20 % of the shift."""
    around = [
        rung(sampled(State(1.0, density, 256), fluid=Fluid(cutoff=3.0), steps=20_000)) for density in (0.75, 0.85)
    ]
    thinner, denser = (quantum_shifts(*each, wavelength=0.1) for each in around)
    middle = quantum_shifts(*liquid, wavelength=0.1)
    assert thinner is not None
    assert denser is not None
    assert middle is not None
    slope = (denser.free_energy - thinner.free_energy) * (0.8**2 / 0.1)
    difference = middle.pressure - slope
    assert difference.standard_error < 0.5 * slope.value
    assert abs(difference.value) < 4.0 * difference.standard_error
