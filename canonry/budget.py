"""The uncertainty budget of a headline value: what each of its sources adds, as far as that is known.

Finite size: a box of N particles that no particle leaves has the free energy F_N = F + (T/2) ln(2 pi N rho T / B_T),
from the sum over N of the grand ensemble (J. L. Lebowitz, J. K. Percus, Phys. Rev. 122, 1675 (1961)). Its derivatives
shift every property by 1/N; bulk moduli B_T are those of the reference nearest to the fluid. What periodic images add
beyond that shows only where a second size was sampled, which is then what counts.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING

import numpy as np

from canonry.findings import Finding, Findings
from canonry.risks import guide
from canonry.study import Study
from canonry.units import PROPERTIES
from estimators.estimate import Estimate
from estimators.health.excess import too_short
from estimators.structure import Structure
from sampler.fluid import Fluid, State

if TYPE_CHECKING:
    from reference import Reference

__all__ = ["COVERAGE", "NOT_KNOWN", "WITHIN", "Budget", "budgets", "finite_size", "size", "step", "tail"]

COVERAGE = 2.0  # times the combined standard uncertainty: about 95 %
NOT_KNOWN = "not known"
WITHIN = "within statistical"
_STEP = 0.01  # relative, of temperature and density, for derivatives of a reference
_SHELL = 1.0  # sigma

Component = float | str


@dataclass(frozen=True, eq=False)
class Budget:
    """Standard uncertainties of one headline value, in its reduced unit, or why there is no number.

    statistical : the standard error
    time_step : see `step`; none where sampling is exact
    cutoff, finite_size : sizes of shifts that are not corrected for; no cutoff can be wrong where the
        potential ends there by definition; the other is measured where there is a second size, see `size`
    equilibration : `WITHIN` where no trend is left, and halves and repeats agree within their errors
    """

    finding: Finding
    statistical: float
    time_step: Component
    cutoff: Component
    finite_size: Component
    equilibration: Component

    @property
    def combined(self) -> float:
        """All that is known, in squares."""
        parts = (self.statistical, self.time_step, self.cutoff, self.finite_size, self.equilibration)
        return math.hypot(*(part for part in parts if not isinstance(part, str)))


def budgets(study: Study, findings: Findings) -> Iterator[Budget]:
    """The budget of every headline value."""
    reference = guide(study.fluid) if study.fluid.has_pairs else None
    readings = [check for check in findings.health if check.reading.check == "settled"]
    settled = {each.state for each in readings} - {each.state for each in readings if not each.reading.passed}
    states = {finding.state for finding in findings.headlines}
    sizes = {state: {**finite_size(state, reference), **size(findings, state)} for state in states}
    tails = {state: tail(study.fluid, state, findings.structures.get(state)) for state in states}
    steps = {state: step(findings, state) for state in states}
    at_any_step = study.adopted is None and study.sampling.scheme == "metropolised"
    for finding in findings.headlines:
        if finding.estimate is None:
            continue
        name = "residual_heat_capacity" if finding.property == "heat_capacity" else finding.property
        yield Budget(
            finding,
            statistical=finding.estimate.standard_error,
            time_step=0.0 if at_any_step else _size(steps[finding.state], name),
            cutoff=_size(tails[finding.state], name),
            finite_size=_size(sizes[finding.state], name),
            equilibration=WITHIN if finding.state in settled else NOT_KNOWN,
        )


def _size(shifts: Mapping[str, float], name: str) -> Component:
    return abs(shifts[name]) if name in shifts else NOT_KNOWN


def step(findings: Findings, state: State) -> Mapping[str, float]:
    """Shift from exact sampling by property, or the error of that difference where it is larger; empty without such."""
    exact, own = findings.exact.get(state, {}), _alone(findings, state)
    both = {name: (found, exact[name]) for name, found in own.items() if name in exact}
    return {
        name: max(abs(found.value - other.value), math.hypot(found.standard_error, other.standard_error))
        for name, (found, other) in both.items()
    }


def size(findings: Findings, state: State) -> Mapping[str, float]:
    """Shift from infinitely many particles by property, or its error where that is larger; empty without a second size.

    Taken to go as 1/N: the difference of N and M particles times (1/N)/(1/N - 1/M). Of several sizes the one counts
    that tells the shift best.
    """
    shifts: dict[str, list[Estimate]] = {}
    for other, properties in findings.sizes.items():
        if (other.temperature, other.density) == (state.temperature, state.density):
            reach = other.particles / (other.particles - state.particles)
            for name, found in _alone(findings, state).items():
                if name in properties and not too_short(properties[name]):
                    shifts.setdefault(name, []).append((found - properties[name]) * reach)
    best = {name: min(each, key=lambda shift: shift.standard_error) for name, each in shifts.items()}
    return {name: max(abs(shift.value), shift.standard_error) for name, shift in best.items()}


def _alone(findings: Findings, state: State) -> dict[str, Estimate]:
    """What a rung says alone."""
    return {
        each.property: each.estimate
        for each in findings.properties
        if each.state == state and each.method != "reweighted" and each.estimate is not None
    }


def tail(fluid: Fluid, state: State, structure: Structure | None) -> Mapping[str, float]:
    """What taking g = 1 beyond the cutoff is wrong by, by property; left out where nothing is known.

    The tail's integrals with g - 1 as measured, from the cutoff to half the box; nothing is known of them where that is
    less than a shell, nor of how they depend on temperature, and so of heat capacity and thermal pressure.
    """
    if not fluid.has_pairs:
        return {}
    if fluid.truncation != "corrected":
        return dict.fromkeys(PROPERTIES, 0.0)
    if structure is None or structure.r[-1] - fluid.cutoff < _SHELL:
        return {}
    beyond = structure.r > fluid.cutoff
    r, density = structure.r[beyond], state.density
    pairs = 2.0 * math.pi * density * (structure.g[beyond] - 1.0) * r**2 * (r[1] - r[0])
    full = replace(fluid, cutoff=2.0 * r[-1], truncation="plain")
    energy = float(pairs @ full.pair_energy(r))
    virial = float(pairs @ full.pair_virial(r)) / -3.0
    hypervirial = float(pairs @ full.pair_hypervirial(r)) / 9.0
    return {
        "residual_energy": energy,
        "pressure": density * virial,
        "compressibility_factor": virial / state.temperature,
        "bulk_modulus": density * (virial + hypervirial),
    }


def finite_size(state: State, reference: Reference | None) -> Mapping[str, float]:
    """What N particles in a closed box differ by from infinitely many, by property; empty where nothing is known."""
    from reference.errors import OutOfRange

    if reference is None:
        return {}
    scales = 1.0 + _STEP * np.arange(-2.0, 3.0)
    try:
        logs = np.array([[_excess(reference, state, x, y) for y in scales] for x in scales])
    except OutOfRange:
        return {}
    if not np.all(np.isfinite(logs)):
        return {}
    temperature, density = state.temperature, state.density
    temperatures, densities = temperature * scales, density * scales
    free = 0.5 / state.particles * logs  # of F/(N T)
    energy = -(temperatures[:, None] ** 2) * np.gradient(free, temperatures, axis=0, edge_order=2)
    pressure = densities**2 * temperatures[:, None] * np.gradient(free, densities, axis=1, edge_order=2)
    heat = float(np.gradient(energy[:, 2], temperatures)[2])
    return {
        "residual_energy": float(energy[2, 2]),
        "residual_heat_capacity": heat,
        "pressure": float(pressure[2, 2]),
        "compressibility_factor": float(pressure[2, 2]) / (density * temperature),
        "thermal_pressure": float(np.gradient(pressure[:, 2], temperatures)[2]),
        "bulk_modulus": density * float(np.gradient(pressure[2], densities)[2]),
    }


def _excess(reference: Reference, state: State, warmer: float, denser: float) -> float:
    """ln(rho T / B_T) beside a state; not a number where a bulk modulus is not positive."""
    temperature, density = warmer * state.temperature, denser * state.density
    modulus = reference.value("bulk_modulus", temperature=temperature, density=density).value
    return math.log(density * temperature / modulus) if modulus > 0.0 else math.nan
