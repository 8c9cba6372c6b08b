"""The tables a terminal shows: the plan before, values and verdict after."""

from __future__ import annotations

import csv
import math
import shutil
import textwrap
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from typing import Any

from canonry.border import Border
from canonry.failures import failures
from canonry.notation import symbol_of, unit_text
from canonry.numbers import plain, with_error
from canonry.plan import Plan
from canonry.proposal import Proposal
from canonry.provenance import duration
from canonry.study import Study
from canonry.units import UNITS, Kind

__all__ = ["aligned", "closing_text", "left_text", "plan_text", "reweighted_text", "verdict_text", "wrapped"]

_MARKS = {"ok": "", "caution": "*", "no": "!", "": ""}
_LEGENDS = {"caution": "* with caution", "no": "! not to be trusted"}
_DIGITS = 5  # of values without error

Row = Mapping[str, Any]


def aligned(rows: Sequence[Sequence[str]]) -> str:
    """Rows of equal length as right-aligned columns, two spaces apart."""
    widths = [max(map(len, column)) for column in zip(*rows, strict=True)]
    return "\n".join("  ".join(map(str.rjust, row, widths)).rstrip() for row in rows)


def wrapped(sentence: str) -> str:
    """A sentence in lines no wider than the terminal, 80 characters where there is none."""
    width = shutil.get_terminal_size((80, 24)).columns
    return textwrap.fill(sentence, width, subsequent_indent="  ", break_long_words=False, break_on_hyphens=False)


def plan_text(study: Study, plan: Plan, border: Border) -> str:
    """The plan as a table with its cost and warnings; values in both kinds of units where the study has both."""
    kinds: list[Kind] = ["reduced"] if study.scale is None else ["reduced", "SI"]
    borders = [Border(kind, study.scale) for kind in kinds]
    columns = [(name, each) for name in ("temperature", "density") for each in borders]
    errors = [*plan.rungs[0].standard_errors]
    words = {"temperature": "T", "density": "density"}
    heads = [
        [words[name] if each is borders[0] else "" for name, each in columns] + ["particle-", "overlap"],
        [unit_text(each.label(name)) for name, each in columns] + ["steps", "with next"],
    ]
    heads[0] += [f"± {symbol_of(name)}" for name in errors]
    heads[1] += [unit_text(border.label(name)) for name in errors]
    body = [
        [plain(each.coordinate(name, getattr(rung.state, name))) for name, each in columns]
        + [f"{rung.particle_steps:.3g}", "-" if rung.overlap is None else f"{rung.overlap:.2f}"]
        + [_two_digits(border.value(name, rung.standard_errors[name])) for name in errors]
        for rung in plan.rungs
    ]
    sampling, fluid = study.sampling, study.fluid

    def both(name: str, value: float) -> str:
        return " = ".join(each.text(name, value) for each in borders)

    bath = f"friction {both('friction', sampling.friction)}" if sampling.bath else "no bath"
    precision = f"{'mixed' if sampling.is_mixed else 'double'} precision"
    lines = [
        f"{study.title}",
        f"{study.states[0].particles} particles, cutoff {both('length', fluid.cutoff)}, {fluid.truncation}",
        f"{sampling.scheme}, time step {both('time', sampling.time_step)}, {bath}, {precision}",
        f"{sampling.settling} + {sampling.steps} steps, repeats: {plan.repeats}",
        *_until_text(study, border),
        "",
        aligned([*heads, *body]),
        "",
        f"Cost: {plan.particle_steps:.3g} particle-steps, about {duration(max(plan.seconds, 1.0))} of sampling with "
        f"{plan.workers} worker{'' if plan.workers == 1 else 's'} on this machine.",
    ]
    foretold = "Overlaps and standard errors (±, of all rungs of a density together) are predicted from short runs."
    told = [foretold, *_step_texts(study, plan, border), *(f"Warning: {warning}" for warning in plan.warnings)]
    return "\n".join([*lines, *map(wrapped, told)])


def _two_digits(error: float) -> str:
    return f"{error:#.2g}".removesuffix(".") if math.isfinite(error) else "-"


