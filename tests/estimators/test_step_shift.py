"""The shift of the time step: harmonic forces, where it is known exactly, and a liquid sampled at two time steps."""

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from estimators.canonical import rung_properties
from estimators.errors import BadSeries
from estimators.step_shift import longest_step, step_shift
from sampler.fluid import Fluid, State
from sampler.ladder import chains, load, sample
from sampler.protocol import Protocol
from sampler.series import Series

N, T, K = 40, 0.8, 250.0
STATE = State(T, 0.5, N)


def oscillators(repeat: int = 0, n: int = 4000, laplacian: float = 3 * N * K) -> Series:
    """Independent oscillators of one frequency, exact samples; the virial of springs is -2/3 of their energy."""
    places = np.random.default_rng(repeat).normal(0.0, math.sqrt(T / K), (n, 3 * N))
    energy = 0.5 * K * np.sum(places**2, axis=1)
    columns = {
        "energy": energy + 7.0,
        "sampled_energy": energy,
        "virial": -2.0 / 3.0 * energy,
        "laplacian": np.full(n, laplacian),
        "force_square": K**2 * np.sum(places**2, axis=1),
    }
    absent = dict.fromkeys(("hypervirial", "kinetic", "ledger"))
    return Series(Fluid(), STATE, repeat, True, 1.0, **columns, **absent, frames=np.empty((0, N, 3)), frame_stride=1)


def test_harmonic_forces_under_obabo() -> None:
    # <x^2> = T/(K (1 - K h^2/4)) at any friction: to order h^2, u = 3T/2 is shifted by 3T/2 K h^2/4
    found = step_shift([oscillators(0), oscillators(1)], time_step=0.01, scheme="obabo")
    exact = 1.5 * T * K * 0.01**2 / 4.0
    for name, size in (("residual_energy", 1.0), ("pressure", -2.0 / 3.0 * STATE.density)):
        shift = found[name]
        assert abs(shift.value - size * exact) < 4.5 * shift.standard_error
        assert shift.standard_error < 0.03 * abs(size * exact)  # sqrt(2/8000) = 1.6 % for a variance


def test_harmonic_forces_under_baoab_are_not_shifted_at_all() -> None:
    found = step_shift([oscillators()], time_step=0.01, scheme="baoab")
    # an identity of each sample, so nothing but rounding of numbers of size 1e4
    assert all(abs(shift.value) < 1e-14 for shift in found.values())


def test_shifts_grow_with_the_square_of_the_time_step() -> None:
    small, large = (step_shift([oscillators()], time_step=h, scheme="obabo")["pressure"].value for h in (0.002, 0.006))
    assert large / small == pytest.approx(9.0, rel=1e-9)


def test_the_longest_step_is_a_share_of_the_oscillation() -> None:
    assert longest_step([oscillators()]) == pytest.approx(0.3 / math.sqrt(K), rel=1e-12)
    assert longest_step([oscillators(laplacian=4.0 * 3 * N * K)]) == pytest.approx(0.15 / math.sqrt(K), rel=1e-12)


def test_the_longest_step_is_shorter_where_few_meet_hard() -> None:
    """A Laplacian that is 0 or, in 1 of 100 samples, L: variance over mean is 0.99 L."""
    series = replace(oscillators(), laplacian=np.tile(np.r_[np.zeros(99), 5000.0], 40))
    assert longest_step([series]) == pytest.approx(0.25 / math.sqrt(0.99 * 5000.0), rel=1e-9)


def test_what_cannot_be_told_is_refused() -> None:
    with pytest.raises(BadSeries, match=r"'velocity-verlet'; what is known is that of baoab and obabo"):
        step_shift([oscillators()], time_step=0.01, scheme="velocity-verlet")
    for refused in (lambda: step_shift([], time_step=0.01, scheme="obabo"), lambda: longest_step([])):
        with pytest.raises(BadSeries, match="no series given"):
            refused()


@pytest.fixture(scope="module")
def liquid(tmp_path_factory: pytest.TempPathFactory) -> dict[tuple[str, float], list[Series]]:
    """Two repeats each under both schemes and at two time steps, 2.4e7 particle-steps each."""
    state, fluid = State(1.5, 0.8442, 64), Fluid(cutoff=2.0)
    found = {}
    for scheme, time_step, seed in (("obabo", 0.005, 1), ("obabo", 0.015, 2), ("baoab", 0.015, 3)):
        protocol = Protocol(
            seed=seed, repeats=2, time_step=time_step, friction=2.0, scheme=scheme, equilibration=5000, steps=187_500
        )
        folder: Path = tmp_path_factory.mktemp("liquid")
        work = chains(folder, fluid, [state], protocol)
        sample([(chain, [*range(len(chain.segments))]) for chain in work])
        found[scheme, time_step] = [load(chain) for chain in work]
    return found


@pytest.mark.parametrize(("first", "second"), [("obabo", "obabo"), ("obabo", "baoab")])
def test_shifts_of_a_liquid_are_those_sampled(liquid: dict, first: str, second: str) -> None:
    """Of obabo at time step 0.015, seen from itself at 0.005, and from baoab at 0.015."""
    beside = (second, 0.005 if second == "obabo" else 0.015)
    sampled, other = rung_properties(liquid[first, 0.015]), rung_properties(liquid[beside])
    series = liquid["obabo", 0.005]
    larger = step_shift(series, time_step=0.015, scheme="obabo")
    smaller = step_shift(series, time_step=beside[1], scheme=second)
    for name, smallest in (("residual_energy", 0.02), ("pressure", 0.08)):
        predicted = larger[name] - smaller[name]
        seen = sampled[name].value - other[name].value
        error = math.hypot(sampled[name].standard_error, other[name].standard_error, predicted.standard_error)
        # higher orders add up to 13 % at this time step (see `step_shift`)
        assert -4.0 * error < seen - predicted.value < 4.0 * error + 0.13 * predicted.value
        assert predicted.value > smallest
        assert error < 0.2 * predicted.value
        assert larger[name].standard_error < 0.1 * larger[name].value
