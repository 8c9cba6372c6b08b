"""The verdict in plain language: what was asked, what came out, whether it agrees, what should not be trusted."""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import TYPE_CHECKING

import numpy as np

from canonry.notation import name_of, symbol_of, unit_text
from canonry.numbers import plain, with_error
from canonry.report.methods import Setup
from canonry.report.rows import grouped, headline
from canonry.results import Results
from canonry.units import unit_label

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["agreement", "answers", "doubts", "heat_capacity_name", "outcome", "question", "states_in_words"]

_ANSWERS_SHOWN = 4


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
    heat, fluid = name_of(heat_capacity_name(results)), f"{setup.potential} fluid, {setup.cut}"
    against = f", held against {_listed(list(setup.against))}" if setup.against else ""
    return (
        f"Asked: {heat} and pressure of the {fluid}; {setup.particles} particles, {states_in_words(results)}{against}."
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
    return [_agreement(results, name, rows) for (name,), rows in grouped(results.verdict, "reference", sort=False)]


def doubts(results: Results) -> list[str]:
    """What should not be trusted, worst first: headline values with their reason, refused stretches of the curve."""
    found, values = [], headline(results)
    for trust, words in (("no", "Do not use"), ("caution", "With caution")):
        rows = values[values["trust"] == trust].fillna({"reason": "none given"})
        for (reason,), group in grouped(rows, "reason", sort=False):
            names = _listed(list(dict.fromkeys(name_of(name) for name in group["property"])))
            found.append(f"{words}: {names} at {_where(results, group)}. Reason: {_sentence(reason)}")
    return [*found, *_refusals(results)]


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
    counts = single["outcome"].value_counts()
    tally = ", ".join(f"{counts[word]} {word}" for word in ("agrees", "undecided", "disagrees") if word in counts)
    tally = tally.replace("agrees", "agree").replace("disagrees", "disagree")
    text = f"Against {name}: {_outcome_of(rows)}. Of {_counted(len(single), 'value')}, {tally}."
    measured = single[np.isfinite(single["z"])]
    if measured.empty:
        return text
    worst = measured.loc[measured["z"].abs().idxmax()]
    sizes = measured["z"].abs()
    return (
        f"{text} The median deviation is {sizes.median():.1f} combined standard errors, the largest "
        f"{abs(worst['z']):.1f}: {name_of(worst['property'])} at {_state(results, worst)}."
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
            span = "" if whole else f" between T = {plain(temperatures[start])} and {plain(temperatures[end - 1])}"
            yield (
                f"No reweighted value at density {plain(density)} {_unit(results, 'density')}{span}. "
                f"Reason: {_sentence(reason)}"
            )


def _where(results: Results, rows: pd.DataFrame) -> str:
    states = rows[["temperature", "density"]].drop_duplicates()
    if len(states) <= 3:
        return _listed([_state(results, state) for _, state in states.iterrows()])
    span = f"T = {_between(sorted(states['temperature']))} {_unit(results, 'temperature')}"
    return f"{len(states)} states, {span}"


def _state(results: Results, row: pd.Series) -> str:
    return (
        f"T = {plain(row['temperature'])} {_unit(results, 'temperature')}, density {plain(row['density'])} "
        f"{_unit(results, 'density')}"
    )


def _unit(results: Results, quantity: str) -> str:
    return unit_text(unit_label(quantity, results.units))


def _between(values: list[float]) -> str:
    first, last = plain(values[0]), plain(values[-1])
    return first if math.isclose(values[0], values[-1]) else f"{first} to {last}"


def _counted(number: int, noun: str, plural: str = "") -> str:
    return f"{number} {noun if number == 1 else plural or noun + 's'}"


def _listed(words: list[str]) -> str:
    return " and ".join([", ".join(words[:-1]), words[-1]] if len(words) > 1 else words)


def _sentence(text: str) -> str:
    return text if text.endswith((".", "!", "?")) else f"{text}."
