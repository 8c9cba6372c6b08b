"""Test insertion against exact means over an ideal gas, direct insertion, and the reference equation."""

from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest
from scipy.integrate import quad

from estimators.cavities import STRATA, Cavities
from estimators.errors import BadSeries
from estimators.insertion import Insertion, insertion
from reference.catalogue import find
from sampler.fluid import ELSEWHERE, Fluid, State, Truncation
from sampler.protocol import Protocol
from sampler.rung import advance, assemble
from sampler.series import Series
from sampler.store import Chain, Segment

Floats = npt.NDArray[np.float64]

GAS = State(1.5, 0.1, 30)
TRUNCATIONS: list[Truncation] = ["corrected", "plain", "shifted", "force-shifted"]


def series_of(frames: Floats, state: State, *, fluid: Fluid, repeat: int = 0, bath: bool = True) -> Series:
    nothing = np.zeros(len(frames))
    recorded = [nothing] * 6
    return Series(fluid, state, repeat, bath, 1.0, *recorded, frames=frames, frame_stride=1)


def ideal_gas(number: int, state: State, seed: int) -> Floats:
    return np.random.default_rng(seed).random((number, state.particles, 3)) * state.box


def inserted(series: list[Series], **options: int) -> Insertion:
    found = insertion(series, **options)
    assert found is not None
    return found


def sampled_energy(fluid: Fluid, r: Floats) -> Floats:
    """U_dyn of a pair: what is left of u when it is made to end at zero."""
    edge = float(fluid.pair_energy(np.nextafter(fluid.cutoff, 0.0)))
    return np.where(r < fluid.cutoff, fluid.pair_energy(r) - edge, 0.0)


def exact(fluid: Fluid, state: State) -> float:
    """-T ln <exp(-dU/T)> over an ideal gas, (1 + b/V)^N with b the integral of exp(-u/T) - 1; parts to first order."""

    def mayer(r: float) -> float:
        return 4.0 * math.pi * r**2 * math.expm1(-float(sampled_energy(fluid, np.array(r))) / state.temperature)

    b = quad(mayer, 0.0, 0.6)[0] + quad(mayer, 0.6, fluid.cutoff, epsabs=1e-10)[0]
    edge = float(fluid.pair_energy(np.nextafter(fluid.cutoff, 0.0)))
    pairs = 0.5 * state.particles * (state.particles - 1) * 4.0 / 3.0 * math.pi * fluid.cutoff**3 / state.volume
    unsampled = 2.0 / state.particles * pairs * edge + 2.0 * fluid.tail(state.density)[0]
    return unsampled - state.temperature * state.particles * math.log1p(b / state.volume)


@pytest.mark.parametrize("truncation", TRUNCATIONS)
def test_ideal_gas_frames_give_the_exact_mean(truncation: Truncation) -> None:
    """Within 4 standard errors, and these of the size that the variance of a frame's mean weight allows."""
    fluid = Fluid(cutoff=2.5, truncation=truncation)
    found = inserted([series_of(ideal_gas(1500, GAS, 3), GAS, fluid=fluid)])
    potential = found.chemical_potential
    assert abs(potential.value - exact(fluid, GAS)) < 4.0 * potential.standard_error
    assert 0.0005 < potential.standard_error < 0.002
    assert potential.method == "insertion"
    assert (found.trust, found.reason) == ("ok", "")


def test_error_bars_match_the_scatter_of_replicas() -> None:
    """60 replicas: the mean within 4 errors, the claimed error within 4 of its own (a scatter of 60: 9 %)."""
    fluid = Fluid(cutoff=2.5)
    replicas = [series_of(ideal_gas(150, GAS, seed), GAS, fluid=fluid) for seed in range(60)]
    found = [inserted([each], trials=100, seed=index).chemical_potential for index, each in enumerate(replicas)]
    values = np.array([each.value for each in found])
    scatter = float(np.std(values, ddof=1))
    assert abs(np.mean(values) - exact(fluid, GAS)) < 4.0 * scatter / math.sqrt(60)
    claimed = math.sqrt(np.mean([each.standard_error**2 for each in found]))
    assert 1.0 - 0.36 < claimed / scatter < 1.0 + 0.36


@pytest.mark.parametrize("truncation", ["corrected", "force-shifted"])
def test_strata_give_the_mean_over_the_whole_cube(truncation: Truncation) -> None:
    """A lattice with a period of four cells, so that where in its cell a point lies matters, against quadrature over
    the middles of 48^3 cubes: the mean within 4 errors, the mean square within 5 of an error that bounds its own.
    """
    edge = 4.79
    fluid, state = Fluid(cutoff=2.3, truncation=truncation), State(4.0, 64 / edge**3, 64)
    grid = (np.stack(np.meshgrid(*[np.arange(48)] * 3, indexing="ij"), axis=-1).reshape(-1, 3) + 0.5) / 48 * edge / 4
    frame = (np.stack(np.meshgrid(*[np.arange(4)] * 3, indexing="ij"), axis=-1).reshape(-1, 3) + 0.5) / 4 * edge
    energy = np.zeros(len(grid))
    for particle in frame:
        apart = grid - particle
        apart -= edge * np.rint(apart / edge)
        energy += sampled_energy(fluid, np.linalg.norm(apart, axis=1))
    weights = np.exp(-energy / state.temperature)
    tally = Cavities(fluid, state).insert(frame[None], np.full(STRATA, 40_000), key=1)
    error = math.sqrt(float(np.sum(tally.share**2 * (tally.square - tally.weight**2))) / 40_000)
    assert abs(tally.mean_weights[0] - np.mean(weights)) < 4.0 * error
    assert error < 0.02 * np.mean(weights)
    assert abs(np.sum(tally.share * tally.square) - np.mean(weights**2)) < 5.0 * error * 2.0 * np.max(weights)


