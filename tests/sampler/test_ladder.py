"""Ladders on disk: whatever happened on the way, the samples are those of one uninterrupted run."""

import time
from dataclasses import replace

import numpy as np
import pytest

from sampler.errors import DamagedSegment, DivergedRun, ForeignDirectory
from sampler.fluid import Fluid, State
from sampler.ladder import chains, load, sample, unfinished
from sampler.protocol import Protocol
from sampler.store import read

FLUID = Fluid(cutoff=2.0)
STATES = (State(1.0, 0.7, 64), State(1.3, 0.7, 64))
# settling of one segment, sampling of three and a short one
PROTOCOL = Protocol(seed=5, equilibration=900, steps=2800, record_every=10, frame_every=100, repeats=2)


@pytest.fixture(autouse=True)
def _short_segments(monkeypatch):
    monkeypatch.setattr("sampler.protocol._SEGMENT", 64 * 800)


def sampled(folder, states=STATES, protocol=PROTOCOL, **options):
    every = chains(folder, FLUID, states, protocol)
    sample([(chain, unfinished(chain)[0]) for chain in every], **options)
    return [load(chain) for chain in every]


def assert_same(first, second):
    assert len(first) == len(second) > 0
    for one, other in zip(first, second, strict=True):
        for name in ("energy", "virial", "hypervirial", "kinetic", "ledger", "frames", "bath_temperature"):
            assert np.array_equal(getattr(one, name), getattr(other, name)), name
        assert (one.state, one.repeat) == (other.state, other.repeat)


@pytest.fixture(scope="module")
def uninterrupted(tmp_path_factory):
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr("sampler.protocol._SEGMENT", 64 * 800)
        return sampled(tmp_path_factory.mktemp("uninterrupted"))


def test_series_hold_what_was_asked_for(uninterrupted):
    assert [(each.state, each.repeat) for each in uninterrupted] == [(s, r) for s in STATES for r in (0, 1)]
    for each in uninterrupted:
        assert len(each) == 280
        assert each.frames.shape == (28, 64, 3)
        assert each.frame_stride == 10
        assert each.interval == pytest.approx(0.05)
        noise = (2 / (3 * 64 * 2800)) ** 0.5  # 280 samples of 10 kicks a particle and direction
        assert each.bath_temperature.mean() == pytest.approx(each.state.temperature, rel=5 * noise)
    starts = [each.energy[0] for each in uninterrupted]
    assert len(set(starts)) == 4


def test_number_of_workers_does_not_matter(tmp_path, uninterrupted):
    assert_same(sampled(tmp_path, workers=1), uninterrupted)
    assert_same(sampled(tmp_path / "three", workers=3), uninterrupted)


def test_extension_equals_one_long_run(tmp_path, uninterrupted):
    short = replace(PROTOCOL, steps=1300, repeats=1)
    first = sampled(tmp_path, STATES[1:], short)
    assert np.array_equal(first[0].energy, uninterrupted[2].energy[:130])
    assert_same(sampled(tmp_path), uninterrupted)


def test_interrupt_leaves_a_directory_that_resumes(tmp_path, uninterrupted):
    def interrupt(progress):
        if progress.steps_done > 900:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        sampled(tmp_path, watch=interrupt)
    kept = sorted(tmp_path.rglob("segment-*.h5"))
    assert 0 < len(kept) < 20
    assert not [path for path in tmp_path.rglob("*") if path.name.startswith(".")]
    stamps = [path.stat().st_mtime_ns for path in kept]
    assert_same(sampled(tmp_path), uninterrupted)
    assert [path.stat().st_mtime_ns for path in kept] == stamps


