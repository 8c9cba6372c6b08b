"""What the report's text needs of a study file."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from canonry.notation import unit_text
from canonry.numbers import plain
from canonry.results import Results

__all__ = ["Setup", "quantity"]

_TRUNCATIONS = {
    "corrected": "truncated at {cutoff}, with a homogeneous long-range correction to energy, pressure and their "
    "derivatives",
    "plain": "truncated at {cutoff} without correction",
    "shifted": "truncated and shifted at {cutoff}",
    "force-shifted": "truncated at {cutoff} with energy and force shifted to zero there",
}


@dataclass(frozen=True)
class Setup:
    """What the text needs of a study file; quantities as text with their unit.

    adopted : the file that described the samples, where they were taken elsewhere; there is then no scheme
    """

    potential: str
    truncation: str
    cutoff: str
    particles: str
    scheme: str
    adopted: str
    sampling: Mapping[str, Any]
    against: Sequence[str]
    tolerance: Mapping[str, float | str]
    until: Mapping[str, float | str]
    ideal_heat_capacity: float | str

    @classmethod
    def of(cls, results: Results) -> Setup:
        """Read the study of these results, complete with defaults; KeyError where it is not."""
        study = tomllib.loads(results.study_toml)
        fluid, sampling, compare = study["fluid"], study.get("sampling", {}), study.get("compare", {})
        counts = study["state"]["particles"]
        return cls(
            potential=fluid["potential"].replace("lennard-jones", "Lennard-Jones"),
            truncation=fluid.get("truncation", ""),
            cutoff=quantity(fluid["cutoff"], "σ") if "cutoff" in fluid else "",
            particles=f"{min(counts)} to {max(counts)}" if isinstance(counts, list) else str(counts),
            scheme=sampling.get("scheme", ""),
            adopted=study.get("adopted", {}).get("source", ""),
            sampling=sampling,
            against=compare.get("against", []),
            tolerance=compare.get("tolerance", {}),
            until=study.get("until", {}),
            ideal_heat_capacity=fluid["ideal_heat_capacity"],
        )

    @property
    def bath(self) -> bool:
        """Whether a thermostat acted."""
        return self.scheme != "velocity-verlet"

    @property
    def fluid(self) -> str:
        """The fluid and what is done at the cutoff, in words."""
        if not self.truncation:
            return "fluid whose potential is not known here"
        return f"{self.potential} fluid, {_TRUNCATIONS[self.truncation].format(cutoff=self.cutoff)}"


def quantity(value: float | str, unit: str) -> str:
    """A value as written with its unit, or a bare one in the unit given."""
    return unit_text(value) if isinstance(value, str) else f"{plain(value)} {unit}"
