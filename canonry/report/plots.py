"""Which figures a set of states gets, and what is drawn in each."""

from __future__ import annotations

from collections.abc import Iterator
from typing import TYPE_CHECKING

import numpy as np

from canonry.figures import Area, Axis, Band, Figure, Line, Note, Points, Span
from canonry.notation import name_of, symbol_of, unit_text
from canonry.numbers import plain
from canonry.report.rows import floats, grouped
from canonry.results import Results
from canonry.units import unit_label
from estimators.derived import CLEAR

if TYPE_CHECKING:
    import pandas as pd

    from canonry.figures import Mark

__all__ = ["curves", "deviations", "gain", "histograms", "ledger", "structure", "structure_factor"]

_DASHES = ("7 4", "2 3", "9 3 2 3")
_SHAPES = {"ok": "disc", "caution": "ring", "no": "cross"}
_TRUST = {"ok": "rungs", "caution": "rungs, with caution", "no": "rungs, not to be trusted"}


def curves(results: Results, where: str, name: str) -> Figure:
    """One property over temperature: rungs, reweighted curve, references; bars and bands are 95 % intervals.

    results : of one isochore only, like for all functions here; where : its density in words
    """
    return Figure(
        title=f"{name_of(name).capitalize()} over temperature, {where}",
        description=f"{name_of(name).capitalize()} of each rung with reweighted curve and reference, where given.",
        x=_temperature_axis(results),
        y=Axis(f"{name_of(name).capitalize()} {symbol_of(name)}", unit_text(unit_label(name, results.units))),
        marks=[*_reweighted(results, name), *_references(results, name), *_rungs(results, name)],
    )


def deviations(results: Results, where: str, names: list[str]) -> Figure:
    """Estimate minus reference in combined standard errors; the first reference only, others are in the table."""
    rows = results.verdict[results.verdict["property"].isin(names) & np.isfinite(results.verdict["z"])]
    rows = rows[rows["reference"] == rows["reference"].iloc[0]] if len(rows) else rows
    span = floats(rows, "temperature")
    edge = np.array([span.min(), span.max()]) if len(span) else np.zeros(0)
    marks: list[Mark] = [Band(edge, 0 * edge - 2.0, 0 * edge + 2.0, label="within 2", tone="quiet")]
    styles = (("disc", "measured"), ("ring", "accent"), ("cross", "reference"))
    for name, (shape, tone) in zip(names, styles, strict=False):
        own = rows[rows["property"] == name]
        if len(own):
            marks.append(Points(floats(own, "temperature"), floats(own, "z"), None, symbol_of(name), shape, tone))  # type: ignore[arg-type]
    return Figure(
        title=f"Deviation from the reference, {where}",
        description="Estimate minus reference over temperature, in combined standard errors; about 95 % of the points "
        "should lie within two.",
        x=_temperature_axis(results),
        y=Axis("Deviation", "combined standard errors", reach=(-3.5, 3.5)),
        marks=marks,
    )


