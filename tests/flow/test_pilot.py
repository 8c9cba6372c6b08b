"""Pilots: short runs at chosen states, the same for any number of workers, that write nothing."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import canonry.pilot
from canonry.pilot import ENOUGH, Pilot, pilot
from canonry.study import Study, load
from estimators.gamma import scatter
from sampler.errors import BadRequest, DivergedRun
from sampler.fluid import State
from sampler.ladder import chains, sample
from sampler.ladder import load as load_series
from sampler.protocol import Protocol
from sampler.series import Series

STUDY = """
[fluid]
potential = "lennard-jones"
cutoff = 2.0
truncation = "shifted"
[state]
density = 0.7
temperatures = [1.2, 1.4]
particles = 64
[sampling]
seed = 5
scheme = "obabo"
time_step = 0.004
friction = 3.0
record_every = 20
repeats = 2
"""
STATES = (State(1.4, 0.7, 64), State(1.3, 0.65, 80))  # the latter not of the study
COLUMNS = ("energy", "virial", "kinetic", "laplacian", "force_square")
PARTICLE_STEPS = 640_000


@pytest.fixture
def study(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Study:
    monkeypatch.chdir(tmp_path)
    Path("study.toml").write_text(STUDY)
    return load("study.toml")


def test_pilots_are_the_same_for_any_number_of_workers(study: Study) -> None:
    alone, crowded = (pilot(study, STATES, particle_steps=PARTICLE_STEPS, workers=n) for n in (1, 5))
    assert list(alone) == list(crowded) == list(STATES)
    for state in STATES:
        for name in COLUMNS:
            assert np.array_equal(alone[state].series.column(name), crowded[state].series.column(name))


def test_a_pilot_is_sampled_as_the_study_would_be(study: Study, tmp_path: Path) -> None:
    """The same samples as from a study of these few steps, settled a fifth of them, by way of files."""
    state = STATES[1]
    found = pilot(study, STATES, particle_steps=PARTICLE_STEPS, workers=2)[state].series
    kept = by_way_of_files(study, state, tmp_path / "kept", steps=PARTICLE_STEPS // state.particles)
    assert found.interval == kept.interval == pytest.approx(0.08)
    assert (found.fluid, found.state, found.bath) == (kept.fluid, kept.state, True)
    assert 200 <= len(found) <= len(kept) == 400
    assert np.array_equal(found.column("energy"), kept.column("energy")[-len(found) :])


def by_way_of_files(study: Study, state: State, directory: Path, *, steps: int) -> Series:
    settling = PARTICLE_STEPS // state.particles // 5
    protocol = Protocol(
        seed=5, time_step=0.004, friction=3.0, scheme="obabo", record_every=20, equilibration=settling, steps=steps,
        frame_every=settling,
    )  # fmt: skip
    (chain,) = chains(directory, study.fluid, [state], protocol)
    sample([(chain, list(range(len(chain.segments))))])
    return load_series(chain)


def test_a_pilot_goes_on_as_one_run(study: Study, monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """The lists are made afresh between stretches, not so in a file's segment: rounding differs then, and grows.

    The noise is the same throughout, and what is conserved goes on from stretch to stretch.
    """
    monkeypatch.setattr(canonry.pilot, "ENOUGH", 10_000)
    most = 7 * PARTICLE_STEPS // 2
    found = pilot(study, STATES, particle_steps=PARTICLE_STEPS, most=most, workers=2)[STATES[1]].series
    kept = by_way_of_files(study, STATES[1], tmp_path / "kept", steps=3 * PARTICLE_STEPS // 80)
    assert 400 < len(found) <= len(kept) == 1200
    first = len(kept) - len(found)
    for samples, tolerance in ((slice(first, 400), 0.0), (slice(400, 405), 1e-3)):
        own = found.column("energy")[samples.start - first : samples.stop - first]
        assert own == pytest.approx(kept.column("energy")[samples], abs=tolerance, rel=0.0)
    assert found.bath_temperature is not None
    assert kept.bath_temperature is not None
    assert found.bath_temperature == pytest.approx(kept.bath_temperature[first:], rel=1e-6)
    conserved = found.column("sampled_energy") + found.column("kinetic") + found.column("ledger")
    # it scatters by rounding and the time step alone; a start from elsewhere would show as tens of these
    assert np.max(np.abs(np.diff(conserved))) < 10.0 * np.std(np.diff(conserved)[: 399 - first])


@pytest.mark.parametrize("workers", [1, 3])
def test_a_pilot_goes_on_until_it_has_enough_independent_samples(study: Study, workers: int) -> None:
    """Each by its own: the dilute fluid forgets slowly, the liquid does so fast."""
    slow, fast = State(1.6, 0.3, 64), STATES[0]
    found = pilot(study, [slow, fast], particle_steps=PARTICLE_STEPS, most=20 * PARTICLE_STEPS, workers=workers)
    assert len(found[fast].series) <= 500
    energies = found[slow].series.column("sampled_energy")
    assert 500 < len(energies) < 10_000
    assert scatter([energies]).steady_samples >= ENOUGH
    assert scatter([energies[:-500]]).steady_samples < ENOUGH


def test_a_pilot_writes_nothing_and_knows_its_cost(study: Study) -> None:
    found = pilot(study, STATES[:1], particle_steps=1, workers=2)[STATES[0]]
    assert [path.name for path in Path().iterdir()] == ["study.toml"]
    assert len(found.series) == 5  # to settle one record interval, however little is asked for
    assert 0.0 < found.seconds_per_step < 1.0


@pytest.mark.parametrize(("workers", "runs"), [(1, 2), (2, 2), (5, 5)])
def test_a_step_is_timed_with_all_workers_busy(
    study: Study, monkeypatch: pytest.MonkeyPatch, workers: int, runs: int
) -> None:
    run, made = canonry.pilot._run, []
    monkeypatch.setattr(canonry.pilot, "_run", lambda chain, most: made.append(chain) or run(chain, most))
    assert len(pilot(study, STATES, particle_steps=6400, workers=workers)) == 2
    assert len(made) == runs


def test_what_is_not_settled_is_left_out(study: Study, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("estimators.settle.settled_start", lambda values: len(values) // 4)
    (found,) = pilot(study, STATES[:1], particle_steps=PARTICLE_STEPS, workers=1).values()
    assert len(found.series) == 500 - 125


def test_the_seed_matters(study: Study) -> None:
    other = replace(study, sampling=replace(study.sampling, seed=6))
    first, second = (pilot(each, STATES[:1], particle_steps=6400, workers=1)[STATES[0]] for each in (study, other))
    assert isinstance(first, Pilot)
    assert not np.array_equal(first.series.column("energy"), second.series.column("energy"))


def test_records_are_not_too_far_apart(study: Study) -> None:
    rare = replace(study, sampling=replace(study.sampling, record_every=500, frame_every=500))
    (found,) = pilot(rare, STATES[:1], particle_steps=PARTICLE_STEPS, workers=1).values()
    assert found.series.interval == pytest.approx(100 * 0.004)


def test_nothing_asked_for_is_nothing(study: Study) -> None:
    assert pilot(study, [], particle_steps=6400, workers=2) == {}


def test_states_that_cannot_be_sampled_are_refused(study: Study) -> None:
    with pytest.raises(BadRequest, match="beyond half the box"):
        pilot(study, [State(1.4, 0.7, 20)], particle_steps=6400, workers=1)
    wild = replace(study, sampling=replace(study.sampling, time_step=0.1))
    with pytest.raises(DivergedRun, match="flew apart"):
        pilot(wild, STATES[:1], particle_steps=PARTICLE_STEPS, workers=1)
