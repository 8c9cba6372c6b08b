"""Contours: lines and regions of functions whose level sets are known."""

import numpy as np
import pytest

from canonry.contours import lines, regions

X, Y = np.array([0.0, 1.0, 1.5, 3.0]), np.array([0.0, 0.5, 2.0])


def area(polygons):
    """Of all polygons together, each by the shoelace formula."""
    return sum(
        0.5 * abs(float(np.sum(p[:, 0] * np.roll(p[:, 1], -1) - p[:, 1] * np.roll(p[:, 0], -1)))) for p in polygons
    )


def test_lines_of_a_plane_are_straight_whole_and_where_they_belong():
    """x + y = 1.7 enters the rectangle at (0, 1.7) and leaves it at (1.7, 0); values are linear, so lines are exact."""
    (line,) = lines(X, Y, X + Y[:, None], 1.7)
    assert np.allclose(line.sum(axis=1), 1.7, atol=1e-12)
    assert sorted(map(tuple, np.round(line[[0, -1]], 9))) == [(0.0, 1.7), (1.7, 0.0)]
    assert len(lines(X, Y, X + Y[:, None], 5.1)) == 0


def test_regions_of_a_plane_have_its_areas():
    """Of the rectangle 3 x 2, what lies above x + y = c is 6 less a triangle with legs c, for c up to 2."""
    values = X + Y[:, None]
    assert area(regions(X, Y, values, -1.0)) == pytest.approx(6.0, rel=1e-12)
    for level in (0.3, 1.0, 1.7, 2.0):
        assert area(regions(X, Y, values, level)) == pytest.approx(6.0 - 0.5 * level**2, rel=1e-12)
    assert list(regions(X, Y, values, 5.1)) == []


def test_a_hill_has_a_closed_line():
    grid = np.linspace(-1.0, 1.0, 21)
    (line,) = lines(grid, grid, -(grid**2) - grid[:, None] ** 2, -0.25)
    assert np.allclose(line[0], line[-1])
    assert np.allclose(np.linalg.norm(line, axis=1), 0.5, atol=0.005), "chords of steps of 0.1: 0.1^2/(8 * 0.5)"


def test_two_hills_have_a_line_each():
    x = np.linspace(0.0, 4.0, 41)
    values = np.cos(np.pi * x) * np.ones((5, 1))
    assert len(lines(x, np.arange(5.0), values, 0.3)) == 4
    assert area(regions(x, np.arange(5.0), values, 0.0)) == pytest.approx(4 * 2.0, abs=0.02)


def test_a_corner_without_value_leaves_a_triangle():
    values = np.ones((2, 2))
    values[0, 1] = np.nan
    square = np.array([0.0, 1.0])
    assert area(regions(square, square, values, 0.0)) == pytest.approx(0.5)
    values[1, 1] = np.nan
    assert list(regions(square, square, values, 0.0)) == []
    assert lines(square, square, values, 1.0) == []