def histograms(results: Results, where: str) -> Figure:
    """Distribution of the energy per particle in each rung: neighbours must overlap for the curve to be supported."""
    marks: list[Mark] = []
    groups = list(grouped(results.histograms, "temperature"))
    every = -(-len(groups) // 8)
    for k, ((temperature,), rows) in enumerate(groups):
        energy, probability = floats(rows, "energy"), floats(rows, "probability")
        marks.append(Area(energy, probability, *(("5 3", "accent") if k % 2 else ("", "measured"))))
        if k % every == 0:
            peak = int(np.argmax(probability))
            marks.append(Note(float(energy[peak]), float(probability[peak]), plain(temperature, 4)))
    unit = unit_text(unit_label("residual_energy", results.units))
    return Figure(
        title=f"Energy distributions of neighbouring rungs, {where}",
        description="Probability density of the residual energy per particle in each rung, with its temperature.",
        x=Axis("Residual energy u", unit),
        y=Axis("Probability density", "/".join(reversed(unit.split("/"))) if "/" in unit else f"1/{unit}"),
        marks=marks,
    )


def structure(results: Results, where: str) -> Iterator[Figure]:
    """One small figure a rung and pair of species; the coldest rung of its density is in each, thin and dashed."""
    table = results.structure
    highest = float(table["g"].max())
    for (density, temperature, a, b), rows in grouped(table, "density", "temperature", "species_a", "species_b"):
        alike = table[(table["density"] == density) & (table["species_a"] == a) & (table["species_b"] == b)]
        coldest = alike[alike["temperature"] == alike["temperature"].min()]
        r, g, error = (floats(rows, column) for column in ("r", "g", "standard_error"))
        pair = f" {a}-{b}" if a != b or table["species_a"].nunique() > 1 else ""
        at = _state(results, temperature, density)
        yield Figure(
            title=f"Pair distribution{pair} at {at}, {where}",
            description=f"g(r) with its 95 % band; dashed: the coldest rung. {gain(rows)}".strip(),
            x=Axis("r", unit_text(str(rows["r_unit"].iloc[0]))),
            y=Axis(f"g(r){pair}, {at}", reach=(0.0, highest)),
            marks=[
                Band(r, g - 2.0 * error, g + 2.0 * error),
                Line(r, g),
                Line(floats(coldest, "r"), floats(coldest, "g"), dash="3 3", tone="quiet", thin=True),
            ],
            width=236,
            height=168,
            ticks=4,
        )


def structure_factor(results: Results, where: str) -> Iterator[Figure]:
    """One small figure a rung, with both routes to the limit at long waves; the coldest of its density is dashed."""
    table = results.structure_factor
    highest = float(table["s"].max())
    for (density, temperature), rows in grouped(table, "density", "temperature"):
        alike = table[table["density"] == density]
        coldest = alike[alike["temperature"] == alike["temperature"].min()]
        k, s, error = (floats(rows, column) for column in ("k", "s", "standard_error"))
        at = _state(results, temperature, density)
        yield Figure(
            title=f"Structure factor at {at}, {where}",
            description="S(k) with its 95 % band; dashed: the coldest rung. At k = 0: ρT/B_T from its limit at long "
            "waves (ring) and from fluctuations (cross).",
            x=Axis("k", unit_text(str(rows["k_unit"].iloc[0])), reach=(0.0,)),
            y=Axis(f"S(k), {at}", reach=(0.0, highest)),
            marks=[
                Band(k, s - 2.0 * error, s + 2.0 * error),
                Line(k, s),
                Line(floats(coldest, "k"), floats(coldest, "s"), dash="3 3", tone="quiet", thin=True),
                *_limits(results, temperature, density, aside=-0.04 * float(k.max())),
            ],
            width=236,
            height=168,
            ticks=4,
        )


def _limits(results: Results, temperature: float, density: float, *, aside: float) -> Iterator[Points]:
    """rho T/B_T by both routes, that from fluctuations set aside; rho T is P/Z, whatever the units."""
    table = results.properties
    rows = table[(table["temperature"] == temperature) & (table["density"] == density)]
    counted = rows[rows["headline"].astype(bool)].set_index("property")["value"]
    if not {"pressure", "compressibility_factor"} <= set(counted.index):
        return
    ideal = float(counted["pressure"] / counted["compressibility_factor"])
    moduli = rows[rows["property"] == "bulk_modulus"]
    for method, k, shape, tone in (("structure", 0.0, "ring", "measured"), ("fluctuation", aside, "cross", "accent")):
        own = moduli[(moduli["method"] == method) & (moduli["value"] > CLEAR * moduli["standard_error"])]
        value, error = floats(own, "value"), floats(own, "standard_error")
        yield Points(np.full(len(own), k), ideal / value, 2.0 * ideal * error / value**2, "", shape, tone)  # type: ignore[arg-type]


def gain(rows: pd.DataFrame) -> str:
    """A sentence on what g(r) from forces is worth beside counted pairs, median over r; empty where it is not known."""
    counted, forced = floats(rows, "standard_error"), floats(rows, "forced_error")
    known = (counted > 0.0) & (forced > 0.0)
    if not np.any(known):
        return ""
    times = float(np.median((counted[known] / forced[known]) ** 2))
    return (
        f"The variance of counted pairs is {times:.3g} times that of g(r) from the forces on the particles, median "
        "over all r (g_forced in structure.csv)."
    )


def ledger(results: Results, where: str, bath: bool) -> Figure:
    """The conserved quantity over time in every repeat; the one that ends farthest from its start stands out."""
    conserved = "K + U_dyn + ledger" if bath else "K + U_dyn"
    marks: list[Mark] = []
    groups = list(grouped(results.ledger, "temperature", "density", "repeat"))
    farthest = max(groups, key=lambda group: abs(group[1]["drift"].iloc[-1]), default=None)
    for key, rows in groups:
        if farthest is None or key != farthest[0]:
            label = "" if marks else "other repeats"
            marks.append(Line(floats(rows, "time"), floats(rows, "drift"), label, tone="quiet", thin=True))
    if farthest is not None:
        (temperature, density, repeat), rows = farthest
        label = f"largest change: {_state(results, temperature, density)}, repeat {repeat}"
        marks.append(Line(floats(rows, "time"), floats(rows, "drift"), label, thin=True))
    return Figure(
        title=f"Conserved quantity over time, {where}",
        description=f"Change of {conserved} per particle since the first sample, one line a repeat; a slope would be a "
        "drift of the integration.",
        x=Axis("Time", unit_text(unit_label("time", results.units))),
        y=Axis(f"Change of {conserved} per particle", unit_text(unit_label("residual_energy", results.units))),
        marks=marks,
    )


def _rungs(results: Results, name: str) -> Iterator[Mark]:
    """The rungs' own values, independent of the curve; the headline value where a rung has none of its own."""
    rows = results.properties[results.properties["property"] == name]
    own = rows[rows["method"] != "reweighted"]
    own = own[~own["temperature"].duplicated() | own["headline"].astype(bool)]
    rest = rows[rows["headline"].astype(bool) & ~rows["temperature"].isin(own["temperature"])]
    for part in (own, rest):
        chosen = part.sort_values("headline").drop_duplicates("temperature", keep="last")
        for trust, shape in _SHAPES.items():
            these = chosen[chosen["trust"] == trust].sort_values("temperature")
            if len(these):
                x, y, error = (floats(these, column) for column in ("temperature", "value", "standard_error"))
                yield Points(x, y, 2.0 * error, _TRUST[trust], shape)  # type: ignore[arg-type]


def _reweighted(results: Results, name: str) -> Iterator[Mark]:
    rows = results.curve[results.curve["property"] == name].sort_values("temperature")
    x, y, error = (floats(rows, column) for column in ("temperature", "value", "standard_error"))
    if np.isfinite(y).any():
        yield Band(x, y - 2.0 * error, y + 2.0 * error)
        yield Line(x, y, "reweighted")
    refused = np.concatenate([[False], ~np.isfinite(y), [False]])
    edges = np.flatnonzero(np.diff(refused))
    for k, (start, end) in enumerate(zip(edges[::2], edges[1::2], strict=True)):
        yield Span(float(x[start]), float(x[end - 1]), "" if k else "refused")


def _references(results: Results, name: str) -> Iterator[Mark]:
    rows = results.reference_curve[results.reference_curve["property"] == name].sort_values("temperature")
    for k, ((reference,), own) in enumerate(grouped(rows, "reference", sort=False)):
        x, y, error = (floats(own, column) for column in ("temperature", "value", "uncertainty"))
        yield Band(x, y - 2.0 * error, y + 2.0 * error, tone="reference")
        yield Line(x, y, reference, dash=_DASHES[k % len(_DASHES)], tone="reference")


def _state(results: Results, temperature: float, density: float) -> str:
    """The temperature, with the density where these results hold several."""
    text = f"T = {plain(temperature)} {unit_text(unit_label('temperature', results.units))}"
    return f"{text}, density {plain(density)}" if results.properties["density"].nunique() > 1 else text


def _temperature_axis(results: Results) -> Axis:
    return Axis("Temperature T", unit_text(unit_label("temperature", results.units)))