def _until_text(study: Study, border: Border) -> list[str]:
    """What [until] asks for."""
    if study.until is None:
        return []
    limits = (
        f"{symbol_of(name)} {limit.text if limit.relative else border.text(name, limit.value)}"
        for name, limit in study.until.limits.items()
    )
    return [f"until errors are at most {', '.join(limits)}, or {study.until.steps_at_most} steps"]


def _step_texts(study: Study, plan: Plan, border: Border) -> Iterator[str]:
    """What time step is proposed for the bias asked for, a sentence a density."""
    if plan.bias is None:
        return
    if study.sampling.scheme == "metropolised":
        yield "Time step: metropolised shifts nothing, whatever the time step."
    elif not plan.proposals:
        yield f"Time step: none is proposed for {study.sampling.scheme}; what is needed is a scheme with a bath."
    for each in plan.proposals:
        yield _step_text(each, border.text("residual_energy", plan.bias), border)


def _step_text(proposal: Proposal, bias: str, border: Border) -> str:
    density, temperature = (border.text(name, getattr(proposal.state, name)) for name in ("density", "temperature"))
    why = " (a run with a longer one may fly apart)" if proposal.is_limit else ""
    known = "measured" if proposal.measured else "predicted"
    shifts = " and ".join(
        f"{symbol_of(name)} by {_signed(border.value(name, shift.value), border.value(name, shift.standard_error))} "
        f"{unit_text(border.label(name))}"
        for name, shift in proposal.shifts.items()
    )
    return (
        f"Density {density}: a time step of at most {_rounded_down(border, proposal.time_step)}{why} keeps the shift "
        f"of u below {bias}. That of the study shifts {shifts}, {known} at T = {temperature}."
    )


def _rounded_down(border: Border, time_step: float) -> str:
    """A time step to two digits, none of them rounded up, with its unit."""
    value = border.value("time", time_step)
    last = 10.0 ** (math.floor(math.log10(value)) - 1)
    return f"{plain(math.floor(value / last) * last, 2)} {unit_text(border.label('time'))}"


def _signed(value: float, error: float) -> str:
    return f"{'+' if value > 0.0 else ''}{with_error(value, error)}"


def left_text(directory: Path, particle_steps: int, plan: Plan) -> str:
    """What is still to be sampled of a plan, where a directory holds a part or all of it."""
    if particle_steps == 0:
        return f"{directory} holds all these samples already."
    share = 100.0 * particle_steps / plan.particle_steps
    return f"{directory} holds a part already; {particle_steps:.3g} particle-steps ({share:.0f} %) are left to do."


def _rows_of(directory: Path, table: str) -> list[Row]:
    """The rows of one table of a study directory."""
    with (directory / f"{table}.csv").open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def closing_text(directory: Path) -> str:
    """Temperature, heat capacity and pressure with errors, reference, z and outcome, from the tables of a directory.

    Then every health check that failed, with the sentence of its worst reading.
    """
    headlines = [row for row in _rows_of(directory, "properties") if row["headline"] == "True"]
    known = list(dict.fromkeys(row["property"] for row in headlines))
    wanted = ["heat_capacity" if "heat_capacity" in known else "residual_heat_capacity", "pressure"]
    names = [name for name in wanted if name in known] or known[:2]
    values = [row for row in headlines if row["property"] in names]
    verdicts = _rows_of(directory, "verdict")
    references = list(dict.fromkeys(row["reference"] for row in verdicts))
    blocks = [_block(values, names, [row for row in verdicts if row["reference"] == each]) for each in references]
    legend = [text for trust, text in _LEGENDS.items() if any(row["trust"] == trust for row in values)]
    shown = [*(blocks or [_block(values, names, [])]), *([", ".join(legend)] if legend else [])]
    return "\n\n".join([*shown, _health_text(_rows_of(directory, "health"), values[0])])


def verdict_text(verdicts: Sequence[Row], border: Border) -> str:
    """Every value compared, one block a reference, under its outcome."""
    blocks = []
    for reference in dict.fromkeys(row["reference"] for row in verdicts):
        own = [row for row in verdicts if row["reference"] == reference]
        heads = ["T", "density", "property", "value", "reference", "z", "outcome"]
        units = [unit_text(border.label(name)) for name in ("temperature", "density")]
        body = [
            [plain(_number(row[name])) for name in ("temperature", "density")]
            + [symbol_of(row["property"]), _value(row), *_compared(row)]
            for row in own
            if row["property"] in UNITS
        ]
        blocks.append(f"Against {reference}: {_overall(own)}\n{aligned([heads, units + [''] * 5, *body])}")
    return "\n\n".join(blocks)


