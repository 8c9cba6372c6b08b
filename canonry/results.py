"""Everything a report shows: the record between the tables of a study directory and the page."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Literal

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["COLUMNS", "Results"]

_ESTIMATES = (
    "temperature,temperature_unit,density,density_unit,particles,property,value,standard_error,unit,method,headline,"
    "effective_samples,trust,reason"
)
COLUMNS: Mapping[str, tuple[str, ...]] = {
    name: tuple(columns.split(","))
    for name, columns in {
        "properties": _ESTIMATES,
        "curve": _ESTIMATES,
        "surface": _ESTIMATES,
        "structure_factor": "temperature,temperature_unit,density,density_unit,k,k_unit,s,standard_error",
        "held_out": "temperature,density,property,value,predicted,combined_error,z",
        "structure": "temperature,density,species_a,species_b,r,r_unit,g,standard_error,coordination,"
        "g_forced,forced_error",
        "verdict": "temperature,density,property,value,standard_error,reference,reference_value,reference_uncertainty,"
        "z,outcome,tolerance,reason",
        "summary": "temperature,density",
        "histograms": "temperature,density,energy,probability",
        "ledger": "temperature,density,repeat,time,drift",
        "overlap": "density,temperature_a,temperature_b,overlap",
        "reference_curve": "density,temperature,property,value,uncertainty,reference",
        "equilibration": "temperature,density,repeat,cut,samples,effective_samples",
        "budget": "temperature,density,property,value,unit,statistical,time_step,cutoff,finite_size,equilibration,"
        "expanded,coverage_factor",
        "health": "temperature,density,repeat,check,statistic,threshold,passed,touches,meaning",
    }.items()
}
"""Columns each table must have; it may have more, and no rows."""


@dataclass(frozen=True)
class Results:
    """What one study gave. Every table is in the study's units and marks a state by the same temperature and density.

    title : the study's title
    study_toml : the study as run, complete with defaults
    units : 'reduced' (energies in epsilon, times in sigma sqrt(m/epsilon)) or 'SI' (kJ/mol, ps)
    properties, curve, structure, structure_factor, verdict, summary, health, budget : tables of the study directory;
        `headline` holds booleans. A verdict row without temperature and property is the overall outcome of its
        reference; `tolerance` is a difference in the unit of the property, empty where there is none; `reason` says why
        a row is undecided
    surface : every property on a grid of temperatures and densities, from the surface through all rungs
    held_out : what was measured at a rung beside what the surface says without that rung
    histograms : probability density of the energy per particle, bin centres in rising order, one curve a rung
    ledger : change of K + U_dyn + ledger per particle since the first sample (of K + U_dyn where no bath acts)
    overlap : shared phase space of neighbouring rungs of an isochore, between 0 and 1
    reference_curve : the references on a fine temperature grid; `uncertainty` is one standard uncertainty
    equilibration : per repeat, `cut` samples taken off at the start of the `samples` recorded; `effective_samples`
        behind the energy after the cut
    health : what every check read; an empty `repeat` stands for all repeats together, `touches` lists properties with a
        space between them; a check of two neighbouring rungs stands at the colder one
    budget : what each source adds to the standard uncertainty of a headline value, or words where there is no number;
        `expanded` is all that is known, in squares, times the coverage factor
    caveats : what this study's reader must know beyond the caveats of the model, one sentence each
    provenance : label to text, in the order shown: versions, seed, machine, wall time
    Raises ValueError when a table lacks a column.
    """

    title: str
    study_toml: str
    units: Literal["reduced", "SI"]
    properties: pd.DataFrame
    curve: pd.DataFrame
    structure: pd.DataFrame
    structure_factor: pd.DataFrame
    surface: pd.DataFrame
    held_out: pd.DataFrame
    verdict: pd.DataFrame
    summary: pd.DataFrame
    histograms: pd.DataFrame
    ledger: pd.DataFrame
    overlap: pd.DataFrame
    reference_curve: pd.DataFrame
    equilibration: pd.DataFrame
    health: pd.DataFrame
    budget: pd.DataFrame
    caveats: tuple[str, ...] = ()
    provenance: Mapping[str, str] = field(default_factory=dict)

    def __post_init__(self) -> None:
        for name, columns in COLUMNS.items():
            missing = [column for column in columns if column not in getattr(self, name).columns]
            if missing:
                raise ValueError(f"table '{name}' lacks the columns {', '.join(missing)}")
