"""The tables of the report as HTML."""

from __future__ import annotations

from collections.abc import Iterable, Sequence, Set
from html import escape
from typing import TYPE_CHECKING

import numpy as np

from canonry.notation import as_html, name_of, symbol_of, unit_text
from canonry.numbers import plain, with_error
from canonry.report.health import fared
from canonry.report.rows import grouped, headline, trusted
from canonry.results import Results
from canonry.units import PROPERTIES, unit_label

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["MARKS", "absolute", "budget", "checks", "comparison", "derived", "sampling", "values"]

MARKS = {"ok": "", "caution": "†", "no": "‡"}
_FIRST = (
    "heat_capacity",
    "residual_heat_capacity",
    "pressure",
    "residual_energy",
    "compressibility_factor",
    "thermal_pressure",
    "bulk_modulus",
)
_ABSOLUTE = (
    "residual_chemical_potential",
    "residual_helmholtz_energy",
    "residual_entropy",
    "residual_helmholtz_change",
    "residual_entropy_change",
)
_OUTCOMES = {"agrees": "✓ agrees", "disagrees": "✗ disagrees", "undecided": "? undecided"}
_SOURCES = {
    "statistical": "statistical",
    "time_step": "time step",
    "cutoff": "cutoff and tail",
    "finite_size": "finite size",
    "equilibration": "equilibration",
}
_STRIP = 4.0


def values(results: Results, *, with_density: bool = False) -> str:
    """Headline values of the main properties, one row a state; residual heat capacity only without a full one."""
    return _states(results, _main(set(results.properties["property"])), with_density)


def derived(results: Results, *, with_density: bool = False) -> str:
    """Headline values of every property that follows from the main ones; empty if there is none."""
    known = set(results.properties["property"])
    names = [name for name in PROPERTIES if name in known and name not in (*_FIRST, *_ABSOLUTE)]
    return _states(results, names, with_density) if names else ""


def absolute(results: Results, *, with_density: bool = False) -> str:
    """Headline values of chemical potential, free energy and entropy, and how these change; empty if there is none."""
    known = set(results.properties["property"])
    names = [name for name in _ABSOLUTE if name in known]
    return _states(results, names, with_density) if names else ""


def comparison(results: Results, *, further: bool = False) -> list[str]:
    """One table a reference and property: each value beside its reference, with a strip that shows the deviation.

    further : the properties that `derived` and `absolute` show, rather than the main ones
    """
    rows = trusted(results)
    known = set(rows["property"])
    order = [name for name in PROPERTIES if name in known - {*_FIRST}] if further else _main(known)
    rows = rows[rows["property"].isin(order)].sort_values(
        "property", key=lambda each: each.map(order.index), kind="stable"
    )
    several = rows["density"].nunique() > 1
    found = []
    for (reference, name), own in grouped(rows, "reference", "property", sort=False):
        unit = _unit(results, name)
        compared = [f"{symbol_of(name)}|{unit}", f"{reference}|{unit}", "deviation|combined errors", ""]
        body = [_row(_compared(row, several)) for _, row in own.sort_values(["density", "temperature"]).iterrows()]
        found.append(_table([*_state_heads(results, several), *compared], body, title=name_of(name).capitalize()))
    return found


def sampling(results: Results) -> str:
    """One row a rung: repeats, samples, cut, effective samples, overlap with the next warmer rung."""
    several = results.equilibration["density"].nunique() > 1
    counts = ["repeats", "samples", "cut as equilibration, at most", "effective samples", "overlap with next rung"]
    body = []
    for (density, temperature), rows in grouped(results.equilibration, "density", "temperature"):
        cells = [plain(temperature), *([plain(density)] if several else [])]
        cells += [str(rows["repeat"].nunique()), f"{int(rows['samples'].sum())}", f"{int(rows['cut'].max())}"]
        cells += [f"{rows['effective_samples'].sum():.0f}", _next_overlap(results, density, temperature)]
        body.append(_row(cells))
    return _table([*_state_heads(results, several), *counts], body)


def checks(results: Results, sets: Sequence[tuple[str, Results]]) -> str:
    """One row a health check: what it asks, and how it fared at the states of each set."""
    heads = ["check", "what holds where it is passed", *(where for where, _ in sets)]
    return _table(heads, [_row(map(as_html, cells)) for cells in fared(results, [own for _, own in sets])])


