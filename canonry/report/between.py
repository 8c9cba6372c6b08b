"""The section on the surface between the isochores: what it rests on, how it is held against rungs, and its maps."""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from canonry.axes import Axis
from canonry.figures import Figure, Map, Points
from canonry.notation import name_of, symbol_of, unit_text
from canonry.numbers import plain
from canonry.report.rows import floats, grouped
from canonry.results import Results
from canonry.units import unit_label

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["maps", "sentences"]

Floats = npt.NDArray[np.float64]

_CAUTION = "with caution"


def sentences(results: Results) -> Iterator[str]:
    """What the surface is, how rungs that it does not know agree with it, and where it is doubtful."""
    states = results.properties[["temperature", "density"]].drop_duplicates()
    spans = [
        f"{symbol} from {_span(results, name, states)}" for symbol, name in (("T", "temperature"), ("ρ", "density"))
    ]
    yield (
        "Between the isochores values come from one residual Helmholtz energy a_res(1/T, ρ) through what each of the "
        f"{len(states)} states says alone. Every property is a derivative of it, so that all are consistent with one "
        "another; the ideal gas and the second virial coefficient are its exact limits at low density. It answers "
        f"within the convex hull of the sampled states in 1/T and ρ ({' and '.join(spans)}) and refuses outside."
    )
    yield (
        "Absolute values (a_res, s_res and μ_res) are counted from the ideal gas along the isotherm. Up to the lowest "
        f"density sampled, {plain(float(states['density'].min()))} {_unit(results, 'density')}, that path rests on the "
        "second virial coefficient and on the smoothness of the surface alone, and error bars tell what is left open."
    )
    yield from _held_out(results)
    yield from _doubtful(results)
    yield "surface.csv has all properties on the grid of the maps; `canonry reweight` answers at any state in between."


def maps(results: Results, names: list[str]) -> Iterator[Figure]:
    """Over temperature and density, each property with the sampled states, and beside it its standard error."""
    known = set(results.surface["property"])
    for name in (name for name in names if name in known):
        called, symbol = name_of(name), symbol_of(name)
        yield _map(
            results,
            name,
            "value",
            title=f"{called.capitalize()} over temperature and density",
            description=f"{called.capitalize()} from the surface through all rungs, with the states that were sampled.",
            scale=symbol,
        )
        yield _map(
            results,
            name,
            "standard_error",
            title=f"Standard error of {called} over temperature and density",
            description=f"Standard error of the {called} from the surface, with the states that were sampled.",
            scale=f"standard error of {symbol}",
            tone="accent",
        )


def _map(
    results: Results, name: str, column: str, *, title: str, description: str, scale: str, tone: str = "measured"
) -> Figure:
    rows = results.surface[results.surface["property"] == name]
    rows = rows.assign(shown=rows[column].where(rows["trust"] != "no"))
    grid = rows.pivot(index="density", columns="temperature", values="shown")
    temperatures, densities = grid.columns.to_numpy(dtype=float), grid.index.to_numpy(dtype=float)
    states = results.properties[["temperature", "density"]].drop_duplicates()
    doubtful = rows[rows["trust"] == "caution"]
    return Figure(
        title=title,
        description=description,
        x=Axis("Temperature T", _unit(results, "temperature")),
        y=Axis("Density ρ", _unit(results, "density")),
        marks=[
            Map(
                temperatures,
                densities,
                grid.to_numpy(dtype=float),
                Axis(scale, _unit(results, name)),
                steps=8 if column == "value" else 6,
                tone=tone,
            ),
            *([Points(*_places(doubtful), label=_CAUTION, shape="dot")] if len(doubtful) else []),
            Points(*_places(states), label="sampled", shape="ring"),
        ],
    )


def _held_out(results: Results) -> Iterator[str]:
    held = results.held_out
    if len(held):
        worst = held.iloc[int(np.argmax(np.abs(floats(held, "z"))))]
        at = ", ".join(
            f"{symbol} = {plain(float(worst[name]))} {_unit(results, name)}"
            for symbol, name in (("T", "temperature"), ("ρ", "density"))
        )
        yield (
            f"Held against each rung without using it, {len(held)} values deviate by "
            f"{np.sqrt(np.mean(floats(held, 'z') ** 2)):.2f} combined standard errors (root mean square), by "
            f"{abs(worst['z']):.1f} at most: {name_of(worst['property'])} at {at}."
        )


def _doubtful(results: Results) -> Iterator[str]:
    """One sentence for each reason for caution, with how much of the grid it concerns."""
    points = results.surface.drop_duplicates(["temperature", "density"])
    doubtful = results.surface[results.surface["trust"] == "caution"]
    for (reason,), rows in grouped(doubtful, "reason", sort=False):
        where = len(rows.drop_duplicates(["temperature", "density"]))
        names = [name_of(name) for name in dict.fromkeys(rows["property"])]
        what = "all properties" if len(names) == results.surface["property"].nunique() else ", ".join(names)
        yield f"With caution at {where} of {len(points)} points of the grid: {what}. Reason: {reason}."


def _places(rows: pd.DataFrame) -> tuple[Floats, Floats]:
    """Temperatures and densities of states, each once."""
    states = rows[["temperature", "density"]].drop_duplicates()
    return floats(states, "temperature"), floats(states, "density")


def _span(results: Results, name: str, states: pd.DataFrame) -> str:
    return f"{plain(float(states[name].min()))} to {plain(float(states[name].max()))} {_unit(results, name)}"


def _unit(results: Results, quantity: str) -> str:
    return unit_text(unit_label(quantity, results.units))
