"""The tables of a study directory, in the units a reader asked for."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from canonry.border import Border
from canonry.budget import COVERAGE, Budget, budgets
from canonry.caveats import caveats
from canonry.directory import write
from canonry.findings import TRUST, Check, Curve, Finding, Findings
from canonry.health import CHECKS
from canonry.results import COLUMNS, Results
from canonry.study import COMPARED, Study
from canonry.units import PROPERTIES
from canonry.verdict import Comparison, Verdict
from estimators.force_sampling import Forced
from estimators.surface.helmholtz import HeldOut
from sampler.fluid import State

if TYPE_CHECKING:
    import pandas as pd

    from reference import Reference

__all__ = ["TABLES", "assemble", "estimates_table", "save", "verdict_table"]

TABLES = (
    *("properties", "curve", "surface", "structure", "structure_factor"),
    *("health", "budget", "verdict", "summary"),
)
_DIGITS = "%.10g"
_SPECIES = "1"  # the only one of a pure fluid


def assemble(
    study: Study,
    findings: Findings,
    comparisons: Sequence[Comparison],
    border: Border,
    *,
    references: Sequence[Reference] = (),
    provenance: Mapping[str, str] | None = None,
) -> Results:
    """Everything a report shows; `references` are drawn as curves."""
    return Results(
        title=study.title,
        study_toml=study.to_toml(),
        units=border.kind,
        properties=estimates_table(findings.properties, border),
        curve=estimates_table(findings.curve, border),
        surface=estimates_table(findings.surface, border),
        held_out=_table("held_out", (_held_out(each, border) for each in findings.held_out)),
        structure=_structure(findings, border),
        structure_factor=_structure_factor(findings, border),
        verdict=verdict_table(comparisons, border),
        summary=_summary(findings, border),
        histograms=_histograms(findings, border),
        ledger=_ledgers(findings, border),
        overlap=_overlaps(findings, border),
        reference_curve=_reference_curve(study, findings, references, border),
        equilibration=_table(
            "equilibration",
            (
                {**_state(cut.state, border), "repeat": cut.repeat, "cut": cut.cut, "samples": cut.samples}
                | {"effective_samples": cut.effective_samples}
                for cut in findings.cuts
            ),
        ),
        health=_health(findings, border),
        budget=_table("budget", (_budget(each, border) for each in budgets(study, findings))),
        caveats=tuple(caveats(study, findings, border)),
        provenance=provenance or {},
    )


def save(results: Results, directory: Path) -> None:
    """Write the tables of a study directory, each whole or not at all. Raises OSError."""
    for name in TABLES:
        table = getattr(results, name)
        write(directory / f"{name}.csv", table.to_csv(index=False, float_format=_DIGITS, lineterminator="\n"))


def verdict_table(comparisons: Iterable[Comparison], border: Border) -> pd.DataFrame:
    """Every value held against every reference; the row without a state is the outcome of all together."""
    rows: list[dict[str, Any]] = []
    for comparison in comparisons:
        rows += (_verdict(verdict, comparison.reference, border) for verdict in comparison.verdicts)
        rows.append({"reference": comparison.reference, "outcome": comparison.outcome})
    return _table("verdict", rows)


def _table(name: str, rows: Iterable[Mapping[str, Any]]) -> pd.DataFrame:
    import pandas as pd

    return pd.DataFrame(list(rows), columns=list(COLUMNS[name]))


def _state(state: State, border: Border) -> dict[str, float]:
    return {name: border.coordinate(name, getattr(state, name)) for name in ("temperature", "density")}


def _finite(value: float) -> float:
    """The value, or nothing where it is not finite."""
    return value if math.isfinite(value) else math.nan


def estimates_table(findings: Iterable[Finding], border: Border) -> pd.DataFrame:
    """One row a finding, with the columns of properties.csv."""
    return _table("properties", (_estimate(finding, border) for finding in findings))


def _estimate(finding: Finding, border: Border) -> dict[str, Any]:
    kind, estimate = finding.property, finding.estimate
    value, error = (math.nan, math.nan) if estimate is None else (estimate.value, estimate.standard_error)
    return {
        **_state(finding.state, border),
        "temperature_unit": border.label("temperature"),
        "density_unit": border.label("density"),
        "particles": finding.state.particles,
        "property": kind,
        "value": border.value(kind, value),
        "standard_error": _finite(border.value(kind, error)),
        "unit": border.label(kind),
        "method": finding.method,
        "headline": finding.headline,
        "effective_samples": _finite(finding.effective_samples),
        "trust": finding.trust,
        "reason": finding.reason,
    }


def _verdict(verdict: Verdict, reference: str, border: Border) -> dict[str, Any]:
    row = _estimate(verdict.finding, border)
    kind, known = verdict.finding.property, verdict.known
    return {name: row[name] for name in ("temperature", "density", "property", "value", "standard_error")} | {
        "reference": reference,
        "reference_value": math.nan if known is None else border.value(kind, known.value),
        "reference_uncertainty": math.nan if known is None else border.value(kind, known.uncertainty),
        "z": verdict.z,
        "outcome": verdict.outcome,
        "tolerance": border.value(kind, verdict.limit),
        "reason": verdict.reason,
    }


def _summary(findings: Findings, border: Border) -> pd.DataFrame:
    """One row a state: every headline value with its error and unit, and the least trust in any that is there."""
    import pandas as pd

    rows: dict[State, dict[str, Any]] = {}
    order = [name for name in PROPERTIES if any(name == finding.property for finding in findings.headlines)]
    for finding in sorted(findings.headlines, key=lambda each: order.index(each.property)):
        row, cells = rows.setdefault(finding.state, {}), _estimate(finding, border)
        if not row:
            row |= {key: cells[key] for key in ("temperature", "temperature_unit", "density", "density_unit")}
            row |= _set_temperature(finding, border)
            row |= {"particles": finding.state.particles, "trust": "ok"}
        if finding.estimate is not None:
            row["trust"] = max(row["trust"], finding.trust, key=TRUST.index)
        name = finding.property
        row |= {name: cells["value"], f"{name}_error": cells["standard_error"], f"{name}_unit": cells["unit"]}
    return pd.DataFrame(list(rows.values()))


def _set_temperature(finding: Finding, border: Border) -> dict[str, float]:
    """What the study asked for, where the temperature of the state is a measured one."""
    if finding.temperature is None:
        return {}
    (temperature,) = {temperature for temperature, *_ in finding.temperature.influence}
    return {"set_temperature": border.coordinate("temperature", temperature)}


def _health(findings: Findings, border: Border) -> pd.DataFrame:
    """A row for each reading, by state and in the order of the checks; properties that the study has, after a space."""
    known = {finding.property for finding in findings.properties}
    order = list(CHECKS)

    def row(check: Check) -> dict[str, Any]:
        reading = check.reading
        return {
            **_state(check.state, border),
            "repeat": reading.repeat,
            "check": reading.check,
            "statistic": _finite(reading.statistic),
            "threshold": reading.threshold,
            "passed": reading.passed,
            "touches": " ".join(name for name in CHECKS[reading.check].touches if name in known),
            "meaning": reading.meaning,
        }

    def rank(check: Check) -> tuple[float, float, int]:
        return check.state.density, check.state.temperature, order.index(check.reading.check)

    return _table("health", map(row, sorted(findings.health, key=rank))).astype({"repeat": "Int64"})


def _budget(budget: Budget, border: Border) -> dict[str, Any]:
    name, estimate = budget.finding.property, budget.finding.estimate
    parts = {
        part: getattr(budget, part) for part in ("statistical", "time_step", "cutoff", "finite_size", "equilibration")
    }
    return {
        **_state(budget.finding.state, border),
        "property": name,
        "value": math.nan if estimate is None else border.value(name, estimate.value),
        "unit": border.label(name),
        **{
            part: size if isinstance(size, str) else float(_DIGITS % border.value(name, size))
            for part, size in parts.items()
        },
        "expanded": COVERAGE * border.value(name, budget.combined),
        "coverage_factor": COVERAGE,
    }


def _held_out(each: HeldOut, border: Border) -> dict[str, Any]:
    reduced = {"value": each.value, "predicted": each.predicted, "combined_error": each.combined_error}
    return {
        "temperature": border.coordinate("temperature", each.temperature),
        "density": border.coordinate("density", each.density),
        "property": each.name,
        **{name: border.value(each.name, value) for name, value in reduced.items()},
        "z": each.z,
    }


def _structure_factor(findings: Findings, border: Border) -> pd.DataFrame:
    import pandas as pd

    parts = [
        pd.DataFrame(
            {
                **_state(state, border),
                "temperature_unit": border.label("temperature"),
                "density_unit": border.label("density"),
                "k": scattering.k / border.value("length", 1.0),
                "k_unit": f"1/{border.label('length')}",
                "s": scattering.s,
                "standard_error": np.where(np.isfinite(scattering.standard_error), scattering.standard_error, np.nan),
            },
            columns=list(COLUMNS["structure_factor"]),
        )
        for state, scattering in findings.scatterings.items()
    ]
    return pd.concat(parts, ignore_index=True) if parts else _table("structure_factor", [])


def _structure(findings: Findings, border: Border) -> pd.DataFrame:
    import pandas as pd

    columns = list(COLUMNS["structure"])
    columns[1:1], columns[3:3] = ["temperature_unit"], ["density_unit"]
    parts = [
        pd.DataFrame(
            {
                **_state(state, border),
                "temperature_unit": border.label("temperature"),
                "density_unit": border.label("density"),
                "species_a": _SPECIES,
                "species_b": _SPECIES,
                "r": border.value("length", 1.0) * structure.r,
                "r_unit": border.label("length"),
                "g": structure.g,
                "standard_error": np.where(np.isfinite(structure.standard_error), structure.standard_error, np.nan),
                "coordination": structure.coordination,
                **_forced(structure.forced),
            },
            columns=columns,
        )
        for state, structure in findings.structures.items()
    ]
    return pd.concat(parts, ignore_index=True) if parts else pd.DataFrame(columns=columns)


def _forced(forced: Forced | None) -> dict[str, Any]:
    if forced is None:
        return {"g_forced": math.nan, "forced_error": math.nan}
    known = np.isfinite(forced.standard_error)
    return {"g_forced": forced.g, "forced_error": np.where(known, forced.standard_error, np.nan)}


def _curves(name: str, curves: Sequence[Curve], columns: Mapping[str, Any]) -> pd.DataFrame:
    import pandas as pd

    parts = [pd.DataFrame({key: make(curve) for key, make in columns.items()}) for curve in curves]
    return pd.concat(parts, ignore_index=True) if parts else _table(name, [])


def _histograms(findings: Findings, border: Border) -> pd.DataFrame:
    energy = border.value("residual_energy", 1.0)
    return _curves(
        "histograms",
        findings.histograms,
        {
            "temperature": lambda curve: border.coordinate("temperature", curve.state.temperature),
            "density": lambda curve: border.coordinate("density", curve.state.density),
            "energy": lambda curve: energy * curve.x,
            "probability": lambda curve: curve.y / energy,
        },
    )


def _ledgers(findings: Findings, border: Border) -> pd.DataFrame:
    energy, time = border.value("residual_energy", 1.0), border.value("time", 1.0)
    return _curves(
        "ledger",
        findings.ledgers,
        {
            "temperature": lambda curve: border.coordinate("temperature", curve.state.temperature),
            "density": lambda curve: border.coordinate("density", curve.state.density),
            "repeat": lambda curve: curve.repeat,
            "time": lambda curve: time * curve.x,
            "drift": lambda curve: energy * curve.y,
        },
    )


def _overlaps(findings: Findings, border: Border) -> pd.DataFrame:
    def row(low: State, high: State, value: float) -> dict[str, float]:
        ends = {"temperature_a": low.temperature, "temperature_b": high.temperature}
        where = {name: border.coordinate("temperature", end) for name, end in ends.items()}
        return {"density": border.coordinate("density", low.density), **where, "overlap": value}

    return _table("overlap", (row(each.low, each.high, each.value) for each in findings.overlaps))


def _reference_curve(study: Study, findings: Findings, references: Sequence[Reference], border: Border) -> pd.DataFrame:
    """The references wherever they hold, at the rungs and on the grid of the curve."""
    ideal = {} if study.ideal_heat_capacity is None else {"ideal_heat_capacity": study.ideal_heat_capacity}
    told = (*findings.curve, *findings.headlines)
    points = dict.fromkeys((f.state, f.property) for f in told if f.property in COMPARED)
    rows = []
    for reference in references:
        for state, name in sorted(points):
            if reference.covers(state.temperature, state.density):
                continue
            known = reference.value(name, temperature=state.temperature, density=state.density, **ideal)
            value, uncertainty = border.value(name, known.value), border.value(name, known.uncertainty)
            cells = {"property": name, "value": value, "uncertainty": uncertainty, "reference": reference.name}
            rows.append(_state(state, border) | cells)
    return _table("reference_curve", rows)
