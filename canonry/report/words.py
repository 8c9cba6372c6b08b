"""The verdict in plain language: what was asked, what came out, whether it agrees, what should not be trusted."""

from __future__ import annotations

import math
import re
from collections.abc import Iterator
from typing import TYPE_CHECKING

import numpy as np

from canonry.notation import name_of, symbol_of, unit_text
from canonry.numbers import plain, with_error
from canonry.report.rows import grouped, headline, independent, trusted
from canonry.report.setup import Setup
from canonry.results import Results
from canonry.units import unit_label

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["agreement", "answers", "doubts", "heat_capacity_name", "outcome", "question", "states_in_words"]

_ANSWERS_SHOWN = 4
_CAUSES_SHOWN = 2  # of each kind of doubt
_COUNT = re.compile(r"\d+(?= effective samples)")


def heat_capacity_name(results: Results) -> str:
    """The heat capacity this study has: with the ideal part, or residual only where that is unknown."""
    known = set(results.properties["property"])
    return "heat_capacity" if "heat_capacity" in known else "residual_heat_capacity"


def outcome(results: Results) -> str:
    """'agrees', 'disagrees' or 'undecided' over all references, the worst of them; empty if none was compared."""
    found = {_outcome_of(rows) for _, rows in grouped(results.verdict, "reference")}
    return next((name for name in ("disagrees", "undecided", "agrees") if name in found), "")


def question(results: Results) -> str:
    """What was asked."""
    setup = Setup.of(results)
    known = set(results.properties["property"])
    asked = [name for name in (heat_capacity_name(results), "pressure") if name in known] or sorted(known)
    against = f", held against {_listed(list(setup.against))}{_tolerances(results, setup)}" if setup.against else ""
    return (
        f"Asked: {_listed([name_of(name) for name in asked])} of the {setup.fluid}; {setup.particles} particles, "
        f"{states_in_words(results)}{against}."
    )


def states_in_words(results: Results) -> str:
    """The states of a study in half a sentence."""
    states = results.properties[["temperature", "density"]].drop_duplicates()
    densities = sorted(states["density"].unique())
    temperatures = sorted(states["temperature"].unique())
    if not temperatures:
        return "no states"
    span = f"temperature {_between(temperatures)} {_unit(results, 'temperature')}"
    if len(temperatures) > 1:
        span = f"{len(temperatures)} temperatures from {_between(temperatures)} {_unit(results, 'temperature')}"
    dense = f"{_counted(len(densities), 'density', 'densities')} from " if len(densities) > 1 else "density "
    return f"{dense}{_between(densities)} {_unit(results, 'density')}, {span}"


def answers(results: Results) -> list[str]:
    """What came out: ends of the heat-capacity and pressure curves, one sentence an isochore, a few isochores."""
    rows = headline(results)
    names = (heat_capacity_name(results), "pressure")
    groups = list(grouped(rows[rows["property"].isin(names)], "density"))
    sentences = [_answer(results, density, own, names) for (density,), own in groups[:_ANSWERS_SHOWN]]
    rest = len(groups) - _ANSWERS_SHOWN
    more = [f"{_counted(rest, 'more density', 'more densities')} below."] if rest > 0 else []
    return [*sentences, *more]


def agreement(results: Results) -> list[str]:
    """One sentence a reference: outcome, how many values agree, the largest deviation in combined standard errors."""
    if results.verdict.empty:
        return ["No comparison: no reference was asked for, or none speaks for this fluid at these states."]
    compared = trusted(results)
    careful = " Values marked † count like any other, though with caution: their error bars, and with them their "
    careful += "deviations, are less certain than those of the rest."
    return [
        " ".join([_agreement(results, name, rows), *_undecided(results, rows)])
        + (careful if (compared[compared["reference"] == name]["trust"] == "caution").any() else "")
        for (name,), rows in grouped(results.verdict, "reference", sort=False)
    ]


