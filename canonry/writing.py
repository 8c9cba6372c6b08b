"""A study as the text of its study file, complete with defaults."""

from __future__ import annotations

import json
from collections.abc import Callable
from dataclasses import asdict
from typing import TYPE_CHECKING

from canonry.quantities import shortest_text
from canonry.units import UNITS

if TYPE_CHECKING:
    from canonry.study import Study, Tolerance
    from canonry.temperatures import Ladder

__all__ = ["study_text"]

_UNITS = {
    "epsilon": ("K", "kJ/mol", "J"),
    "sigma": ("angstrom", "m"),
    "mass": ("u", "g/mol", "kg"),
    "temperature": ("K",),
    "density": ("g/cm3", "mol/L", "1/nm3"),
}


def study_text(study: Study) -> str:
    """The study file that loads to an equal study."""
    entries = study.compare.tolerance.items()
    tolerances = ", ".join(f"{name} = {_tolerance(study, name, entry)}" for name, entry in entries)
    return "\n".join(
        [
            f"title = {_quoted(study.title)}",
            "\n[fluid]",
            *_fluid(study),
            "\n[state]",
            *_states(study),
            *_origin(study),
            *_until(study),
            "\n[compare]",
            f"against = [{', '.join(map(_quoted, study.compare.against))}]",
            f"tolerance = {{ {tolerances} }}" if tolerances else "tolerance = {}",
            "",
        ]
    )


def _quoted(text: str) -> str:
    return json.dumps(text, ensure_ascii=False)


def _fluid(study: Study) -> list[str]:
    ideal, sizes = study.ideal_heat_capacity, {}
    if study.scale is not None:
        sizes = {"epsilon": study.scale.epsilon, "sigma": study.scale.sigma, "mass": study.scale.mass}
    cut = [f"cutoff = {study.fluid.cutoff!r}", f"truncation = {_quoted(study.fluid.truncation)}"]
    return [
        f"potential = {_quoted(study.fluid.potential)}",
        *(f"{name} = {_quoted(shortest_text(size, name, None, _UNITS[name]))}" for name, size in sizes.items()),
        *(cut if study.fluid.has_pairs else []),
        f"ideal_heat_capacity = {_quoted('unknown') if ideal is None else repr(ideal)}",
    ]


def _states(study: Study) -> list[str]:
    temperature, density = _writer(study, "temperature"), _writer(study, "density")
    ladders = {rho: [state.temperature for state in states] for rho, states in study.isochores.items()}
    first = next(iter(ladders.values()))
    if study.ladder is not None or (study.adopted is None and all(ladder == first for ladder in ladders.values())):
        densities = ", ".join(map(density, ladders))
        listed = [f"[{', '.join(map(temperature, ladder))}]" for ladder in ladders.values()]
        lines = [
            f"density = {densities if len(ladders) == 1 else f'[{densities}]'}",
            f"temperatures = {listed[0] if study.ladder is None else _ladder(study.ladder, temperature, listed)}",
        ]
    else:
        pairs = (f"[{temperature(state.temperature)}, {density(state.density)}]" for state in study.states)
        lines = [f"points = [{', '.join(pairs)}]"]
    counts = [state.particles for state in study.states]
    return [*lines, f"particles = {counts[0] if len({*counts}) == 1 else counts}"]


def _ladder(ladder: Ladder, temperature: Callable[[float], str], listed: list[str]) -> str:
    """What was asked for, and the temperatures chosen for each density."""
    asked = f"from = {temperature(ladder.start)}, to = {temperature(ladder.end)}, overlap = {ladder.overlap!r}"
    if not ladder.is_chosen:
        return f"{{ {asked} }}"
    chosen = listed[0] if len(listed) == 1 else f"[{', '.join(listed)}]"
    return f"{{ {asked}, chosen = {chosen} }}"


def _writer(study: Study, quantity: str) -> Callable[[float], str]:
    units = _UNITS.get(quantity) or (UNITS[quantity].SI,)
    if study.units == "reduced" or units == ("1",):
        return repr
    return lambda value: _quoted(shortest_text(value, quantity, study.scale, units))


def _origin(study: Study) -> list[str]:
    """How the samples are taken, or where they are from."""
    if study.adopted is None:
        return ["\n[sampling]", *_sampling(study)]
    notes = "".join(f"\n    {_quoted(note)}," for note in study.adopted.notes)
    return [
        "\n[adopted]",
        f"source = {_quoted(study.adopted.source)}",
        f"notes = [{notes}\n]" if notes else "notes = []",
    ]


def _sampling(study: Study) -> list[str]:
    values = asdict(study.sampling).items()
    return [f"{name} = {_quoted(value) if isinstance(value, str) else repr(value)}" for name, value in values]


def _until(study: Study) -> list[str]:
    if study.until is None:
        return []
    limits = (f"{name} = {_tolerance(study, name, limit)}" for name, limit in study.until.limits.items())
    return ["\n[until]", *limits, f"steps_at_most = {study.until.steps_at_most}"]


def _tolerance(study: Study, name: str, tolerance: Tolerance) -> str:
    return _quoted(tolerance.text) if tolerance.relative else _writer(study, name)(tolerance.value)
