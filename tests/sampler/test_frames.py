"""Frames evaluated again, against the series they were stored with and against finite differences."""

import pytest

from sampler.fluid import Fluid, State
from sampler.forces import evaluate, evaluate_with_laplacian
from sampler.frames import reevaluate
from sampler.ladder import chains, load, sample
from sampler.protocol import Protocol

STATE = State(1.1, 0.7, 108)


@pytest.fixture(scope="module", params=["corrected", "force-shifted"])
def series(request, tmp_path_factory):
    fluid = Fluid(cutoff=2.5, truncation=request.param)
    protocol = Protocol(equilibration=2000, steps=1000, frame_every=100)
    (chain,) = chains(tmp_path_factory.mktemp("frames"), fluid, [STATE], protocol)
    sample([(chain, list(range(len(chain.segments))))])
    return load(chain)


def test_energies_are_those_recorded_with_the_frames(series):
    sums = reevaluate(series.fluid, series.frames, state=STATE)
    # positions lose 1e-16 of the box when wrapped, which a steep wall makes 1e-13 of the energy
    assert sums.energy == pytest.approx(series.sampled_energy[series.frame_samples], rel=1e-11)


def test_a_change_of_volume_gives_the_virial(series):
    # U_dyn is continuous at the cutoff, so that its derivative is the virial of the forces, and the tail's for a tail
    # that scales with 1/V: -dU/dV V = W of the pairs + U_tail
    sums = reevaluate(series.fluid, series.frames, state=STATE)
    slope = -(sums.stretched - sums.squeezed) / (2 * sums.change)
    energy_tail, virial_tail, _ = series.fluid.tail(STATE.density)
    expected = series.virial[series.frame_samples] + STATE.particles * (energy_tail - virial_tail)
    assert slope == pytest.approx(expected, abs=1e-4 * STATE.particles)


def test_laplacian_is_the_divergence_of_the_force(series):
    frame, step = series.frames[0], 1e-5
    divergence = 0.0
    for i in range(0, STATE.particles):
        for c in range(3):
            sides = []
            for sign in (1, -1):
                moved = frame.copy()
                moved[i, c] += sign * step
                sides.append(evaluate(series.fluid, moved, box=STATE.box)[0][i, c])
            divergence -= (sides[0] - sides[1]) / (2 * step)
    # a pair that passes the cutoff within the step adds the jump of the force over the step's length: seldom, and
    # only where the force jumps; central differences are off by step^2 times the fourth derivative
    found = evaluate_with_laplacian(series.fluid, frame, box=STATE.box)[1][4]
    assert found == pytest.approx(divergence, rel=1e-5)
    sums = reevaluate(series.fluid, series.frames[:1], state=STATE)
    assert sums.laplacian[0] == found
    assert sums.force_square[0] == pytest.approx((evaluate(series.fluid, frame, box=STATE.box)[0] ** 2).sum())
