"""What adopted samples cannot say, and which column would let it be said."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING, Any

from canonry.border import Border
from canonry.study import Study
from estimators.canonical import NEEDS
from sampler.fluid import State
from sampler.series import Series

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["missing"]

_COLUMNS = ("temperature", "density", "property", "column")
_GIVEN_BY = {
    "energy": "potential, without a part from within molecules",
    "sampled_energy": "potential, or dynamical",
    "virial": "pressure or virial",
    "hypervirial": "hypervirial",
}
"""Column of a series -> columns of a description that it is made of."""


def missing(study: Study, series: Sequence[Series], border: Border) -> pd.DataFrame:
    """One row for each property that cannot be said at a state; in the units of the border."""
    import pandas as pd

    rows = [
        {
            "temperature": border.coordinate("temperature", state.temperature),
            "density": border.coordinate("density", state.density),
            "property": name,
            "column": column,
        }
        for state in study.states
        for name, column in _lacking(study, state, [each for each in series if each.state == state])
    ]
    return pd.DataFrame(rows, columns=list(_COLUMNS))


def _lacking(study: Study, state: State, series: Sequence[Series]) -> Iterator[tuple[str, str]]:
    fluid = study.fluid
    framed = any(len(each.frames) for each in series)
    needs: dict[str, Any] = dict(NEEDS)
    flexible = all(not each.has("energy") and each.freedom is not None for each in series)
    needs["heat_capacity"] = NEEDS["heat_capacity" if flexible else "residual_heat_capacity"]
    for name, columns in needs.items():
        lacking = [_GIVEN_BY[column] for column in columns if not all(each.has(column) for each in series)]
        if name == "heat_capacity" and study.ideal_heat_capacity is None and not flexible:
            lacking.append("fluid.ideal_heat_capacity")
        if name == "bulk_modulus" and fluid.has_pairs and fluid.surface_hypervirial(state.density) and not framed:
            lacking.append("frames")
        if lacking:
            yield name, "; ".join(lacking)
    if not framed:
        yield "g(r)", "frames"
