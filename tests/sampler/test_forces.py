"""Forces and pair sums against an independent evaluation over all pairs."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from sampler.fluid import Fluid
from sampler.forces import evaluate
from sampler.groups import gather
from sampler.pairs import Tabulated, pair_function, tabulated
from sampler.potentials import lennard_jones
from sampler.slots import Skins, exact_forces, quick_forces, slots_of

TRUNCATIONS = ("corrected", "plain", "shifted", "force-shifted")


def all_pairs(fluid, positions, box):
    """Forces, bare sums by the minimum image, with the fluid's own pair functions; sizes of pushes and pulls."""
    n = len(positions)
    forces, sizes, sums = np.zeros((n, 3)), np.zeros(n), np.zeros(4)
    for i in range(n):
        d = positions[i] - np.delete(positions, i, axis=0)
        d -= box * np.round(d / box)
        r = np.sqrt((d * d).sum(axis=1))
        d, r = d[r < fluid.cutoff], r[r < fluid.cutoff]
        forces[i] = (-(fluid.pair_virial(r) / r**2)[:, None] * d).sum(axis=0)
        sizes[i] = (48 * r**-13 + 24 * r**-7).sum()
        sums += 0.5 * np.array([(r**-12).sum(), (r**-6).sum(), len(r), r.sum()])
    return forces, sums, sizes


def in_slots(pair, positions, box, *, short):
    """Forces as the loop over steps has them, with lists for particles on the move, and the sums of a sample."""
    velocity = np.random.default_rng(0).normal(size=positions.shape)
    slots = slots_of(np.mod(positions, box), velocity, box, pair.cutoff, Skins(0.2, 1.0))
    forces, sums = np.empty_like(positions), np.empty(0 if short else 5)
    if short:
        quick_forces(pair, slots, box)
    else:
        exact_forces(pair, slots, box, sums)
    gather(slots.force, slots.groups.labels, forces)
    return forces, sums


def scattered(n, density, seed, *, disorder=0.15):
    """A disturbed lattice: no overlaps, no symmetry."""
    rng = np.random.default_rng(seed)
    box = (n / density) ** (1 / 3)
    m = int(np.ceil(n ** (1 / 3) - 1e-9))
    sites = np.stack(np.meshgrid(*[np.arange(m)] * 3), axis=-1).reshape(-1, 3)
    sites = sites[rng.permutation(len(sites))[:n]]
    return (sites + 0.5 + disorder * rng.uniform(-1, 1, (n, 3))) * box / m, box


def assert_equal_to_all_pairs(fluid, positions, box):
    forces, sums = evaluate(fluid, positions, box=box)
    expected, expected_sums, sizes = all_pairs(fluid, positions, box)
    # 1e-10 of the largest number: rounding of some 1e5 terms is 1e-13
    assert np.abs(forces - expected).max() <= 1e-10 * max(np.abs(expected).max(), 1.0)
    used = slice(None) if fluid.truncation == "force-shifted" else slice(3)
    assert sums[used] == pytest.approx(expected_sums[used], rel=1e-10)
    listed, _ = in_slots(pair_function(fluid), positions, box, short=False)
    assert np.abs(listed - expected).max() <= 1e-10 * max(np.abs(expected).max(), 1.0)
    # float32: pushes and pulls are off by some ten roundings of 6e-8, of which r^-14 makes fourteen of the first
    short, _ = in_slots(pair_function(fluid), positions, box, short=True)
    assert (np.abs(short - expected) <= 3e-6 * sizes[:, None] + 1e-30).all()


ANY_FLUID = {
    "density": st.floats(0.01, 1.0),
    "share": st.floats(0.0, 1.0),
    "truncation": st.sampled_from(TRUNCATIONS),
    "drift": st.floats(0.0, 1e4),
    "seed": st.integers(0, 10**6),
}


@settings(max_examples=60, deadline=None, derandomize=True)
@given(n=st.integers(20, 700), **ANY_FLUID)
def test_any_fluid_at_any_density(n, **fluid):
    assert_any_fluid(n, **fluid)


