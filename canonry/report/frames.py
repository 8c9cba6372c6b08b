"""What positions on record say beyond averages, in words: absolute values by test insertion, long waves."""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from canonry.notation import unit_text
from canonry.numbers import plain
from canonry.report.rows import floats, headline
from canonry.results import Results
from canonry.units import unit_label

__all__ = ["absolute", "long_waves"]

_TRUST = {"ok": "{} can be trusted", "caution": "{} with caution", "no": "{} cannot"}


def absolute(results: Results) -> Iterator[str]:
    """How absolute values were found and how many can be trusted, and what changes are counted from."""
    rows = results.properties[results.properties["property"] == "residual_chemical_potential"]
    inserted, shown = rows[rows["method"] == "insertion"], headline(results)
    if len(inserted):
        counts = inserted["trust"].value_counts()
        shares = ", ".join(told.format(counts[trust]) for trust, told in _TRUST.items() if trust in counts)
        yield (
            "Test insertion rests on rare cavities in a dense liquid: of its "
            f"{_counted(len(inserted), 'value')} of μ_res {shares}. a_res and s_res follow from μ_res with Z and u."
        )
    laid = int(np.sum((shown["method"] == "surface") & (shown["property"] == "residual_chemical_potential")))
    if laid:
        yield (
            f"At {_counted(laid, 'state')} the μ_res shown is that of the surface between the isochores, as it is "
            "more trusted or more precise."
        )
    if "residual_helmholtz_change" in set(shown["property"]):
        yield "Changes along the ladder count from its coldest rung; they are from reweighting."


def long_waves(results: Results) -> Iterator[str]:
    """How the bulk modulus from long waves agrees with that from fluctuations."""
    rows = results.properties[results.properties["property"] == "bulk_modulus"]
    waves, own = (rows[rows["method"] == method] for method in ("structure", "fluctuation"))
    both = waves.merge(own, on=["temperature", "density"], suffixes=("", "_own"))
    combined = np.hypot(floats(both, "standard_error"), floats(both, "standard_error_own"))
    z = np.abs(floats(both, "value") - floats(both, "value_own")) / combined
    both, z = both[np.isfinite(z)], z[np.isfinite(z)]
    if len(z):
        worst = both.iloc[int(np.argmax(z))]
        at, unit = plain(float(worst["temperature"])), unit_text(unit_label("temperature", results.units))
        yield (
            f"B_T by both routes agrees within two combined standard errors at {int((z <= 2.0).sum())} of {len(z)} "
            f"states; the largest deviation is {z.max():.1f}, at T = {at} {unit}."
        )


def _counted(number: int, noun: str) -> str:
    return f"{number} {noun if number == 1 else noun + 's'}"
