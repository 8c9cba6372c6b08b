"""Whether quantum effects, which classical sampling leaves out, are smaller than the error bars."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from estimators.covariance import covariance
from estimators.estimate import Chain, Estimate, mean
from estimators.health.excess import too_short
from estimators.health.reading import Reading
from estimators.health.virial_routes import virial_of_volume
from sampler.series import FrameSums, Series

__all__ = ["QuantumShifts", "quantum", "quantum_shifts"]


@dataclass(frozen=True, eq=False)
class QuantumShifts:
    """What quantum mechanics adds to first order in hbar^2, in reduced units.

    free_energy : Helmholtz energy per particle
    energy : internal energy per particle, kinetic and potential
    kinetic : its kinetic part, as large as that of the free energy
    pressure : with the kinetic part
    """

    free_energy: Estimate
    energy: Estimate
    kinetic: Estimate
    pressure: Estimate


def quantum_shifts(
    series: Sequence[Series], frames: Mapping[Chain, FrameSums], *, wavelength: float
) -> QuantumShifts | None:
    """First quantum correction of one rung with a bath; None without frames or bath.

    wavelength : thermal, Lambda = h / sqrt(2 pi m k_B T), sigma

    E. Wigner, Phys. Rev. 40, 749 (1932): a configuration's weight is exp(-U/T) times
    1 - (b/T) (2 sum nabla^2 U - sum F^2 / T), b = hbar^2 / (24 m T) = Lambda^2 / (48 pi). It follows that the free
    energy changes by b <sum nabla^2 U>, and so does the kinetic energy; U by b (<L> - cov(L, U)/T) with L that sum;
    the virial W by the covariance with the weight, and P by (2/3 of the kinetic change + that of W)/V. What the jump
    of the force at the cutoff adds to L, a part in a thousand, is left out.
    """
    series = [each for each in series if len(frames[each.chain].laplacian)]
    if not series or not series[0].bath:
        return None
    state = series[0].state
    beta, scale = 1.0 / state.temperature, wavelength**2 / (48.0 * math.pi * state.particles)
    curvature = {each.chain: frames[each.chain].laplacian for each in series}
    weight = {chain: -beta * (2.0 * values - beta * frames[chain].force_square) for chain, values in curvature.items()}
    potential = covariance(curvature, {chain: frames[chain].energy for chain in curvature}) * -beta
    virial = covariance(weight, {each.chain: virial_of_volume(each, frames[each.chain]) for each in series})
    kinetic = mean(curvature)
    return QuantumShifts(
        free_energy=kinetic * scale,
        energy=(kinetic * 2.0 + potential) * scale,
        kinetic=kinetic * scale,
        pressure=(kinetic * (2.0 / 3.0) + virial) * (scale * state.density),
    )


def quantum(series: Sequence[Series], frames: Mapping[Chain, FrameSums], *, wavelength: float) -> list[Reading] | None:
    """First quantum shifts of residual energy and pressure of one rung over the error bars of these; 1 is allowed.

    Of each shift as much counts as its own standard error leaves. None as for `quantum_shifts`, and if fewer than 50
    effective frames are there.
    """
    shifts = quantum_shifts(series, frames, wavelength=wavelength)
    if shifts is None or too_short(shifts.kinetic) or too_short(shifts.pressure):
        return None
    state = series[0].state
    readings = []
    for column, name, shift, share in (
        ("energy", "energy", shifts.energy, 1.0 / state.particles),
        ("virial", "pressure", shifts.pressure, 1.0 / state.volume),
    ):
        if not all(each.has(column) for each in series):
            continue
        error = mean({each.chain: each.column(column) for each in series}).standard_error * share
        least = max(abs(shift.value) - shift.standard_error, 0.0)
        readings.append(
            Reading(
                "quantum",
                least / error if error > 0.0 else 0.0,
                1.0,
                f"quantum effects shift the {name} by {shift.value:+.2g} (standard error {shift.standard_error:.1g}) "
                f"to first order, at a thermal wavelength of {wavelength:.3g} sigma, and its error bar is {error:.2g}; "
                "if that is more, add the shift to the classical value before holding it against a real fluid",
            )
        )
    return readings
