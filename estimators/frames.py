"""Frames of the repeats of one rung, looked at before anything is made of them; and the sum that their kernels take."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from estimators.compiled import kernel
from estimators.errors import BadSeries
from sampler.series import Series

__all__ = ["total", "with_frames"]


def with_frames(series: Sequence[Series]) -> list[Series]:
    """Those of the repeats of one rung that have frames.

    Raises BadSeries if they are not repeats of one state or a position is not finite.
    """
    kept = [each for each in series if len(each.frames)]
    if any((each.fluid, each.state, each.bath) != (kept[0].fluid, kept[0].state, kept[0].bath) for each in kept):
        raise BadSeries("series of different fluids, states or baths given; repeats of one rung share all three")
    if len({each.repeat for each in kept}) < len(kept):
        raise BadSeries("two series carry the same repeat number; give each repeat once")
    for each in kept:
        if not np.all(np.isfinite(each.frames)):
            raise BadSeries(f"a frame at {each.state}, repeat {each.repeat}, holds positions that are not finite")
    return kept


@kernel
def total(parts):  # type: ignore[no-untyped-def]
    """Sum, by halves, so that loops can be vectorised; the parts are lost."""
    size = parts.size
    while size > 1:
        rest = size // 2
        size -= rest
        for j in range(rest):
            parts[j] += parts[size + j]
    return parts[0]
