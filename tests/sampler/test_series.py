"""Series cut short at either end: which samples and which frames stay."""

import numpy as np
import pytest

from sampler.fluid import Fluid, State
from sampler.series import Series

COLUMNS = ("energy", "sampled_energy", "virial", "hypervirial", "kinetic", "ledger", "kinetic_parts")


def series(n: int, stride: int) -> Series:
    """Every entry, also every coordinate of a frame, is the number of its sample."""
    numbers = np.arange(float(n))
    frames = np.ones((1, 2, 3)) * numbers[stride - 1 :: stride, None, None]
    columns = dict.fromkeys(COLUMNS, numbers)
    return Series(Fluid(1.0), State(1.0, 0.1, 2), 0, True, 0.05, **columns, frames=frames, frame_stride=stride)


def numbers_of_frames(cut: Series) -> list[float]:
    """By the frames themselves, once it is seen that the samples said to be theirs carry the same numbers."""
    found = list(cut.frames[:, 0, 0])
    assert list(cut.energy[cut.frame_samples]) == found
    return found


@pytest.mark.parametrize("stride", [1, 3, 7, 40])
def test_a_cut_is_made_at_the_sample_and_keeps_every_frame_behind_it(stride: int) -> None:
    whole = series(30, stride)
    for first in range(31):
        for second in range(0, 31 - first, 4):
            cut = whole.after(first).after(second)
            start = first + second
            assert all(list(getattr(cut, name)) == list(range(start, 30)) for name in COLUMNS)
            assert numbers_of_frames(cut) == [k for k in range(stride - 1, 30, stride) if k >= start]


@pytest.mark.parametrize("stride", [1, 3, 7])
def test_each_so_many_samples(stride: int) -> None:
    thin = series(30, 5).every(stride)
    assert all(list(getattr(thin, name)) == list(range(stride - 1, 30, stride)) for name in COLUMNS)
    assert thin.interval == stride * series(30, 5).interval
    assert len(thin.frames) == 0