def doubts(results: Results) -> list[str]:
    """What should not be trusted, worst first: headline values by cause, refused stretches of the curve; a few each."""
    found, values = [], independent(headline(results), "trust")
    for trust, words in (("no", "Do not use"), ("caution", "With caution")):
        rows = values[values["trust"] == trust].fillna({"reason": "none given"})
        causes = rows.assign(cause=rows["reason"].str.replace(_COUNT, "#", regex=True))
        groups = sorted((group for _, group in grouped(causes, "cause", sort=False)), key=len, reverse=True)
        told = [f"{words}: {_places(results, group)}. {_reason(results, _merged(group['reason']))}" for group in groups]
        found += _few(
            told, f"{_counted(sum(map(len, groups[_CAUSES_SHOWN:])), 'more value')} for other reasons", "properties"
        )
    return [*found, *_few([*_refusals(results)], "more such stretches", "curve")]


def _outcome_of(rows: pd.DataFrame) -> str:
    """The overall row of one reference where there is one, else the worst of its rows."""
    overall = rows[rows["temperature"].isna()]
    outcomes = set(overall["outcome"] if len(overall) else rows["outcome"])
    return next(name for name in ("disagrees", "undecided", "agrees") if name in outcomes)


def _answer(results: Results, density: float, rows: pd.DataFrame, names: tuple[str, ...]) -> str:
    parts = []
    for name in names:
        own = rows[(rows["property"] == name) & np.isfinite(rows["value"])].sort_values("temperature")
        ends = [with_error(own.iloc[k]["value"], own.iloc[k]["standard_error"]) for k in (0, -1) if len(own)]
        values = " to ".join(dict.fromkeys(ends)) or "without value,"
        parts.append(f"{name_of(name)} {symbol_of(name)} {values} {_unit(results, name)}")
    span = f"T = {_between(sorted(rows['temperature']))} {_unit(results, 'temperature')}"
    return f"At density {plain(density)} {_unit(results, 'density')} and {span}: {'; '.join(parts)}."


def _agreement(results: Results, name: str, rows: pd.DataFrame) -> str:
    single = rows[rows["temperature"].notna()]
    once = independent(single, "outcome")
    counts = once["outcome"].value_counts()
    tally = ", ".join(f"{counts[word]} {word}" for word in ("agrees", "undecided", "disagrees") if word in counts)
    tally = tally.replace("agrees", "agree").replace("disagrees", "disagree")
    counted = "independent value" if len(once) < len(single) else "value"
    text = f"Against {name}: {_outcome_of(rows)}. Of {_counted(len(once), counted)}, {tally}."
    measured = once[np.isfinite(once["z"])]
    if measured.empty:
        return text
    worst = measured.loc[measured["z"].abs().idxmax()]
    sizes = measured["z"].abs()
    return (
        f"{text} The median deviation is {sizes.median():.1f} combined standard errors, the largest "
        f"{abs(worst['z']):.1f}: {name_of(worst['property'])} at {_where(results, measured.loc[[worst.name]])}."
    )


def _refusals(results: Results) -> Iterator[str]:
    """Stretches of the curve without a value, one sentence for each density, stretch and reason."""
    for (density,), rows in grouped(results.curve, "density"):
        grid = rows.sort_values("temperature").groupby("temperature", sort=True)
        table = grid.agg(refused=("value", lambda value: value.isna().any()), reason=("reason", "first"))
        temperatures, refused = table.index.to_numpy(dtype=float), table["refused"].to_numpy(dtype=bool)
        edges = np.flatnonzero(np.diff(np.concatenate([[False], refused, [False]])))
        for start, end in zip(edges[::2], edges[1::2], strict=True):
            reason = str(table["reason"].iloc[start])
            whole = refused.all()
            ends = f"{plain(temperatures[start])} and {plain(temperatures[end - 1])} {_unit(results, 'temperature')}"
            span = "" if whole else f" between T = {ends}"
            where = f"density {plain(density)} {_unit(results, 'density')}{span}"
            yield f"No reweighted value at {where}. {_reason(results, reason)}"


