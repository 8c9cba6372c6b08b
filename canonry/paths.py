"""SVG of curves: path data, thinned where a curve is long, and texts."""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
import numpy.typing as npt

from canonry.notation import as_svg

__all__ = ["dashed", "extremes", "line", "pixels", "ring", "text"]

Floats = npt.NDArray[np.float64]

_MOST_POINTS = 400


def extremes(values: Floats) -> npt.NDArray[np.intp]:
    """Indices that keep the outline of a long curve: lowest and highest of each stretch, and every break."""
    n = len(values)
    if n <= _MOST_POINTS:
        return np.arange(n)
    keep = {0, n - 1}
    for stretch in np.array_split(np.arange(n), _MOST_POINTS // 2):
        finite = np.isfinite(values[stretch])
        if finite.any():
            keep |= {stretch[np.nanargmin(values[stretch])], stretch[np.nanargmax(values[stretch])]}
        if not finite.all():
            keep.add(stretch[np.argmin(finite)])
    return np.array(sorted(keep))


def line(x: Floats, y: Floats) -> str:
    """Path data through (x, y), each (n,), broken where either is not finite."""
    return "".join(f"M{_pairs(x[run], y[run])}h0" for run in _runs(x, y))


def ring(x: Floats, low: Floats, high: Floats) -> str:
    """Path data of the strip between low and high, each (n,), broken where any is not finite."""
    there_and_back = ((run, np.concatenate([x[run], x[run][::-1]])) for run in _runs(x, low, high))
    return "".join(f"M{_pairs(way, np.concatenate([high[run], low[run][::-1]]))}Z" for run, way in there_and_back)


def dashed(dash: str) -> str:
    """The attribute for a dash pattern; nothing for an unbroken line."""
    return f' stroke-dasharray="{dash}"' if dash else ""


def pixels(length: float) -> str:
    """To a tenth."""
    return f"{length:.1f}".removesuffix(".0")


def text(x: float, y: float, words: str, kind: str, anchor: str) -> str:
    """A text element of a class, escaped, its symbols with their index set low."""
    return f'<text class="{kind}" x="{pixels(x)}" y="{pixels(y)}" text-anchor="{anchor}">{as_svg(words)}</text>'


def _runs(*columns: Floats) -> Iterable[slice]:
    """The unbroken stretches in which every column is finite."""
    finite = np.all(np.isfinite(np.vstack(columns)), axis=0)
    edges = np.flatnonzero(np.diff(np.concatenate([[False], finite, [False]])))
    return (slice(start, end) for start, end in zip(edges[::2], edges[1::2], strict=True))


def _pairs(x: Floats, y: Floats) -> str:
    return "L".join(f"{pixels(a)},{pixels(b)}" for a, b in zip(x, y, strict=True))
