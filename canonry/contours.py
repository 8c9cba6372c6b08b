"""Lines and regions of equal value on a rectangular grid, linear along the edges of its cells."""

from __future__ import annotations

from collections.abc import Iterable, Iterator

import numpy as np
import numpy.typing as npt

__all__ = ["lines", "regions"]

Floats = npt.NDArray[np.float64]
Corner = tuple[float, float, float]  # x, y, value
Point = tuple[float, float]

_DIGITS = 6  # by which ends of lines in neighbouring cells are known as one


def regions(x: Floats, y: Floats, values: Floats, level: float) -> Iterator[Floats]:
    """Polygons, each (k, 2), that together cover where values reach the level.

    x : (n,); y : (m,); values : (m, n), not finite where there is none: a cell with one such corner is a triangle
        without it, with two or more it is left out
    """
    for cell in _cells(x, y, values):
        polygon = [point for corners in _edges(cell) for point in _kept(*corners, level)]
        if len(polygon) > 2:
            yield np.array(polygon)


def lines(x: Floats, y: Floats, values: Floats, level: float) -> list[Floats]:
    """Lines, each (k, 2), along which the values are the level; arguments as those of `regions`."""
    pieces: list[list[Point]] = []
    for cell in _cells(x, y, values):
        crossings = [_crossing(*corners, level) for corners in _edges(cell) if _crosses(*corners, level)]
        ends = zip(crossings[::2], crossings[1::2], strict=True)
        pieces += [[start, end] for start, end in ends if not _same(start, end)]
    return [np.array(each) for each in _joined(pieces)]


def _cells(x: Floats, y: Floats, values: Floats) -> Iterator[list[Corner]]:
    """Corners in order of going around, those without a value left out."""
    for i in range(len(y) - 1):
        for j in range(len(x) - 1):
            around = ((i, j), (i, j + 1), (i + 1, j + 1), (i + 1, j))
            cell = [(float(x[b]), float(y[a]), float(values[a, b])) for a, b in around if np.isfinite(values[a, b])]
            if len(cell) > 2:
                yield cell


def _edges(cell: list[Corner]) -> Iterable[tuple[Corner, Corner]]:
    return zip(cell, [*cell[1:], cell[0]], strict=True)


def _crosses(start: Corner, end: Corner, level: float) -> bool:
    return (start[2] >= level) != (end[2] >= level)


def _crossing(start: Corner, end: Corner, level: float) -> Point:
    share = (level - start[2]) / (end[2] - start[2])
    return start[0] + share * (end[0] - start[0]), start[1] + share * (end[1] - start[1])


def _kept(start: Corner, end: Corner, level: float) -> Iterator[Point]:
    """Of an edge, its start if that reaches the level, and where the level is crossed."""
    if start[2] >= level:
        yield start[:2]
    if _crosses(start, end, level):
        yield _crossing(start, end, level)


def _joined(pieces: list[list[Point]]) -> Iterator[list[Point]]:
    """Pieces that share an end as one line."""
    left = [*pieces]
    while left:
        line = left.pop()
        while found := next(((k, piece) for k, each in enumerate(left) if (piece := _onwards(line, each))), None):
            del left[found[0]]
            line = found[1]
        yield line


def _onwards(line: list[Point], piece: list[Point]) -> list[Point]:
    """The line with the piece at one of its ends; empty where they do not meet."""
    for way in (piece, piece[::-1]):
        if _same(line[-1], way[0]):
            return [*line, *way[1:]]
        if _same(way[-1], line[0]):
            return [*way[:-1], *line]
    return []


def _same(one: Point, other: Point) -> bool:
    return all(round(a - b, _DIGITS) == 0.0 for a, b in zip(one, other, strict=True))
