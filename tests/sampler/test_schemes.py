"""Schemes: each step as written, energy kept to the order of the scheme, the ledger balanced, equipartition."""

import numpy as np
import pytest

from estimators.estimate import mean
from sampler.fluid import Fluid, State
from sampler.forces import evaluate
from sampler.noise import chain_key, normals
from sampler.pairs import pair_function
from sampler.protocol import SUBSTEPS
from sampler.schemes import DIVERGED, DONE, STOPPED, propagate, substeps
from sampler.slots import Skins, exact_forces, label_order, renewed, slots_of
from sampler.start import first_positions, first_velocities
from sampler.store import COLUMNS

SKINS = Skins(0.2, 0.9)


class Trajectory:
    """A small system advanced by the compiled loop."""

    def __init__(
        self, fluid, state, scheme, *, time_step, friction=1.0, repeat=0, start=None, short=False, skins=SKINS
    ):
        self.fluid, self.state, self.step, self.short, self.skins = fluid, state, 0, short, skins
        self.key = chain_key(11, state.temperature, state.density, repeat)
        if start is None:
            self.where, self.velocity = first_positions(fluid, state, self.key), first_velocities(state, self.key)
        else:
            self.where, self.velocity = start.where.copy(), start.velocity.copy()
        self.steps = substeps(scheme, time_step=time_step, friction=friction, temperature=state.temperature)
        self.ledger, self.stop = np.zeros(2), np.zeros(1, np.uint8)

    def run(self, n_steps, every=1, frame_every=None):
        samples = np.empty((n_steps // every, len(COLUMNS)))
        frames = np.empty((n_steps // frame_every if frame_every else 0, self.state.particles, 3))
        self.outcome, _ = propagate(
            pair_function(self.fluid), self.fluid.sampled_weights, self.where, self.velocity, self.state.box,
            self.skins, self.steps, self.short,
            self.key, self.step, n_steps, every, frame_every or 10**9, samples, frames, self.ledger, self.stop,
        )  # fmt: skip
        self.step += n_steps
        totals = self.fluid.totals(samples, self.state)
        self.sums = samples[:, :4]
        self.heat, self.parts, self.momentum = samples[:, 6], samples[:, 7:10], samples[:, 10:13]
        self.kinetic, self.rejected, self.kicks = self.parts.sum(axis=1), samples[:, 13], samples[:, 14]
        self.conserved = (self.kinetic + totals.sampled_energy + self.heat) / self.state.particles
        self.frames = frames
        return self


def settled(fluid, state, *, steps=4000):
    return Trajectory(fluid, state, "baoab", time_step=0.004).run(steps)


@pytest.mark.parametrize(
    ("scheme", "short"), [("baoab", False), ("baoab", True), ("obabo", False), ("velocity-verlet", False)]
)
def test_steps_are_those_of_a_plain_evaluation(scheme, short):
    fluid, state = Fluid(cutoff=2.5, truncation="force-shifted"), State(1.2, 0.7, 108)
    n, dt, friction = state.particles, 0.005, 1.5
    compiled = Trajectory(fluid, state, scheme, time_step=dt, friction=friction, short=short)
    x, v, heat, kicks = compiled.where.copy(), compiled.velocity.copy(), 0.0, 0.0
    compiled.run(30, every=30 if short else 1)
    letters = SUBSTEPS[scheme]
    force, _ = evaluate(fluid, x, box=state.box)
    for step in range(1, 31):
        for s, letter in enumerate(letters):
            part = dt / letters.count(letter)
            if letter == "A":
                x = x + part * v
                force, _ = evaluate(fluid, x, box=state.box)
            elif letter == "B":
                v = v + part * force
            else:
                noise = np.empty((3, n))
                normals(*compiled.key, np.uint64(step), np.uint64(s), np.arange(n), noise)
                kept = np.exp(-friction * part)
                kick = np.sqrt((1 - kept**2) * state.temperature) * noise.T
                new = kept * v + kick
                kicks += 0.5 * (kick * kick).sum()
                heat += 0.5 * ((v * v).sum() - (new * new).sum())
                v = new
    # rounding of 1e-14 in positions grows by chaos: e^(30 steps x 0.005 x ~5) is far below 1e4;
    # float32: forces of size 100 are off by 1e-6 of them, 30 kicks of 0.005 add up to 1e-5 at most
    bound = 2e-5 if short else 1e-10
    apart = x - compiled.where
    assert np.abs(apart - state.box * np.round(apart / state.box)).max() < bound
    assert np.abs(v - compiled.velocity).max() < bound
    assert (np.abs(v - compiled.velocity).max() > 1e-8) == short  # float32 it is
    assert compiled.ledger[0] == pytest.approx(heat, abs=n * bound)
    assert compiled.kicks.sum() == pytest.approx(kicks, rel=1e-9)
    assert compiled.parts[-1] == pytest.approx(0.5 * (v * v).sum(axis=0), rel=bound)
    assert compiled.momentum[-1] == pytest.approx(v.sum(axis=0), abs=n * bound)


def test_constant_energy_scatter_falls_with_the_square_of_the_time_step():
    fluid, state = Fluid(cutoff=2.5, truncation="force-shifted"), State(1.0, 0.8, 108)
    start = settled(fluid, state)
    start.velocity -= start.velocity.mean(axis=0)
    scatter = {}
    for dt in (0.001, 0.002, 0.004):
        run = Trajectory(fluid, state, "velocity-verlet", time_step=dt, start=start).run(round(40 / dt), every=5)
        scatter[dt] = run.conserved.std()
        slope, error = slope_per_time(run.conserved, 5 * dt)
        assert abs(slope) < 4 * error + 1e-8  # no drift
        assert np.abs(run.velocity.mean(axis=0)).max() < 1e-13
    # exponents between neighbours; a scheme of first order gives 1
    exponents = [np.log2(scatter[2 * dt] / scatter[dt]) for dt in (0.001, 0.002)]
    assert exponents == pytest.approx([2, 2], abs=0.25)
    assert scatter[0.004] < 2e-3


def slope_per_time(values, interval):
    """Slope of a straight line through block means, and its standard error from their scatter."""
    blocks = values[: len(values) // 20 * 20].reshape(20, -1).mean(axis=1)
    time = (np.arange(20) + 0.5) * (len(values) // 20) * interval
    (slope, _), covariance = np.polyfit(time, blocks, 1, cov=True)
    return slope, np.sqrt(covariance[0, 0])


@pytest.mark.parametrize(("scheme", "short"), [("baoab", False), ("baoab", True), ("obabo", False)])
def test_ledger_balances_the_heat(scheme, short):
    # Bound: 1e-5 per unit time and particle, and three standard errors, over 320 time units; exchanged heat is
    # some 1.5 friction T = 1.5 per unit time and particle in either direction.
    fluid, state = Fluid(cutoff=2.5), State(1.0, 0.8, 108)
    run = Trajectory(fluid, state, scheme, time_step=0.002, start=settled(fluid, state), short=short)
    slope, error = slope_per_time(run.run(160_000, every=20).conserved, 0.04)
    assert error < 1e-5
    assert abs(slope) < 1e-5 + 3 * error
    assert run.conserved.std() < 2e-3
    assert (run.heat / state.particles).std() > 0.05  # heat does flow


def laplacian(fluid, frames, box):
    """Mean of the sum over particles of the second derivatives of U, from stored frames."""
    sums = []
    for frame in frames:
        i, j = np.triu_indices(len(frame), 1)
        d = frame[i] - frame[j]
        d -= box * np.round(d / box)
        r = np.sqrt((d * d).sum(axis=1))
        sums.append(2 * ((fluid.pair_hypervirial(r) + fluid.pair_virial(r)) / r**2).sum())
    return np.mean(sums)


@pytest.mark.parametrize("scheme", ["baoab", "obabo"])
def test_equipartition_with_the_known_bias(scheme):
    # Harmonic analysis: <v^2> = T (1 - w^2 dt^2/4) in every mode of frequency w for baoab, T exactly for obabo
    # (B. Leimkuhler, C. Matthews, J. Chem. Phys. 138, 174102 (2013); next order below 0.1 % here).
    fluid, state, dt = Fluid(cutoff=2.5, truncation="force-shifted"), State(1.0, 0.8, 108), 0.01
    run = Trajectory(fluid, state, scheme, time_step=dt, start=settled(fluid, state)).run(60_000, 5, 1000)
    kinetic = mean({(1.0, 0.8, 108, 0): run.kinetic})
    freedom = 3 * state.particles
    bias = laplacian(fluid, run.frames, state.box) * dt**2 / 4 / freedom if scheme == "baoab" else 0.0
    expected = 0.5 * freedom * state.temperature * (1 - bias)
    error = kinetic.standard_error
    assert 0.0005 < error / kinetic.value < 0.004
    assert abs(kinetic.value - expected) < 4 * error + 0.001 * expected
    if scheme == "baoab":
        assert bias > 0.005


def test_a_metropolis_test_removes_the_error_of_the_time_step():
    # The velocity Verlet part of obabo shifts the energy by +0.02 at this state and time step 0.012, baoab at 0.004 by
    # -0.0005 (measured, in proportion to the square of the time step).
    fluid, state = Fluid(cutoff=2.5), State(1.5, 0.8442, 108)
    found = {}
    for scheme, dt, steps in (("baoab", 0.004, 240_000), ("obabo", 0.012, 80_000), ("metropolised", 0.012, 120_000)):
        run = Trajectory(fluid, state, scheme, time_step=dt, friction=4.0, start=settled(fluid, state))
        run.run(steps, every=round(0.048 / dt))
        energy = fluid.totals(run.sums, state).energy / state.particles
        found[scheme] = mean({(1.5, 0.8442, 108, 0): energy})
    shift = {scheme: found[scheme] - found["baoab"] for scheme in ("obabo", "metropolised")}
    errors = {scheme: np.hypot(found[scheme].standard_error, found["baoab"].standard_error) for scheme in shift}
    assert max(errors.values()) < 0.0045
    assert shift["obabo"].value > 4 * errors["obabo"]
    assert abs(shift["metropolised"].value) < 4 * errors["metropolised"]


def test_undone_steps_leave_the_particles_where_they_were():
    fluid, state = Fluid(cutoff=2.5, truncation="force-shifted"), State(1.0, 0.8, 108)
    start = settled(fluid, state)
    # a time step that no test passes: positions stay, and velocities are those of the thermostat, turned each time
    run = Trajectory(fluid, state, "metropolised", time_step=0.06, start=start)
    run.run(1)
    assert run.rejected[0] == 1
    apart = run.where - start.where
    assert np.abs(apart - state.box * np.round(apart / state.box)).max() < 1e-12
    _, sums = evaluate(fluid, start.where, box=state.box)
    assert run.sums[0] == pytest.approx(sums, rel=1e-10)
    # at a usual one nearly all pass
    run = Trajectory(fluid, state, "metropolised", time_step=0.005, start=start).run(4000)
    assert 0 < run.rejected.mean() < 0.03
    # 20 time units at friction 1: some 40 independent kinetic energies of relative scatter sqrt(2/3N)
    assert run.kinetic.mean() / (1.5 * 108) == pytest.approx(1.0, abs=5 * np.sqrt(2 / (3 * 108) / 40))


def test_recording_and_frames_do_not_change_the_trajectory():
    fluid, state = Fluid(cutoff=2.5), State(1.0, 0.8, 108)
    quiet = Trajectory(fluid, state, "baoab", time_step=0.005).run(200, every=200)
    busy = Trajectory(fluid, state, "baoab", time_step=0.005).run(200, every=1, frame_every=10)
    assert np.abs(quiet.where - busy.where).max() < 1e-9
    assert busy.frames.shape == (20, 108, 3)
    assert np.array_equal(busy.frames[-1], busy.where)
    assert 0 <= busy.frames.min() < busy.frames.max() < state.box


def test_stop_and_divergence_are_reported():
    fluid, state = Fluid(cutoff=2.5), State(1.0, 0.8, 108)
    run = Trajectory(fluid, state, "baoab", time_step=0.005)
    run.stop[0] = 1
    assert run.run(1000).outcome == STOPPED
    assert Trajectory(fluid, state, "baoab", time_step=0.005).run(10).outcome == DONE
    assert Trajectory(fluid, state, "baoab", time_step=0.3).run(1000).outcome == DIVERGED


@pytest.mark.parametrize(
    ("state", "skins", "short"),
    [
        (State(1.0, 0.8, 500), SKINS, False),
        (State(1.0, 0.8, 500), SKINS, True),
        (State(8.0, 0.6, 300), Skins(0.1, 0.4), True),
        (State(2.0, 0.05, 400), Skins(0.3, 1.2), True),
        (State(1.2, 0.7, 70), Skins(0.4, 3.0), False),
    ],
)
def test_lists_miss_no_pair_on_a_long_way(state, skins, short):
    fluid = Fluid(cutoff=2.2)
    run = Trajectory(fluid, state, "baoab", time_step=0.004, friction=0.5, short=short, skins=skins)
    run.run(3000, every=5, frame_every=5)
    for frame, sums in zip(run.frames[::7], run.sums[::7], strict=True):
        _, expected = evaluate(fluid, frame, box=state.box)
        # the number of pairs is exact; the sums differ by the rounding of wrapped positions
        assert sums[:3] == pytest.approx(expected[:3], rel=1e-10)


def test_groups_are_made_anew_when_particles_of_two_that_were_apart_meet():
    # two clusters of eight, one group each, just out of reach of one another; then one particle of each moves
    fluid, box, skins = Fluid(cutoff=2.0), 30.0, Skins(0.2, 1.0)
    corners = np.stack(np.meshgrid(*[[0.0, 1.2]] * 3, indexing="ij"), axis=-1).reshape(-1, 3) + 5.0
    where = np.concatenate([corners, corners + np.array([1.2 + 3.1, 0.0, 0.0])])
    slots = slots_of(where, np.zeros_like(where), box, fluid.cutoff, skins)
    place = {label: 24 * (slot // 8) + slot % 8 for slot, label in enumerate(slots.groups.labels) if label >= 0}
    assert slots.groups.start[-1] == 0  # no group meets another
    for moved in (0.3, 0.65):  # 2 x 0.3 stays within the skin of 0.8 between the lists, 2 x 0.65 does not
        for label, direction in ((4, 1), (8, -1)):
            slots.position[place[label]] = where[label, 0] + direction * moved
        slots = renewed(slots, np.empty_like(where), np.empty_like(where), box, fluid.cutoff, skins)
        sums, now = np.empty(5), np.empty_like(where)
        exact_forces(pair_function(fluid), slots, box, sums)
        label_order(slots, now, np.empty_like(where))
        _, expected = evaluate(fluid, now, box=box)
        assert sums[2] == expected[2]
    assert np.linalg.norm(now[8] - now[4]) == pytest.approx(3.1 - 1.3)


def test_forces_in_float32_shift_no_average():
    # Windows of half a time unit from common starts with common noise: trajectories have not parted yet, so that the
    # difference of means is seen to 1e-7; it has had time to build up, as energies forget within 0.3 time units.
    fluid, state = Fluid(cutoff=3.0), State(1.0, 0.8, 256)
    exact, differences = settled(fluid, state), []
    exact.steps = substeps("baoab", time_step=0.005, friction=2.0, temperature=1.0)
    for _ in range(40):
        mixed = Trajectory(fluid, state, "baoab", time_step=0.005, friction=2.0, start=exact, short=True)
        mixed.step = exact.step
        exact.run(100, every=10), mixed.run(100, every=10)
        last = (fluid.totals(run.sums[-1:], state) for run in (mixed, exact))
        u, w = np.transpose([(each.energy[0] / 256, each.virial[0] / 256) for each in last])
        differences.append((u[0] - u[1], 0.8 * (w[0] - w[1])))
    mean, error = np.mean(differences, axis=0), np.std(differences, axis=0) / np.sqrt(40)
    assert (error < [2e-7, 1e-6]).all()
    assert (np.abs(mean) < [3e-6, 1.5e-5]).all()
    assert (np.abs(mean) > 0).all()