def test_test_particles_depend_on_nothing_but_seed_chain_and_frame() -> None:
    fluid = Fluid(cutoff=2.5)
    frames, trials = ideal_gas(20, GAS, 7), np.full(STRATA, 8)
    cavities = Cavities(fluid, GAS)
    whole, part = cavities.insert(frames, trials, key=2**64 - 3), cavities.insert(frames[7:9], trials, key=4)
    assert np.array_equal(whole.weight[7:9], part.weight)
    moved = frames + GAS.box * np.random.default_rng(1).integers(-2, 3, frames.shape)
    np.testing.assert_allclose(
        cavities.insert(moved, trials, key=4).share[2:], cavities.insert(frames, trials, key=4).share[2:], atol=1e-3
    )
    first, again, other = (
        inserted([series_of(frames, GAS, fluid=fluid)], seed=seed).chemical_potential.value for seed in (1, 1, 2)
    )
    assert first == again != other


def test_a_mean_that_rests_on_few_frames_is_not_trusted() -> None:
    """At low temperature the few test particles between two others outweigh all the rest."""
    cold = State(0.18, 0.1, 30)
    found = inserted([series_of(ideal_gas(300, cold, 8), cold, fluid=Fluid(cutoff=2.5))])
    assert found.contributing_frames < 15
    assert found.trust == "no"
    assert "rare" in found.reason or "too short" in found.reason
    milder = State(0.3, 0.1, 30)
    found = inserted([series_of(ideal_gas(150, milder, 8), milder, fluid=Fluid(cutoff=2.5))])
    assert 15 <= found.contributing_frames < 40
    assert found.trust == "caution"
    few = inserted([series_of(ideal_gas(20, GAS, 8), GAS, fluid=Fluid(cutoff=2.5))])
    assert (few.trust, few.reason) == ("no", few.chemical_potential.reason)


def sampled(state: State, cutoff: float, effort: float, frame_every: int) -> Series:
    """A short run, frames of every so many steps."""
    steps = round(effort / state.particles / 1000) * 1000
    protocol = Protocol(seed=4, repeats=1, equilibration=4000, steps=steps, record_every=10, frame_every=frame_every)
    chain = Chain(Path(), Fluid(cutoff=cutoff), state, protocol, 0)
    before: Segment | None = None
    segments = []
    for index, (first, _) in enumerate(chain.segments):
        before = advance(chain, index, before, np.zeros(1, np.uint8))
        if before is not None and first >= protocol.settling:
            segments.append(before)
    return assemble(chain, segments)


@pytest.mark.parametrize(
    ("temperature", "density", "cutoff", "frame_every"),
    [(2.0, 0.3, 4.0, 200), (1.6, 0.5, 3.0, 200), (1.1, 0.7, 3.0, 80)],
)
def test_chemical_potential_is_that_of_the_reference_equation(
    temperature: float, density: float, cutoff: float, frame_every: int
) -> None:
    """mu/T of the equation is A00 + A01. Tolerance: 3 standard errors, and 0.008 for what neither the finite size nor
    the mean field beyond and at the cutoff accounts for; errors at most 0.02."""
    series = sampled(State(temperature, density, 500), cutoff, 2.4e7, frame_every)
    found = inserted([series])
    derivatives = find("thol-2016").derivatives(temperature, density)
    expected = temperature * float(derivatives[0, 0] + derivatives[0, 1])
    error = found.chemical_potential.standard_error
    assert abs(found.chemical_potential.value - expected) < 3.0 * error + 0.008
    assert 0.001 < error < 0.02
    assert found.trust == "ok"
    assert found.contributing > 1000


def test_nothing_comes_of_no_frames_no_bath_unknown_pairs_and_no_room() -> None:
    frames = ideal_gas(5, GAS, 9)
    assert insertion([]) is None
    assert insertion([series_of(frames[:0], GAS, fluid=Fluid(cutoff=2.5))]) is None
    assert insertion([series_of(frames, GAS, fluid=Fluid(cutoff=2.5), bath=False)]) is None
    assert insertion([series_of(frames, GAS, fluid=Fluid(potential=ELSEWHERE))]) is None
    full = State(1.5, 8.0, 1000)
    lattice = np.stack(np.meshgrid(*[0.5 * np.arange(10)] * 3, indexing="ij"), axis=-1).reshape(1, 1000, 3)
    assert insertion([series_of(np.repeat(lattice, 4, axis=0), full, fluid=Fluid(cutoff=2.5))]) is None


def test_what_is_no_rung_is_refused() -> None:
    fluid, frames = Fluid(cutoff=2.5), ideal_gas(5, GAS, 10)
    with pytest.raises(BadSeries, match="share all three"):
        insertion([series_of(frames, GAS, fluid=fluid), series_of(frames, State(1.1, 0.1, 30), fluid=fluid, repeat=1)])
    with pytest.raises(BadSeries, match="same repeat number"):
        insertion([series_of(frames, GAS, fluid=fluid), series_of(frames, GAS, fluid=fluid)])
    with pytest.raises(BadSeries, match="trials"):
        insertion([series_of(frames, GAS, fluid=fluid)], trials=0)
    frames[1, 2, 0] = np.nan
    with pytest.raises(BadSeries, match="not finite"):
        insertion([series_of(frames, GAS, fluid=fluid)])