def _tolerances(results: Results, setup: Setup) -> str:
    """Tolerances asked for, those of absolute size in the units of the report."""
    said = []
    for name, tolerance in setup.tolerance.items():
        sizes = results.verdict.loc[results.verdict["property"] == name, "tolerance"].dropna()
        if isinstance(tolerance, str):
            said.append(f"{unit_text(tolerance)} for {name_of(name)}")
        elif len(sizes):
            said.append(f"{plain(sizes.iloc[0])} {_unit(results, name)} for {name_of(name)}".replace("  ", " "))
    rule = "; such a value agrees only where the 95 % interval of its difference lies inside the tolerance"
    return f" with a tolerance of {_listed(said)}{rule}" if said else ""


def _undecided(results: Results, rows: pd.DataFrame) -> Iterator[str]:
    """Why values of one reference are undecided, one sentence a cause."""
    open_rows = independent(rows[(rows["outcome"] == "undecided") & rows["temperature"].notna()])
    for (reason,), group in grouped(open_rows[open_rows["reason"] != ""], "reason", sort=False):
        yield f"Undecided: {_places(results, group)}. {_reason(results, reason)}"


def _places(results: Results, rows: pd.DataFrame) -> str:
    """Properties with the states they are at, those at the same states together."""
    at: dict[str, list[str]] = {}
    for (name,), own in grouped(rows, "property", sort=False):
        at.setdefault(_where(results, own), []).append(name_of(name))
    return "; ".join(f"{_listed(names)} at {where}" for where, names in at.items())


def _merged(reasons: pd.Series) -> str:
    """Reasons that differ only in a count of effective samples as one, with the range of it."""
    counts = sorted({int(count) for reason in reasons for count in _COUNT.findall(reason)})
    span = _between([*map(float, counts)]) if counts else ""
    return _COUNT.sub(span, str(reasons.iloc[0]))


def _few(sentences: list[str], more: str, table: str) -> list[str]:
    """The first of them, the last of these with a word on the rest."""
    shown = sentences[:_CAUSES_SHOWN]
    if len(sentences) > _CAUSES_SHOWN:
        shown[-1] += f" {table}.csv lists {more}."
    return shown


def _where(results: Results, rows: pd.DataFrame) -> str:
    states = rows[["temperature", "density"]].drop_duplicates()
    if len(states) <= 3:
        return _listed([_state(results, own, density) for (density,), own in grouped(states, "density")])
    span = f"T = {_between(sorted(states['temperature']))} {_unit(results, 'temperature')}"
    return f"{len(states)} states, {span}"


def _state(results: Results, states: pd.DataFrame, density: float) -> str:
    """One or more states of one density."""
    temperatures = _listed([plain(temperature) for temperature in sorted(states["temperature"])])
    return f"T = {temperatures} {_unit(results, 'temperature')}, density {plain(density)} {_unit(results, 'density')}"


def _unit(results: Results, quantity: str) -> str:
    return unit_text(unit_label(quantity, results.units))


def _between(values: list[float]) -> str:
    first, last = plain(values[0]), plain(values[-1])
    return first if math.isclose(values[0], values[-1]) else f"{first} to {last}"


def _counted(number: int, noun: str, plural: str = "") -> str:
    return f"{number} {noun if number == 1 else plural or noun + 's'}"


def _listed(words: list[str]) -> str:
    return " and ".join([", ".join(words[:-1]), words[-1]] if len(words) > 1 else words)


def _reason(results: Results, text: str) -> str:
    said = text.replace(unit_label("temperature", results.units), _unit(results, "temperature"))
    return f"Reason: {said}" if said.endswith((".", "!", "?")) else f"Reason: {said}."
