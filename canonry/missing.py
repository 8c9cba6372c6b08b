"""What adopted samples cannot say, and which column would let it be said."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING, Any

from canonry.border import Border
from canonry.study import Study
from estimators.canonical import NEEDS
from estimators.derived import PARTS
from sampler.fluid import State
from sampler.series import Series

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["missing"]

_COLUMNS = ("temperature", "density", "property", "column")
_GIVEN_BY = {
    "energy": "potential, without a part from within molecules",
    "sampled_energy": "potential, or dynamical",
    "virial": "pressure or virial",
    "hypervirial": "hypervirial",
    "kinetic": "kinetic",
    "frames": "frames",
    "rungs": "rungs of another temperature",
}
"""Column of a series, or what else a check needs -> columns or keys of a description that give it."""
_RECORDED = ("energy", "sampled_energy", "virial", "hypervirial", "kinetic")
_MADE_OF = {
    **PARTS,
    "enthalpy": (*PARTS["enthalpy"], "heat_capacity"),  # for its ideal part
    "residual_helmholtz_energy": ("residual_chemical_potential", "compressibility_factor"),
    "residual_entropy": ("residual_chemical_potential", "compressibility_factor", "residual_energy"),
}
_CHECKS = {
    "kinetic-law": ("kinetic",),
    "pair-slope": ("sampled_energy", "rungs"),
    "heat-routes": ("energy", "sampled_energy", "rungs"),
    "force-temperature": ("frames",),
    "enough": ("energy",),
    "one-phase": ("frames",),
    "box": ("frames",),
    "virial-routes": ("virial", "sampled_energy", "frames"),
    "quantum": ("frames",),
}
"""What a health check needs in full; one that is not here takes what there is, or what cannot be adopted."""
_OF_PAIRS = ("force-temperature", "virial-routes", "quantum")  # these need pair functions, which no column gives


def missing(study: Study, series: Sequence[Series], border: Border) -> pd.DataFrame:
    """One row for each property not said and each health check not made at a state; in the units of the border."""
    import pandas as pd

    rows = [
        {
            "temperature": border.coordinate("temperature", state.temperature),
            "density": border.coordinate("density", state.density),
            "property": name,
            "column": column,
        }
        for state in study.states
        for name, column in _lacking(study, state, [each for each in series if each.state == state])
    ]
    return pd.DataFrame(rows, columns=list(_COLUMNS))


def _lacking(study: Study, state: State, series: Sequence[Series]) -> Iterator[tuple[str, str]]:
    fluid, given = study.fluid, _given(study, state, series)
    needs: dict[str, Any] = dict(NEEDS)
    flexible = "energy" not in given and all(each.freedom is not None for each in series)
    needs["heat_capacity"] = NEEDS["heat_capacity" if flexible else "residual_heat_capacity"]
    found: dict[str, list[str]] = {}
    for name, columns in needs.items():
        lacking = [_GIVEN_BY[column] for column in columns if column not in given]
        if name == "heat_capacity" and study.ideal_heat_capacity is None and not flexible:
            lacking.append("fluid.ideal_heat_capacity")
        if name == "bulk_modulus" and fluid.has_pairs and fluid.surface_hypervirial(state.density):
            lacking += [] if "frames" in given else ["frames"]
        found[name] = lacking
    if fluid.has_pairs:
        found["residual_chemical_potential"] = [] if "frames" in given else ["frames"]
    for name, parts in _MADE_OF.items():
        if found.keys() >= {*parts}:
            found[name] = list(dict.fromkeys(column for part in parts for column in found[part]))
    yield from ((name, "; ".join(lacking)) for name, lacking in found.items() if lacking)
    if "frames" not in given:
        yield "g(r)", "frames"
    for check, columns in _CHECKS.items():
        possible = check not in _OF_PAIRS or (fluid.has_pairs and (check != "quantum" or study.scale is not None))
        if possible and not given.issuperset(columns):
            yield f"check {check}", "; ".join(_GIVEN_BY[column] for column in columns if column not in given)


def _given(study: Study, state: State, series: Sequence[Series]) -> set[str]:
    """Of what stands in `_GIVEN_BY`, all that there is."""
    given = {name for name in _RECORDED if all(each.has(name) for each in series)}
    given |= {"frames"} if any(len(each.frames) for each in series) else set()
    return given | ({"rungs"} if len(study.isochores[state.density]) > 1 else set())
