"""The whole job: sample what is missing, estimate, compare, report."""

from __future__ import annotations

import csv
from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

from canonry.beside import Beside, asked
from canonry.border import Border
from canonry.directory import locate, stored, write
from canonry.ladder import resolved
from canonry.results import COLUMNS
from canonry.sampling import is_complete
from canonry.study import Study
from canonry.units import Kind

if TYPE_CHECKING:
    import pandas as pd

    from canonry.results import Results

__all__ = ["compare", "estimate", "is_finished", "report", "run"]

_TABLES = (
    *("properties", "curve", "surface", "structure", "structure_factor"),
    *("health", "budget", "verdict", "summary"),
)
_FILES = (*(f"{name}.csv" for name in _TABLES), "report.html")

Place = str | Path
Row = dict[str, str]
Tell = Callable[[str], None]


def run(
    study: Place,
    *,
    into: Place | None = None,
    workers: int | None = None,
    units: Kind | None = None,
    step_bias: bool = False,
    second_size: int | None = None,
    constant_energy: bool = False,
) -> Results:
    """Sample what is missing, write all tables and the report, and return what they hold.

    study : a study file, or its directory
    into : the study directory, by default the name of the study file without its suffix, in the current directory
    workers : threads, by default one for every core; results do not depend on it
    units : of tables and report, by default those the study was written in
    step_bias : sample the ends of each isochore exactly too, to see what the time step shifts
    second_size : sample them with so many particles too, to see what the size of the box shifts
    constant_energy : sample them without a bath too, for the heat capacity by another route
    Raises UserError, or an error of sampler, estimators or reference, each of them also a built-in kind.
    """
    from canonry.until import complete

    found, directory = locate(Path(study), None if into is None else Path(into))
    Border.of(found, units)
    found = resolved(found, directory, workers=workers)
    beside = asked(found, directory, step_bias=step_bias, second_size=second_size, constant_energy=constant_energy)
    complete(found, directory, workers=workers)
    for each in beside:
        complete(each.study, each.place, workers=workers)
    return report(directory, units=units)


def estimate(directory: Place, *, units: Kind | None = None, watch: Tell | None = None) -> Results:
    """Tables from what a study directory holds, also while it is being sampled; returns them and what a report needs.

    watch : called with a few words on what is worked on
    Raises UserError where there is nothing to estimate from, BadSeries or NotSolved where samples cannot be used.
    """
    from canonry.estimation import findings
    from canonry.provenance import provenance
    from canonry.tables import assemble, save
    from canonry.verdict import against, compare

    directory = Path(directory)
    study = stored(directory)
    border = Border.of(study, units)
    found = findings(study, directory, border, watch=watch)
    references = [against(name, study.fluid) for name in study.compare.against]
    results = assemble(
        study,
        found,
        [compare(found.headlines, reference, study) for reference in references],
        border,
        references=references,
        provenance=provenance(study, directory),
    )
    save(results, directory)
    return results


def report(directory: Place, *, units: Kind | None = None, watch: Tell | None = None) -> Results:
    """Tables and report.html from what a study directory holds; raises as `estimate` does."""
    from canonry.report.page import html

    results = estimate(directory, units=units, watch=watch)
    if watch is not None:
        watch("writing the report")
    write(Path(directory) / "report.html", html(results))
    return results


def compare(
    directory: Place, *, against: Sequence[str] | None = None, units: Kind | None = None, watch: Tell | None = None
) -> pd.DataFrame:
    """Headline values held against references, and a row without a state for all of them together; writes nothing.

    against : names of references for the same model, by default those of the study
    Raises UserError where there is nothing to compare or a reference describes another model.
    """
    from canonry.errors import UserError
    from canonry.estimation import findings
    from canonry.tables import verdict_table
    from canonry.verdict import against as reference_for
    from canonry.verdict import compare as held_against

    directory = Path(directory)
    study = stored(directory)
    border = Border.of(study, units)
    names = study.compare.against if against is None else tuple(dict.fromkeys(against))
    if not names:
        raise UserError(f"{directory}: the study names no reference; what is needed is --against, or compare.against")
    references = [reference_for(name, study.fluid) for name in names]
    headlines = findings(study, directory, border, watch=watch).headlines
    return verdict_table([held_against(headlines, reference, study) for reference in references], border)


def is_finished(study: Study, directory: Path, units: Kind | None = None, *, beside: Sequence[Beside] = ()) -> bool:
    """Whether all samples, tables and the report of a study are there and in these units; takes a moment only.

    beside : samplings whose samples are to be there too
    """
    above = [f"../{name}" for name in _FILES]
    if not (
        is_complete(study, directory, _FILES) and all(is_complete(each.study, each.place, above) for each in beside)
    ):
        return False
    tables = {name: _rows(directory / f"{name}.csv", columns) for name, columns in COLUMNS.items() if name in _TABLES}
    found = {name: rows for name, rows in tables.items() if rows is not None}
    return len(found) == len(_TABLES) and _cover(study, found, Border.of(study, units).label("temperature"))


def _cover(study: Study, tables: Mapping[str, list[Row]], unit: str) -> bool:
    """Whether tables hold every state and its headlines, in these units, readings, the curve, and every outcome."""
    headlines = [row for row in tables["properties"] if (row["headline"], row["temperature_unit"]) == ("True", unit)]
    states = Counter(row["property"] for row in headlines)
    outcomes = {row["reference"] for row in tables["verdict"] if not row["property"]}
    counts = (len(tables["summary"]), states["residual_heat_capacity"], states["pressure"])
    pooled = study.sampling.bath and len(study.isochores) < len(study.states)
    whole = {*counts} == {len(study.states)} and bool(tables["curve"]) == pooled
    return whole and all(tables[name] for name in ("health", "budget")) and outcomes == {*study.compare.against}


def _rows(path: Path, columns: Sequence[str]) -> list[Row] | None:
    """Rows of a table; None where it is damaged or lacks one of the columns."""
    try:
        with path.open(encoding="utf-8", newline="") as file:
            reader = csv.DictReader(file, strict=True)
            names, rows = reader.fieldnames or (), list(reader)
    except (UnicodeDecodeError, csv.Error):
        return None
    whole = all(None not in row and None not in row.values() for row in rows)
    return rows if whole and {*columns} <= {*names} else None
