"""A map: values over the plane as steps of tone, with labelled lines between them and a scale beside."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from canonry.axes import Axis, Scale, scale
from canonry.contours import lines, regions
from canonry.paths import line, pixels, text

__all__ = ["MARGIN", "Map", "draw_map"]

Floats = npt.NDArray[np.float64]

MARGIN = 64  # pixels that the scale takes
_LABEL = 20  # pixels between the label of a line and what it must not cover


@dataclass(frozen=True)
class Map:
    """Values (m, n) over x (n,) and y (m,): darker by steps, with lines at the steps, their labels, and a scale beside.

    Blank where values are not finite. One of a figure, at most.
    """

    x: Floats
    y: Floats
    values: Floats
    scale: Axis
    steps: int = 8
    tone: str = "measured"


def draw_map(mark: Map, x: Scale, y: Scale, points: Floats, right: float) -> Iterator[str]:
    """SVG of regions above each step one over the other, lines between them with their labels, and the scale.

    points : (k, 2), in pixels, which labels must not cover; right : where the scale may end
    """
    known = mark.values[np.isfinite(mark.values)]
    if not len(known):
        return
    z = scale((float(known.min()), float(known.max())), y.start, y.end, mark.steps, margin=0.0)
    across, height, levels = x(mark.x), y(mark.y), [z.low, *z.ticks]
    for level in levels:
        polygons = "".join(f"{line(*polygon.T)}" for polygon in regions(across, height, mark.values, level))
        yield f'<path class="shade {mark.tone}" d="{polygons}"/>'
    taken, labels = [points], []
    for level, (_, label) in zip(z.ticks, z.labels(), strict=True):
        drawn = lines(across, height, mark.values, level)
        yield f'<path class="level {mark.tone}" d="{"".join(line(*each.T) for each in drawn)}"/>'
        at = _clear(drawn, np.concatenate(taken), x, y)
        if at is not None:
            taken.append(at[None])
            labels.append(text(at[0], at[1] + 4, label, "note", "middle"))
    yield from labels
    yield from _scale_beside(mark, z, levels, x.end + 16, right)


def _clear(drawn: Sequence[Floats], taken: Floats, x: Scale, y: Scale) -> Floats | None:
    """The place on a line that is farthest from what is taken and from the frame; None where all are too close."""
    if not drawn:
        return None
    places = np.concatenate([0.5 * (each[1:] + each[:-1]) for each in drawn])
    frame = np.min(np.abs(places[:, :, None] - [[x.start, x.end], [y.start, y.end]]), axis=(1, 2))
    away = np.linalg.norm(places[:, None] - taken, axis=2).min(axis=1, initial=3.0 * _LABEL)
    room = np.minimum(away, 1.5 * frame)
    best = int(np.argmax(room))
    return np.asarray(places[best]) if room[best] >= _LABEL else None


def _scale_beside(mark: Map, z: Scale, levels: Sequence[float], left: float, right: float) -> Iterator[str]:
    """The steps of a map as a column of its tones, from its lowest value to its highest."""
    for level in levels:
        bottom, top = float(z(level)), float(z(z.high))
        size = f'width="12" height="{pixels(bottom - top)}"'
        yield f'<rect class="shade {mark.tone}" x="{pixels(left)}" y="{pixels(top)}" {size}/>'
    for at, label in z.labels():
        yield f'<path class="frame" d="M{pixels(left)},{pixels(at)}h15"/>'
        yield text(left + 18, at + 4, label, "tick", "start")
    yield text(right, 14, z.caption(mark.scale), "axis-label", "end")