def budget(results: Results, names: Sequence[str]) -> str:
    """Of each value of these properties, what each source of uncertainty adds."""
    rows = results.budget[results.budget["property"].isin(names)].sort_values(["property", "density", "temperature"])
    factors = " and ".join(f"{factor:g}" for factor in sorted(set(rows["coverage_factor"])))
    several = rows["density"].nunique() > 1
    heads = ["value", "", *_SOURCES.values(), f"expanded|coverage factor {factors}"]
    body = [
        _row(
            [
                plain(row["temperature"]),
                *([plain(row["density"])] if several else []),
                f"{as_html(symbol_of(row['property']))} = {_typeset(plain(row['value'], 5))}",
                as_html(unit_text(row["unit"])),
                *(_source(row[name]) for name in _SOURCES),
                plain(row["expanded"], 2),
            ]
        )
        for _, row in rows.iterrows()
    ]
    return _table([*_state_heads(results, several), *heads], body) if body else ""


def _main(known: Set[str]) -> list[str]:
    """Of these, the main properties in their order; residual heat capacity only without a full one."""
    spare = "residual_heat_capacity" if "heat_capacity" in known else ""
    return [name for name in _FIRST if name in known and name != spare]


def _source(size: float | str) -> str:
    return size if isinstance(size, str) else plain(size, 2)


def _states(results: Results, names: Sequence[str], with_density: bool) -> str:
    heads = [f"{symbol_of(name)}|{_unit(results, name)}" for name in names]
    asked = _set_temperatures(results)
    body = []
    for (density, temperature), state in grouped(headline(results), "density", "temperature"):
        cells = [plain(temperature), *([plain(density)] if with_density else [])]
        cells += [plain(asked[density, temperature])] if asked else []
        found = {row["property"]: row for _, row in state.iterrows()}
        body.append(_row([*cells, *(_estimate(found[name]) if name in found else "" for name in names)]))
    measured = [f"T as set|{_unit(results, 'temperature')}"] if asked else []
    return _table([*_state_heads(results, with_density), *measured, *heads], body)


def _set_temperatures(results: Results) -> dict[tuple[float, float], float]:
    """By density and measured temperature; empty where a bath holds the temperature set."""
    if "set_temperature" not in results.summary:
        return {}
    columns = results.summary[["density", "temperature", "set_temperature"]]
    return {(density, measured): asked for density, measured, asked in columns.itertuples(index=False, name=None)}


def _state_heads(results: Results, with_density: bool) -> list[str]:
    density = [f"density|{_unit(results, 'density')}"] if with_density else []
    return [f"T|{_unit(results, 'temperature')}", *density]


def _estimate(row: pd.Series) -> str:
    return f"{_typeset(with_error(row['value'], row['standard_error']))}{MARKS[row['trust']]}"


def _compared(row: pd.Series, several: bool) -> list[str]:
    return [
        plain(row["temperature"]),
        *([plain(row["density"])] if several else []),
        _estimate(row),
        _typeset(with_error(row["reference_value"], row["reference_uncertainty"])),
        _deviation(float(row["z"])),
        _OUTCOMES[row["outcome"]],
    ]


def _next_overlap(results: Results, density: float, temperature: float) -> str:
    table = results.overlap
    own = table[(table["density"] == density) & (table["temperature_a"] == temperature)]
    own = own[own["temperature_b"] > temperature].sort_values("temperature_b")
    return f"{own['overlap'].iloc[0]:.2f}" if len(own) else "-"


def _deviation(z: float) -> str:
    """The deviation beside a small scale from -4 to 4: thick within two, the dot hollow beyond the ends."""
    if not np.isfinite(z):
        return "-"
    at = 30.0 + 28.0 * max(-_STRIP, min(_STRIP, z)) / _STRIP
    reach = "beyond" if abs(z) > _STRIP else "inside"
    return (
        '<svg class="strip" viewBox="0 0 60 12" aria-hidden="true"><path class="axis" d="M2,6h56"/>'
        f'<path class="within" d="M16,6h28"/><circle class="{reach}" cx="{at:.1f}" cy="6" r="3"/></svg>'
        f'<span class="z">{_typeset(f"{z:+.1f}") if abs(z) >= 0.05 else "0.0"}</span>'
    )


def _typeset(number: str) -> str:
    return escape(number).replace("-", "−") if number != "-" else number


def _row(cells: Iterable[str]) -> str:
    return f"<tr>{''.join(f'<td>{cell}</td>' for cell in cells)}</tr>"


def _table(heads: Sequence[str], body: Sequence[str], title: str = "") -> str:
    caption = f"<caption>{as_html(title)}</caption>" if title else ""
    titles = "".join(f'<th scope="col">{_head(head)}</th>' for head in heads)
    head, rows = f"<thead><tr>{titles}</tr></thead>", f"<tbody>{''.join(body)}</tbody>"
    return f'<div class="scroll"><table>{caption}{head}{rows}</table></div>'


def _head(head: str) -> str:
    name, _, unit = head.partition("|")
    return f"{as_html(name)}<small>{as_html(unit)}</small>" if unit else as_html(name)


def _unit(results: Results, quantity: str) -> str:
    return unit_text(unit_label(quantity, results.units))
