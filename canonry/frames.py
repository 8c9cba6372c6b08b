"""What positions on record say of a rung beyond its averages: chemical potential and structure factor."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence

from canonry.findings import Finding
from estimators.estimate import Estimate
from estimators.insertion import Insertion, insertion
from estimators.scattering import Scattering, scattering
from sampler.fluid import State
from sampler.series import Series

__all__ = ["findings_of", "inserted", "scattered", "with_some_frames"]

_INSERTED = 1000  # frames of a rung into which test particles are put, at most
_SCATTERED = 300

Properties = Mapping[str, Estimate]


def with_some_frames(series: Sequence[Series], most: int) -> list[Series]:
    """Repeats of a rung with every n-th frame, so that there are `most` in all or fewer."""
    stride = -(-sum(len(each.frames) for each in series) // most) or 1
    return [each.with_every_frame(stride) for each in series]


def inserted(series: Sequence[Series]) -> Insertion | None:
    """Of some frames of a rung."""
    return insertion(with_some_frames(series, _INSERTED))


def scattered(series: Sequence[Series]) -> Scattering | None:
    """Of some frames of a rung."""
    return scattering(with_some_frames(series, _SCATTERED))


def findings_of(
    state: State, own: Properties, insertion: Insertion | None, scattering: Scattering | None
) -> Iterator[Finding]:
    """Absolute properties by test insertion, and the bulk modulus as another route to that of the fluctuations.

    own : what averages and fluctuations of the rung say
    """
    if insertion is not None:
        for name, value in _absolute(state, own, insertion.chemical_potential).items():
            finding = Finding(
                state, name, "insertion", value, value.effective_samples, value.trust, value.reason, headline=True
            )
            yield finding.doubted(insertion.reason, insertion.trust) if insertion.trust != "ok" else finding
    if scattering is not None and scattering.bulk_modulus is not None:
        value = scattering.bulk_modulus
        headline = "bulk_modulus" not in own
        yield Finding(
            state, "bulk_modulus", "structure", value, value.effective_samples, value.trust, value.reason, headline
        )


def _absolute(state: State, own: Properties, potential: Estimate) -> dict[str, Estimate]:
    """A_res/N = mu_res - T (Z - 1) and S_res/N = (u - a_res)/T."""
    found = {"residual_chemical_potential": potential}
    if "compressibility_factor" in own:
        helmholtz = potential - (own["compressibility_factor"] - 1.0) * state.temperature
        found["residual_helmholtz_energy"] = helmholtz
        if "residual_energy" in own:
            found["residual_entropy"] = (own["residual_energy"] - helmholtz) / state.temperature
    return found
