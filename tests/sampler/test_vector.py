"""Lanes: each operation against NumPy, in every kind that kernels use."""

import numba
import numpy as np
import pytest

from sampler import vector
from sampler.vector import (
    LANES,
    broad,
    gather,
    held,
    interval,
    largest,
    load,
    low_bits,
    real,
    reciprocal,
    square_root,
    store,
    total,
    upper_half,
)

RNG = np.random.default_rng(1)


def each(operation, values, kind=None):
    """The operation on all values, eight at a time, compiled afresh."""
    inner = numba.njit(operation)

    @numba.njit
    def run(values, out):
        for at in range(0, values.size, 8):
            store(out, at, inner(load(values, at)))

    out = np.empty(values.size, kind or values.dtype)
    run(values, out)
    return out


@pytest.mark.parametrize("native", [True, False])
def test_whole_numbers_of_64_bits_become_real_with_and_without_an_instruction_for_it(native, monkeypatch):
    monkeypatch.setattr(vector, "_CONVERTS_LONG", native)
    values = RNG.integers(-(2**63), 2**63 - 1, 800)
    values[:4] = 0, -1, 2**63 - 1, -(2**63)
    found = each(lambda x: real(x), values, np.float64)
    # the lower 12 bits may be dropped
    assert np.abs(found - values.astype(float)).max() <= 2**12
    assert np.array_equal(np.sign(found[4:]), np.sign(values[4:]))


def test_whole_numbers_of_32_bits_become_real():
    values = RNG.integers(-(2**31), 2**31, 800).astype(np.int32)
    assert np.array_equal(each(lambda x: real(x), values, np.float32), values.astype(np.float32))


@pytest.mark.parametrize(("kind", "bound"), [(np.float64, 5e-14), (np.float32, 1.2e-7)])
def test_reciprocal_and_square_root(kind, bound):
    # float64: the square of the float32 quotient's error, 2 x 2^-24; float32: one rounding
    values = np.exp(RNG.uniform(-12, 12, 800)).astype(kind)
    exact = values.astype(np.longdouble)
    assert np.abs(each(lambda x: reciprocal(x), values) * exact - 1).max() < bound
    assert np.abs(each(lambda x: square_root(x), values) / np.sqrt(exact) - 1).max() < 1.2e-7


def test_positions_wrap_where_they_pass_the_box():
    shares = np.concatenate([RNG.uniform(-1.9, 1.9, 792), [0.0, 1.0, -1.0, 0.5, -0.5, 1.5, 2.0**-50, -(2.0**-50)]])
    found = each(lambda x: low_bits(x), shares * 2.0**50, np.int64)
    wrapped = shares - np.floor(shares + 0.5)
    apart = found.astype(float) / 2.0**64 - wrapped
    assert np.abs(apart - np.round(apart)).max() < 2.0**-50
    assert np.array_equal(each(lambda x: upper_half(x), found, np.int32), (found >> 32).astype(np.int32))


def test_sums_and_largest_take_all_lanes():
    values = RNG.normal(size=LANES)

    @numba.njit
    def run(values):
        return total(load(values, 0)), largest(load(values, 0))

    assert run(values) == (pytest.approx(values.sum(), abs=1e-15), values.max())


@pytest.mark.parametrize("kind", [np.float64, np.float32])
def test_tables_are_read_lane_by_lane(kind):
    values = np.exp(RNG.uniform(-3, 3, 800)).astype(kind)
    table = RNG.normal(size=64).astype(kind)

    def look_up(x):
        number, beyond = interval(x)
        return gather(table, held(number - 0, 5, 40)) + 0.0 * beyond

    bits = values.view(f"i{values.itemsize}") >> (np.finfo(kind).nmant - vector.OCTAVE_BITS[8 * values.itemsize])
    assert np.array_equal(each(look_up, values), table[np.clip(bits, 5, 40)])
    ends = (bits << (np.finfo(kind).nmant - vector.OCTAVE_BITS[8 * values.itemsize])).view(kind)
    assert np.array_equal(each(lambda x: interval(x)[1], values), values - ends)


def test_numbers_are_widened():
    values = RNG.normal(size=80).astype(np.float32)
    assert np.array_equal(each(lambda x: broad(x), values, np.float64), values.astype(np.float64))