@settings(max_examples=20, deadline=None, derandomize=True)
@given(n=st.integers(1000, 5000), **ANY_FLUID)
def test_any_fluid_of_many_particles(n, **fluid):
    assert_any_fluid(n, **fluid)


def assert_any_fluid(n, density, share, truncation, drift, seed):
    positions, box = scattered(n, density, seed)
    cutoff = min(1.2, box / 2) + share * max(0.0, box / 2 - 1.2)
    assert_equal_to_all_pairs(Fluid(cutoff=cutoff, truncation=truncation), positions + drift, box)


@pytest.mark.parametrize(("n", "cutoff"), [(2, 3.0), (5, 3.0), (5000, 3.0)])
def test_few_and_many_particles(n, cutoff):
    positions, box = scattered(n, 0.8 if n > 5 else 0.005, 1)
    assert_equal_to_all_pairs(Fluid(cutoff=cutoff), positions, box)


def test_particles_on_edges_and_corners():
    box = 8.0
    axis = np.array([0.0, 2.0, 4.0, 6.0, np.nextafter(8.0, 0.0), 8.0 - 1.1])
    positions = np.stack(np.meshgrid(axis[:4], axis[:4], axis[:4]), axis=-1).reshape(-1, 3)
    positions[0] = -1e-300  # wraps to the box edge itself
    assert_equal_to_all_pairs(Fluid(cutoff=4.0, truncation="force-shifted"), positions, box)
    positions[:, 1] = np.where(positions[:, 1] == 0.0, np.nextafter(8.0, 0.0), positions[:, 1])
    assert_equal_to_all_pairs(Fluid(cutoff=3.9), positions, box)


def test_all_in_one_corner():
    # a crowded column and empty ones: groups of very unequal size
    rng = np.random.default_rng(2)
    positions = np.concatenate([scattered(200, 1.0, 3)[0], rng.uniform(8.0, 29.0, (10, 3))])
    assert_equal_to_all_pairs(Fluid(cutoff=5.0), positions, 30.0)


@pytest.mark.parametrize("truncation", TRUNCATIONS)
def test_forces_sum_to_zero(truncation):
    positions, box = scattered(500, 0.8, 4)
    forces, _ = evaluate(Fluid(cutoff=3.0, truncation=truncation), positions, box=box)
    assert np.abs(forces.sum(axis=0)).max() < 1e-11 * np.abs(forces).sum()


def test_a_table_gives_what_it_was_made_from():
    fluid = Fluid(cutoff=3.0)
    positions, box = scattered(500, 0.8, 5)
    r = np.linspace(0.75, 3.05, 6000)
    table = tabulated(r, lennard_jones.u(r), cutoff=3.0)
    expected, powers, sizes = all_pairs(fluid, positions, box)
    exact, sums = in_slots(table, positions, box, short=False)
    short, _ = in_slots(table, positions, box, short=True)
    # cubic in r^2 on 2^8 intervals an octave: relative error of the slope (1/256)^3/24 x 1000 = 2.5e-6 at most;
    # straight lines on 2^10: (1/1024)^2/12 x 56 = 4.5e-6
    assert (np.abs(exact - expected) <= 3e-6 * sizes[:, None]).all()
    assert (np.abs(short - expected) <= 1e-5 * sizes[:, None]).all()
    assert np.abs(exact - expected).max() > 1e-9  # it is the table that was read
    factors = np.array([lennard_jones.ENERGY, -3 * lennard_jones.VIRIAL, 9 * lennard_jones.HYPERVIRIAL])
    assert sums[[0, 1, 3]] == pytest.approx(factors @ powers[:2], rel=1e-5)
    assert sums[2] == powers[2]


def test_a_table_bounds_what_it_is_asked():
    r = np.linspace(0.9, 2.0, 500)
    table = tabulated(r, lennard_jones.u(r), cutoff=1.9)
    assert isinstance(table, Tabulated)
    positions = np.array([[1.0, 1.0, 1.0], [1.85, 1.0, 1.0], [1.0, 2.9001, 1.0]])
    forces, sums = in_slots(table, positions, 6.0, short=False)
    # closer than the table begins, the first interval is continued: still pushed apart
    assert forces[0, 0] < -30
    assert forces[0, 1] == 0
    assert sums[2] == 1
