"""Counted pairs against the same in plain numpy, pair by pair, and where compiled kernels are kept."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import numpy.typing as npt
import pytest

from estimators import compiled
from estimators.pairs import BLOCK, pair_counts

Floats = npt.NDArray[np.float64]

ROOT = Path(__file__).parents[2]


def counted(frame: Floats, box: float, width: float, number: int) -> npt.NDArray[np.int64]:
    """From all nearest-image distances in double precision."""
    first, second = np.triu_indices(len(frame), 1)
    apart = frame[first] - frame[second]
    places = (np.linalg.norm(apart - box * np.rint(apart / box), axis=1) / width).astype(int)
    return np.bincount(places[places < number], minlength=number)


@pytest.mark.parametrize("particles", [2, 60, BLOCK + 1, BLOCK + 2, 2 * BLOCK + 300])
def test_counts_are_those_of_a_direct_count(particles: int) -> None:
    """More particles than a block holds, too; positions outside the box count as their images."""
    rng, box = np.random.default_rng(particles), 11.3
    frames = rng.random((3, particles, 3)) * box
    frames[1] += box * rng.integers(-2, 3, (particles, 3))
    counts = pair_counts(frames, box, width=0.02, number=282)
    assert counts.shape == (3, 282)
    np.testing.assert_array_equal(counts, [counted(frame, box, 0.02, 282) for frame in frames])


@pytest.mark.parametrize("width", [0.02, 0.0005])
@pytest.mark.parametrize("beside", [1e-6, 1e-8, 1e-10])
def test_pairs_next_to_an_edge_are_on_their_side_of_it(width: float, beside: float) -> None:
    """One pair within a fraction 1e-6 to 1e-10 of each edge, on either side: single precision knows a distance to 1e-7.

    Pairs lie across the faces of the box, so that a double knows their distance to a few 1e-15: of the narrow bins
    1e-11. There the grid of positions, 3e-9, is what single precision misses by.
    """
    rng, box, number = np.random.default_rng(4), 11.3, 282
    edges = width * np.arange(1, number)
    directions = rng.standard_normal((2, number - 1, 3))
    directions /= np.linalg.norm(directions, axis=2, keepdims=True)
    distances = np.stack([edges * (1.0 - beside), edges * (1.0 + beside)])
    first = rng.random((2, number - 1, 3)) * box
    frames = np.mod(np.stack([first, first + directions * distances[..., None]], axis=2), box)
    below, above = (pair_counts(each, box, width=width, number=number) for each in frames)
    np.testing.assert_array_equal(below, np.eye(number)[:-1])
    np.testing.assert_array_equal(above, np.eye(number)[1:])


def test_no_bin_is_missing_and_none_is_filled_beyond_the_corner_of_the_box() -> None:
    frames = np.array([[[0.0, 0.0, 0.0], [1.0, 1.0, 1.0]], [[0.3, 0.0, 1.9], [0.3, 0.0, 0.1]]])
    counts = pair_counts(frames, 2.0, width=0.5, number=9)
    np.testing.assert_array_equal(counts, [[0, 0, 0, 1, 0, 0, 0, 0, 0], [1, 0, 0, 0, 0, 0, 0, 0, 0]])
    assert pair_counts(frames[:0], 2.0, width=0.5, number=9).shape == (0, 9)


def test_kernels_are_kept_in_the_users_cache_folder_and_found_there(tmp_path: Path) -> None:
    """A second process loads what the first compiled; nothing is written beside the sources."""
    code = (
        "import numpy as np; from estimators import pairs, compiled; before = compiled.is_cached();"
        "pairs.pair_counts(np.zeros((1, 3, 3)), 2.0, width=0.1, number=10);"
        "print(compiled.cache_folder(), before, compiled.is_cached(), *pairs._add_pairs.stats.cache_hits.values())"
    )
    folders = {name: str(tmp_path) for name in ("HOME", "XDG_CACHE_HOME")}
    environment = {**os.environ, **folders, "PYTHONPATH": str(ROOT), "NUMBA_CACHE_DIR": str(tmp_path / "elsewhere")}
    command = [sys.executable, "-c", code]
    said = [
        subprocess.run(command, env=environment, capture_output=True, text=True, check=True).stdout.split()
        for _ in range(2)
    ]
    folder, *compiling = said[0]
    assert compiling == ["False", "True"]
    assert said[1] == [folder, "True", "True", "1"]
    assert tmp_path in Path(folder).parents
    assert Path(folder).name == compiled.cache_folder().name
    assert not (tmp_path / "elsewhere").exists()
