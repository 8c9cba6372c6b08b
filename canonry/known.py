"""What `canonry reference` shows: which references there are, and their values."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from canonry.notation import symbol_of, unit_text
from canonry.numbers import plain, with_error
from canonry.terminal import aligned
from canonry.units import unit_label
from reference import find, names
from reference.properties import PROPERTIES

__all__ = ["as_text", "described", "names", "values", "values_text"]


def described(name: str) -> dict[str, Any]:
    """One reference: title, source, fluid and range, in reduced units. Raises UnknownReference."""
    found = find(name)
    return {
        "name": found.name,
        "title": found.title,
        "source": str(found.source),
        "how": found.source.how,
        "potential": found.fluid.potential,
        "truncation": found.fluid.truncation,
        "cutoff": found.fluid.cutoff,
        "temperature_range": list(found.temperature_range),
        "density_maximum": found.density_maximum,
        "pressure_maximum": found.pressure_maximum,
        "critical_temperature": found.critical_temperature,
        "critical_density": found.critical_density,
    }


def as_text(record: Mapping[str, Any]) -> str:
    """The same for people."""
    cut = "full potential" if record["cutoff"] is None else f"{record['truncation']} at {record['cutoff']:g} sigma"
    low, high = record["temperature_range"]
    bounds = [f"temperature {low:g} to {high:g}"]
    bounds += [
        f"{key} up to {record[f'{key}_maximum']:g}" for key in ("density", "pressure") if record[f"{key}_maximum"]
    ]
    return "\n".join(
        [
            f"{record['name']}: {record['title']}",
            f"  source: {record['source']}; {record['how']}",
            f"  fluid: {record['potential']}, {cut}",
            f"  range: {', '.join(bounds)} (reduced units)",
        ]
    )


def values(name: str, *, temperatures: Sequence[float], densities: Sequence[float]) -> list[dict[str, Any]]:
    """All properties at all pairs of states, reduced units. Raises UnknownReference, OutOfRange."""
    found = find(name)
    rows = []
    for density in densities:
        for temperature in temperatures:
            for each in PROPERTIES:
                known = found.value(each, temperature=temperature, density=density)
                rows.append(
                    {
                        "reference": found.name,
                        "temperature": temperature,
                        "density": density,
                        "property": each,
                        "value": known.value,
                        "uncertainty": known.uncertainty,
                        "unit": unit_label(each, "reduced"),
                        "accuracy": known.accuracy_note,
                    }
                )
    return rows


def values_text(rows: Sequence[Mapping[str, Any]]) -> str:
    """The same for people; in parentheses one standard uncertainty."""
    body = [
        [
            *(plain(row[name]) for name in ("temperature", "density")),
            row["property"],
            symbol_of(row["property"]),
            with_error(row["value"], row["uncertainty"]),
            unit_text(row["unit"]),
        ]
        for row in rows
    ]
    return aligned([["T", "density", "property", "", "value", "unit"], *body])
