"""Figures as inline SVG: points with bars, lines, bands, areas and maps in a pair of axes, with a legend.

Colours are CSS classes of the page (`measured`, `reference`, `accent`, `quiet`); shape, dash and labelled lines carry
the same distinction without them.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from html import escape
from typing import Literal

import numpy as np
import numpy.typing as npt

from canonry.axes import Axis, Scale, scale
from canonry.maps import MARGIN, Map, draw_map
from canonry.paths import dashed, extremes, line, ring, text
from canonry.paths import pixels as _n

__all__ = ["Area", "Axis", "Band", "Figure", "Line", "Map", "Note", "Points", "Span", "draw"]

Floats = npt.NDArray[np.float64]
Tone = Literal["measured", "reference", "accent", "quiet"]
_LETTER = 6.9
_ROW = 19


@dataclass(frozen=True)
class Points:
    """Symbols at (x, y), each (n,), with bars of half length `error` where given."""

    x: Floats
    y: Floats
    error: Floats | None = None
    label: str = ""
    shape: Literal["disc", "ring", "cross", "dot"] = "disc"
    tone: Tone = "measured"


@dataclass(frozen=True)
class Line:
    """A line through (x, y), each (n,), broken where y is not finite; `dash` as in SVG."""

    x: Floats
    y: Floats
    label: str = ""
    dash: str = ""
    tone: Tone = "measured"
    thin: bool = False


@dataclass(frozen=True)
class Band:
    """The strip between low and high, each (n,), broken where either is not finite."""

    x: Floats
    low: Floats
    high: Floats
    label: str = ""
    tone: Tone = "measured"


@dataclass(frozen=True)
class Area:
    """The surface between (x, y), each (n,), and y = 0, with its outline."""

    x: Floats
    y: Floats
    dash: str = ""
    tone: Tone = "measured"


@dataclass(frozen=True)
class Span:
    """A range of x marked over the full height."""

    start: float
    end: float
    label: str = ""


@dataclass(frozen=True)
class Note:
    """A text centred at (x, y), lifted above it."""

    x: float
    y: float
    text: str


Mark = Points | Line | Band | Area | Span | Note | Map


@dataclass(frozen=True)
class Figure:
    """Marks in a pair of axes; title and description are read aloud instead of the picture."""

    title: str
    description: str
    x: Axis
    y: Axis
    marks: Sequence[Mark]
    width: int = 440
    height: int = 300
    ticks: int = 6


def draw(figure: Figure) -> str:
    """The figure as one SVG element, its texts escaped; axes span all finite data of the marks."""
    legend, rows = _legend(figure)
    maps = [mark for mark in figure.marks if isinstance(mark, Map)]
    left, top, bottom = 50, 26 + rows * _ROW, figure.height - 40
    right = figure.width - 10 - (MARGIN if maps else 0)
    x = scale(_extent(figure, 0), left, right, figure.ticks, margin=0.03)
    y = scale(_extent(figure, 1), bottom, top, max(2, figure.ticks * (bottom - top) // 250), margin=0.06)
    order = (Span, Band, Area, Line, Points, Note)
    body = [part for mark in maps for part in draw_map(mark, x, y, _places(figure, x, y), figure.width - 4)]
    body += [_draw_mark(mark, x, y) for kind in order for mark in figure.marks if isinstance(mark, kind)]
    return "\n".join(
        [
            f'<svg role="img" viewBox="0 0 {figure.width} {figure.height}">',
            f"<title>{escape(figure.title)}</title><desc>{escape(figure.description)}</desc>",
            *_grid(x, y),
            *body,
            text(4, 14, y.caption(figure.y), "axis-label", "start"),
            text(right, figure.height - 6, x.caption(figure.x), "axis-label", "end"),
            *legend,
            "</svg>",
        ]
    )


def _extent(figure: Figure, axis: int) -> tuple[float, float]:
    parts = [part for mark in figure.marks for part in _reach(mark)[axis]]
    values = np.concatenate([np.array((figure.x, figure.y)[axis].reach, dtype=float), *map(np.ravel, parts)])
    values = values[np.isfinite(values)]
    return (float(values.min()), float(values.max())) if len(values) else (0.0, 1.0)


def _places(figure: Figure, x: Scale, y: Scale) -> Floats:
    """Of all points but dots, (n, 2), in pixels."""
    shown = [mark for mark in figure.marks if isinstance(mark, Points) and mark.shape != "dot"]
    points = [np.column_stack([x(mark.x), y(mark.y)]) for mark in shown]
    return np.concatenate([np.zeros((0, 2)), *points])


def _reach(mark: Mark) -> tuple[list[Floats], list[Floats]]:
    """All x and all y that a mark must have room for."""
    match mark:
        case Span(start, end):
            return [np.array([start, end])], []
        case Note(x, y):
            return [np.array([x])], [np.array([y])]
        case Map(x, y):
            return [x], [y]
        case Band(x, low, high):
            return [x], [low, high]
        case Area(x, y):
            return [x], [y, np.zeros(1)]
        case Points(x, y, error) if error is not None:
            bars = np.where(np.isfinite(error), error, 0.0)
            return [x], [y - bars, y + bars]
        case _:
            return [mark.x], [mark.y]


def _grid(x: Scale, y: Scale) -> Iterable[str]:
    for at, label in y.labels():
        yield f'<path class="grid" d="M{_n(x.start)},{_n(at)}H{_n(x.end)}"/>'
        yield text(x.start - 6, at + 4, label, "tick", "end")
    yield f'<path class="frame" d="M{_n(x.start)},{_n(y.start)}H{_n(x.end)}"/>'
    for at, label in x.labels():
        yield f'<path class="frame" d="M{_n(at)},{_n(y.start)}v4"/>'
        yield text(at, y.start + 17, label, "tick", "middle")


def _draw_mark(mark: Points | Line | Band | Area | Span | Note, x: Scale, y: Scale) -> str:
    match mark:
        case Points():
            return _points(mark, x, y)
        case Line():
            keep = extremes(mark.y)
            path = line(x(mark.x[keep]), y(mark.y[keep]))
            weight = " thin" if mark.thin else ""
            return f'<path class="line {mark.tone}{weight}"{dashed(mark.dash)} d="{path}"/>'
        case Band():
            keep = extremes(mark.high)
            path = ring(x(mark.x[keep]), y(mark.low[keep]), y(mark.high[keep]))
            return f'<path class="band {mark.tone}" d="{path}"/>'
        case Area():
            keep = extremes(mark.y)
            across, height = x(mark.x[keep]), y(mark.y[keep])
            fill = f'<path class="band {mark.tone}" d="{ring(across, y(np.zeros(len(keep))), height)}"/>'
            return f'{fill}<path class="line {mark.tone}"{dashed(mark.dash)} d="{line(across, height)}"/>'
        case Span():
            start, end = float(x(mark.start)), float(x(mark.end))
            size = f'width="{_n(max(end - start, 2.0))}" height="{_n(y.start - y.end)}"'
            return f'<rect class="span" x="{_n(start)}" y="{_n(y.end)}" {size}/>'
        case Note():
            return text(float(x(mark.x)), float(y(mark.y)) - 6, mark.text, "note", "middle")


def _points(mark: Points, x: Scale, y: Scale) -> str:
    parts = []
    for k in np.flatnonzero(np.isfinite(mark.x) & np.isfinite(mark.y)):
        across = float(x(mark.x[k]))
        if mark.error is not None and np.isfinite(mark.error[k]) and mark.error[k] > 0.0:
            low, high = float(y(mark.y[k] - mark.error[k])), float(y(mark.y[k] + mark.error[k]))
            parts.append(f'<path class="bar {mark.tone}" d="M{_n(across)},{_n(low)}V{_n(high)}"/>')
        parts.append(_symbol(across, float(y(mark.y[k])), mark, "point"))
    return "".join(parts)


def _symbol(x: float, y: float, mark: Points, kind: str) -> str:
    if mark.shape == "cross":
        return f'<path class="{kind} cross {mark.tone}" d="M{_n(x - 4)},{_n(y - 4)}l8,8m0,-8l-8,8"/>'
    radius = "1.6" if mark.shape == "dot" else "3.6"
    return f'<circle class="{kind} {mark.shape} {mark.tone}" cx="{_n(x)}" cy="{_n(y)}" r="{radius}"/>'


def _legend(figure: Figure) -> tuple[list[str], int]:
    """Samples with their labels, set in rows under the label of the vertical axis; and the number of rows."""
    parts: list[str] = []
    x, row = 8.0, 0
    for mark in figure.marks:
        if isinstance(mark, (Area, Note, Map)) or not mark.label:
            continue
        width = 32 + _LETTER * len(mark.label)
        if parts and x + width > figure.width:
            x, row = 8.0, row + 1
        y = 31.0 + row * _ROW
        parts += [_sample(mark, x, y), text(x + 26, y + 4, mark.label, "legend", "start")]
        x += width + 8
    return parts, row + 1 if parts else 0


def _sample(mark: Points | Line | Band | Span, x: float, y: float) -> str:
    match mark:
        case Points():
            return _symbol(x + 10, y, mark, "sample")
        case Line():
            return f'<path class="line {mark.tone}"{dashed(mark.dash)} d="M{_n(x)},{_n(y)}h20"/>'
        case Band():
            return f'<rect class="band {mark.tone}" x="{_n(x)}" y="{_n(y - 5)}" width="20" height="10"/>'
        case Span():
            return f'<rect class="span" x="{_n(x)}" y="{_n(y - 5)}" width="20" height="10"/>'
