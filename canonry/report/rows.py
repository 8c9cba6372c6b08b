"""Rows of the result tables: picked and grouped."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from canonry.results import Results
from canonry.verdict import FOLLOWS

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["at_densities", "floats", "grouped", "headline", "independent", "trusted"]


def floats(rows: pd.DataFrame, column: str) -> npt.NDArray[np.float64]:
    """A column as an array, (n,)."""
    return rows[column].to_numpy(dtype=float)


def grouped(table: pd.DataFrame, *columns: str, sort: bool = True) -> Iterator[tuple[tuple[Any, ...], pd.DataFrame]]:
    """The values of these columns, as a tuple, with the rows that share them; else in the order of the table."""
    return ((tuple(key), rows) for key, rows in table.groupby(list(columns), sort=sort))


def headline(results: Results) -> pd.DataFrame:
    """The one row per property and state that counts."""
    return results.properties[results.properties["headline"].astype(bool)]


def independent(rows: pd.DataFrame, *judged: str) -> pd.DataFrame:
    """Without rows that say what others do at the same state, one of which bears the same entries in `judged`."""
    columns = ["temperature", "density", *judged, "property"]
    keys = list(rows[columns].itertuples(index=False, name=None))
    there = set(keys)
    said = [any((*key, name) in there for name in FOLLOWS.get(own, ())) for *key, own in keys]
    return rows[~np.array(said, dtype=bool)]


def trusted(results: Results) -> pd.DataFrame:
    """The values compared, each with the trust in it; without the outcome of all together."""
    state = ["temperature", "density", "property"]
    single = results.verdict[results.verdict["temperature"].notna()]
    return single.merge(headline(results)[[*state, "trust"]], on=state, how="left")


def at_densities(results: Results, densities: list[float]) -> Results:
    """The same results with the rows of these densities only."""

    def own(table: pd.DataFrame) -> pd.DataFrame:
        found = floats(table, "density")[:, np.newaxis]
        return table.iloc[np.flatnonzero(np.isclose(found, densities, rtol=1e-9, atol=0.0).any(axis=1))]

    return replace(
        results,
        properties=own(results.properties),
        curve=own(results.curve),
        structure=own(results.structure),
        structure_factor=own(results.structure_factor),
        verdict=own(results.verdict),
        summary=own(results.summary),
        histograms=own(results.histograms),
        ledger=own(results.ledger),
        overlap=own(results.overlap),
        reference_curve=own(results.reference_curve),
        equilibration=own(results.equilibration),
        health=own(results.health),
        budget=own(results.budget),
    )
