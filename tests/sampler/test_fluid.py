"""Pair functions, truncations, tails and the sums they are linear in."""

import numpy as np
import pytest
from scipy.integrate import quad

from sampler.errors import BadRequest
from sampler.fluid import Fluid, State
from sampler.forces import evaluate
from sampler.ladder import chains
from sampler.potentials import lennard_jones
from sampler.protocol import Protocol

TRUNCATIONS = ("corrected", "plain", "shifted", "force-shifted")


@pytest.mark.parametrize(
    ("particles", "edge", "cutoff", "energy"),
    # Energy tail corrections of four sample configurations, digits as given: NIST Standard Reference Simulation
    # Website, Lennard-Jones reference calculations (read).
    [
        (800, 10, 3, "-198.49"),
        (800, 10, 4, "-83.769"),
        (200, 8, 3, "-24.230"),
        (200, 8, 4, "-10.226"),
        (400, 10, 3, "-49.622"),
        (400, 10, 4, "-20.942"),
        (30, 8, 3, "-0.54517"),
        (30, 8, 4, "-0.23008"),
    ],
)
def test_energy_tail_matches_published_digits(particles, edge, cutoff, energy):
    tail = Fluid(cutoff=cutoff).tail(particles / edge**3)[0]
    decimals = len(energy.split(".")[1])
    assert f"{particles * tail:.{decimals}f}" == energy


@pytest.mark.parametrize("cutoff", [2.5, 3.0, 5.0])
def test_tails_are_integrals_beyond_the_cutoff(cutoff):
    density = 0.7
    functions = (lennard_jones.u, lambda r: -lennard_jones.w(r) / 3, lambda r: lennard_jones.x(r) / 9)
    for tail, function in zip(Fluid(cutoff=cutoff).tail(density), functions, strict=True):
        # substituting s = 1/r makes the integrand a polynomial
        integral, _ = quad(lambda s, f=function: f(np.float64(1 / s)) / s**4, 0, 1 / cutoff, epsabs=1e-14)
        assert tail == pytest.approx(2 * np.pi * density * integral, rel=1e-10)


@pytest.mark.parametrize("truncation", TRUNCATIONS)
def test_virial_functions_are_logarithmic_derivatives(truncation):
    fluid = Fluid(cutoff=2.5, truncation=truncation)
    r, h = np.linspace(0.9, 2.4, 40), 1e-5
    slope = (fluid.pair_energy(r + h) - fluid.pair_energy(r - h)) / (2 * h)
    second = (fluid.pair_virial(r + h) - fluid.pair_virial(r - h)) / (2 * h)
    # central differences: h^2 f'''/6 with f''' up to 1e5 near r = 0.9, and 1e-16 f/h
    assert np.allclose(fluid.pair_virial(r), r * slope, rtol=1e-6, atol=1e-7)
    assert np.allclose(fluid.pair_hypervirial(r), r * second, rtol=1e-6, atol=1e-6)


def test_what_is_continuous_at_the_cutoff():
    just_inside = np.array([2.5 * (1 - 1e-12)])
    edge = {name: Fluid(cutoff=2.5, truncation=name) for name in TRUNCATIONS}
    assert abs(edge["shifted"].pair_energy(just_inside)[0]) < 1e-10
    assert abs(edge["force-shifted"].pair_energy(just_inside)[0]) < 1e-10
    assert abs(edge["force-shifted"].pair_virial(just_inside)[0]) < 1e-10
    assert edge["plain"].pair_energy(just_inside)[0] == pytest.approx(-0.016316891, abs=1e-9)
    assert all(fluid.pair_energy(np.array([2.5, 3.0])).tolist() == [0, 0] for fluid in edge.values())