@pytest.mark.parametrize("harm", ["truncated", "flipped", "emptied"])
def test_damaged_segment_is_set_aside_and_sampled_again(tmp_path, uninterrupted, harm):
    sampled(tmp_path)
    every = chains(tmp_path, FLUID, STATES, PROTOCOL)
    path = every[0].path(2)
    whole = bytearray(path.read_bytes())
    if harm == "truncated":
        path.write_bytes(whole[: len(whole) // 2])
    elif harm == "flipped":
        at = whole.find(np.float64(load(every[0]).frames[10, 3, 1]).tobytes())
        whole[at + 6] ^= 1
        path.write_bytes(whole)
    else:
        path.write_bytes(b"")
    with pytest.raises(DamagedSegment, match="segment-000002"):
        read(path, every[0].identity)
    missing, aside = unfinished(every[0])
    assert missing == [2]
    assert [each.name for each in aside] == ["segment-000002.h5.damaged-1"]
    assert aside[0].exists()
    assert len(load(every[0])) < 280
    assert_same(sampled(tmp_path), uninterrupted)


def test_nothing_is_left_to_do(tmp_path):
    sampled(tmp_path)
    seen = []
    sampled(tmp_path, watch=seen.append)
    assert seen == []


@pytest.mark.parametrize(
    ("change", "key"),
    [
        ({"seed": 6}, "seed"),
        ({"time_step": 0.004}, "time_step"),
        ({"scheme": "obabo"}, "scheme"),
        ({"friction": 1.0}, "friction"),
    ],
)
def test_samples_of_another_study_are_refused(tmp_path, change, key):
    sampled(tmp_path, STATES[:1])
    with pytest.raises(ForeignDirectory, match=f"sampled with {key} "):
        sampled(tmp_path, STATES[:1], replace(PROTOCOL, **change))


def test_samples_of_a_version_that_recorded_other_things_are_refused(tmp_path, monkeypatch):
    sampled(tmp_path, STATES[:1])
    monkeypatch.setattr("sampler.store.COLUMNS", ("s12", "s6"))
    with pytest.raises(ForeignDirectory, match=r"was sampled with recorded 's12 s6 pairs .*, asked for is 's12 s6'"):
        sampled(tmp_path, STATES[:1])


def test_other_rungs_are_finished_when_one_flies_apart(tmp_path, monkeypatch):
    from sampler import rung

    def explode(fluid, state, key):
        where = first_positions(fluid, state, key)
        if state == STATES[0]:
            where[1] = where[0] + 1e-3
        return where

    first_positions = rung.first_positions
    monkeypatch.setattr(rung, "first_positions", explode)
    with pytest.raises(DivergedRun, match=r"temperature 1, density 0.7, repeat 0 flew apart .* time_step"):
        sampled(tmp_path, protocol=replace(PROTOCOL, repeats=1))
    assert len(load(chains(tmp_path, FLUID, STATES[1:], PROTOCOL)[0])) == 280


@pytest.mark.filterwarnings("error")
@pytest.mark.parametrize("workers", [1, 2])
def test_a_refused_write_ends_the_run_and_what_was_written_is_kept(tmp_path, monkeypatch, uninterrupted, workers):
    from sampler import ladder

    written = []

    def refuse(path, segment, identity):
        if len(written) == 5:
            time.sleep(0.2)  # the next segment of this repeat is sampled by now, and waits
            raise OSError(28, "No space left on device")
        written.append(path)
        write(path, segment, identity)

    write = ladder.write
    monkeypatch.setattr(ladder, "write", refuse)
    reported = []
    with pytest.raises(OSError, match="No space left"):
        sampled(tmp_path, workers=workers, watch=reported.append)
    assert sorted(tmp_path.rglob("*.h5")) == sorted(written)
    assert len(reported) == 5
    monkeypatch.undo()
    monkeypatch.setattr("sampler.protocol._SEGMENT", 64 * 800)
    assert_same(sampled(tmp_path), uninterrupted)


def test_without_a_bath_momentum_is_zero_and_energy_is_kept(tmp_path):
    protocol = replace(PROTOCOL, scheme="velocity-verlet", time_step=0.002, repeats=1)
    (series,) = sampled(tmp_path, STATES[:1], protocol)
    assert not series.bath
    assert series.kinetic_freedom == 3 * 64 - 3
    last = read(
        chains(tmp_path, FLUID, STATES[:1], protocol)[0].path(4),
        chains(tmp_path, FLUID, STATES[:1], protocol)[0].identity,
    )
    assert np.abs(last.velocities.mean(axis=0)).max() < 1e-14
    assert np.ptp(series.ledger) == 0
    assert (series.kinetic + series.sampled_energy).std() / 64 < 1e-3
    assert series.kinetic.std() / 64 > 0.01
