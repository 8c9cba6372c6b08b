"""First configurations at every density, and protocols that can be followed."""

import itertools

import numpy as np
import pytest

from sampler.errors import BadRequest
from sampler.fluid import Fluid, State
from sampler.forces import evaluate
from sampler.ladder import chains, load, sample, unfinished
from sampler.noise import chain_key
from sampler.protocol import Protocol
from sampler.start import first_positions, first_velocities


@pytest.mark.parametrize("n", [2, 7, 32, 54, 64, 100, 257, 500])
@pytest.mark.parametrize("density", [0.001, 0.3, 0.95, 1.1])
def test_positions_fill_the_box_without_overlap(n, density):
    state = State(1.0, density, n)
    fluid = Fluid(cutoff=min(2.5, 0.499 * state.box))
    where = first_positions(fluid, state, chain_key(1, 1.0, density, 0))
    assert where.shape == (n, 3)
    assert 0 <= where.min() <= where.max() < state.box
    forces, _ = evaluate(fluid, where, box=state.box)
    assert np.sqrt((forces**2).sum(axis=1)).max() < 200


def test_positions_are_disordered():
    # a crystal of 500 would show its first reflection with the full weight N = 500
    state = State(1.0, 0.95, 500)
    where = first_positions(Fluid(cutoff=2.5), state, chain_key(1, 1.0, 0.95, 0))
    for wave in ([5, 5, 5], [10, 0, 0], [0, 10, 0], [5, 5, -5], [0, 10, 10]):
        phase = np.exp(2j * np.pi * where @ np.array(wave) / state.box)
        assert abs(phase.sum()) ** 2 / 500 < 25


def test_velocities_are_those_of_the_set_temperature():
    state = State(1.7, 0.8, 40_000)
    velocities = first_velocities(state, chain_key(2, 1.7, 0.8, 0))
    # standard error of a variance of n normal numbers: sqrt(2/n)
    assert velocities.var() == pytest.approx(1.7, rel=5 * np.sqrt(2 / velocities.size))


@pytest.mark.parametrize(("density", "n", "cutoff"), [(0.95, 257, 2.5), (0.001, 100, 5.0)])
def test_sampling_survives_extreme_densities(tmp_path, density, n, cutoff):
    state = State(0.9, density, n)
    protocol = Protocol(equilibration=1000, steps=1000, friction=1.0)
    (chain,) = chains(tmp_path, Fluid(cutoff=cutoff), [state], protocol)
    sample([(chain, unfinished(chain)[0])])
    series = load(chain)
    assert len(series) == 100
    # 10 time units at friction 1: some 20 independent kinetic energies of relative scatter sqrt(2/3N)
    assert series.kinetic.mean() / (1.5 * n * 0.9) == pytest.approx(1, abs=5 * np.sqrt(2 / (3 * n) / 10))


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"scheme": "leap"}, "scheme must be one of baoab, obabo, metropolised, velocity-verlet, found 'leap'"),
        ({"time_step": 0.0}, "time_step must be a positive number, found 0.0"),
        ({"friction": float("nan")}, "friction must be a positive number, found nan"),
        ({"repeats": 0}, "repeats must be at least 1, found 0"),
        ({"equilibration": -1}, "equilibration must not be negative, found -1"),
        ({"steps": 105}, r"steps must be a multiple of record_every \(10\)"),
        ({"frame_every": 25}, r"frame_every must be a multiple of record_every \(10\)"),
    ],
)
def test_protocols_that_cannot_be_followed(change, words):
    with pytest.raises(BadRequest, match=words):
        Protocol(**change)


def test_segments_keep_their_bounds_when_a_run_grows():
    short = Protocol(equilibration=1200, steps=30_000, frame_every=500).segments(500)
    long = Protocol(equilibration=1200, steps=90_000, frame_every=500).segments(500)
    assert short[0] == (0, 1500)
    assert short[:-1] == long[: len(short) - 1]
    assert all(last == first for (_, last), (first, _) in itertools.pairwise(long))
    assert long[-1][1] == 91_500