@pytest.mark.parametrize("truncation", TRUNCATIONS)
def test_totals_are_sums_of_pair_functions(truncation):
    rng = np.random.default_rng(5)
    distances = rng.uniform(0.9, 2.9, size=(3, 50))
    fluid, state = Fluid(cutoff=3.0, truncation=truncation), State(1.0, 0.6, 300)
    sums = np.stack([(distances**-12.0).sum(1), (distances**-6.0).sum(1), np.full(3, 50.0), distances.sum(1)], axis=1)
    totals = fluid.totals(sums, state)
    energy, virial, hypervirial = (state.particles * part for part in fluid.tail(state.density))
    bare = fluid.pair_energy(distances).sum(1)
    assert totals.energy == pytest.approx(bare + energy)
    assert totals.virial == pytest.approx(-fluid.pair_virial(distances).sum(1) / 3 + virial)
    assert totals.hypervirial == pytest.approx(fluid.pair_hypervirial(distances).sum(1) / 9 + hypervirial)
    conserved = Fluid(cutoff=3.0, truncation="force-shifted" if truncation == "force-shifted" else "shifted")
    assert totals.sampled_energy == pytest.approx(conserved.pair_energy(distances).sum(1) + energy)


def test_surface_term_only_where_the_force_jumps():
    surface = {name: Fluid(cutoff=2.5, truncation=name).surface_hypervirial(0.8) for name in TRUNCATIONS}
    w = 48 * (-(2.5**-12) + 0.5 * 2.5**-6)
    assert surface == pytest.approx(
        {
            "corrected": 0.0,
            "force-shifted": 0.0,
            "plain": -2 * np.pi / 9 * 0.8 * 2.5**3 * w,
            "shifted": -2 * np.pi / 9 * 0.8 * 2.5**3 * w,
        }
    )


def test_surface_term_is_what_a_steep_but_continuous_force_gives():
    # X of a homogeneous fluid (g = 1) whose force falls to zero linearly within +-delta of the cutoff, less the part
    # inside the cutoff. The remainder is of second order: (delta/r_c)^2 and delta w'/w.
    fluid, delta, density = Fluid(cutoff=2.5, truncation="shifted"), 1e-4, 0.8
    low, high = 2.5 - delta, 2.5 + delta
    fall = lambda r: (high - r) / (high - low)  # noqa: E731
    steep = lambda r: lennard_jones.x(r) * fall(r) - r * lennard_jones.w(r) / (high - low)  # noqa: E731
    edge, _ = quad(lambda r: float(r**2 * steep(r)), low, high, epsabs=1e-12)
    inside, _ = quad(lambda r: float(r**2 * lennard_jones.x(r)), low, 2.5, epsabs=1e-14)
    term = 2 * np.pi * density / 9 * (edge - inside)
    assert fluid.surface_hypervirial(density) == pytest.approx(term, rel=1e-3)


def test_a_cutoff_beyond_half_the_box_is_refused(tmp_path):
    fluid, state = Fluid(cutoff=3.0), State(1.0, 0.8, 100)
    for ask in (
        lambda: chains(tmp_path, fluid, [state], Protocol()),
        lambda: evaluate(fluid, np.zeros((2, 3)), box=state.box),
    ):
        with pytest.raises(
            BadRequest, match=r"cutoff 3 sigma is beyond half the box of edge 5 sigma; .* more particles"
        ):
            ask()
    Fluid(cutoff=2.5).check_box(5.0)


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: Fluid(cutoff=-1.0), "cutoff must be a positive number, found -1"),
        (lambda: Fluid(cutoff=float("nan")), "cutoff must be a positive number, found nan"),
        (lambda: Fluid(truncation="sharp"), "truncation must be one of corrected, plain, .* found 'sharp'"),
        (lambda: Fluid(potential="square-well"), "potential must be 'lennard-jones'"),
        (lambda: State(0.0, 0.8, 100), "temperature must be a positive number, found 0.0"),
        (lambda: State(1.0, float("inf"), 100), "density must be a positive number, found inf"),
        (lambda: State(1.0, 0.8, 1), "particles must be at least 2, found 1"),
    ],
)
def test_refusals(make, words):
    with pytest.raises(BadRequest, match=words):
        make()