def reweighted_text(rows: Sequence[Row], border: Border) -> str:
    """One row a state: heat capacity, pressure and energy; then why there is none at the others."""
    answered = [row for row in rows if math.isfinite(_number(row["value"]))]
    refused = {
        (row["temperature"], None if math.isnan(row["density"]) else row["density"]): row["reason"]
        for row in rows
        if not math.isfinite(_number(row["value"]))
    }
    known = list(dict.fromkeys(row["property"] for row in answered))
    heat = "heat_capacity" if "heat_capacity" in known else "residual_heat_capacity"
    names = [name for name in (heat, "pressure", "residual_energy") if name in known]
    shown = [_block([row for row in answered if row["property"] in names], names, [])] if answered else []
    legend = [text for trust, text in _LEGENDS.items() if any(row["trust"] == trust for row in answered)]
    shown += [", ".join(legend)] if legend else []
    labels = [unit_text(border.label(name)) for name in ("temperature", "density")]
    for (temperature, density), reason in refused.items():
        at = f"T = {plain(temperature)} {labels[0]}"
        at += "" if density is None else f", density {plain(density)} {labels[1]}"
        shown.append(wrapped(f"Refused at {at}: {reason}."))
    return "\n\n".join(shown)


def _block(values: Sequence[Row], names: Sequence[str], verdicts: Sequence[Row]) -> str:
    """One row a state: each property with error, and beside it the reference, z and outcome where there is one."""
    compared = {(row["temperature"], row["density"], row["property"]): row for row in verdicts}
    states = list(dict.fromkeys((row["temperature"], row["density"]) for row in values))
    found = {(row["temperature"], row["density"], row["property"]): row for row in values}
    first = values[0]
    beside = ["reference", "z", "outcome"] if verdicts else []
    heads = ["T", "density", *(cell for name in names for cell in (symbol_of(name), *beside))]
    units = [unit_text(first[f"{name}_unit"]) for name in ("temperature", "density")]
    for name in names:
        unit = next((row["unit"] for row in values if row["property"] == name), "")
        units += [unit_text(unit), *("" for _ in beside)]
    body = []
    for state in states:
        cells = [plain(_number(each)) for each in state]
        for name in names:
            row = found.get((*state, name))
            cells.append("-" if row is None else _value(row) + _MARKS[row["trust"]])
            if verdicts:
                cells += _compared(compared.get((*state, name)))
        body.append(cells)
    title = [f"Against {verdicts[0]['reference']}: {_overall(verdicts)}"] if verdicts else []
    return "\n".join([*title, aligned([heads, units, *body])])


def _health_text(readings: Sequence[Row], units: Row) -> str:
    failed = failures(readings)
    if not failed:
        return f"Health: all {len(readings)} readings of the checks are within their limits."
    lines = []
    for each in failed:
        (temperature, density), more = each.states[0], len(each.states) - 1
        at = f"T = {plain(temperature)} {unit_text(units['temperature_unit'])}"
        at += f", density {plain(density)} {unit_text(units['density_unit'])}"
        others = f" and {more} more state{'s' if more > 1 else ''}" if more else ""
        lines.append(wrapped(f"Failed check: {each.check} at {at}{others}: {each.meaning}."))
    return "\n".join(lines)


def _value(row: Row) -> str:
    return with_error(_number(row["value"]), _number(row["standard_error"]))


def _compared(row: Row | None) -> list[str]:
    if row is None:
        return ["-", "-", "-"]
    z = _number(row["z"])
    return [plain(_number(row["reference_value"]), _DIGITS), f"{z:+.1f}" if math.isfinite(z) else "-", row["outcome"]]


def _overall(verdicts: Sequence[Row]) -> str:
    return next(str(row["outcome"]) for row in verdicts if row["property"] not in UNITS)


def _number(cell: object) -> float:
    """A cell of a table as a number, not a number where it is empty."""
    return float(str(cell)) if cell not in ("", None) else math.nan
