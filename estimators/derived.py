"""Properties that follow from the five that the samples of one state give directly, with all correlations kept.

Those of a homogeneous state of particles of mass 1: c_v and c_p with the ideal part, alpha, w, mu_JT, the Grueneisen
parameter and h; and the residual Helmholtz derivatives, which are those same five, ordered by order:
A_mn = (1/T)^m rho^n d^(m+n)(A_res/NT)/d(1/T)^m d rho^n.
"""

from __future__ import annotations

from collections import defaultdict
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from estimators.covariance import covariance_matrix
from estimators.estimate import Estimate, State, combine, exact
from estimators.gamma import coarsened

__all__ = ["CLEAR", "PARTS", "RULES", "Rule", "derived", "enthalpy", "helmholtz_derivatives", "in_blocks", "unclear"]

BLOCKS = 2**12  # of a state: an error bar's own error, about 1/sqrt(2 BLOCKS), is no concern then
FEWEST_BLOCKS = 128  # of a chain, however many there are
CLEAR = 4.0  # standard errors from zero: the error bar of 1/x is good to a few per cent from there on


@dataclass(frozen=True)
class Rule:
    """How a property follows from others.

    formula : of temperature, density and the parts, in this order
    divisors : parts that must be above zero
    """

    formula: Callable[..., Any]
    parts: tuple[str, ...]
    divisors: tuple[str, ...] = ()


def _isobaric(t: Any, rho: Any, c_v: Any, gamma: Any, modulus: Any) -> Any:
    return c_v + t * gamma**2 / (rho * modulus)


_THERMAL = ("heat_capacity", "thermal_pressure", "bulk_modulus")
RULES: Mapping[str, Rule] = {
    "isobaric_heat_capacity": Rule(_isobaric, _THERMAL, ("bulk_modulus",)),
    "thermal_expansion": Rule(
        lambda t, rho, gamma, modulus: gamma / modulus, ("thermal_pressure", "bulk_modulus"), ("bulk_modulus",)
    ),
    "sound_speed": Rule(
        lambda t, rho, c_v, gamma, modulus: (_isobaric(t, rho, c_v, gamma, modulus) / c_v * modulus / rho) ** 0.5,
        _THERMAL,
        ("heat_capacity", "bulk_modulus"),
    ),
    "joule_thomson": Rule(
        lambda t, rho, c_v, gamma, modulus: (
            (t * gamma / modulus - 1.0) / (rho * _isobaric(t, rho, c_v, gamma, modulus))
        ),
        _THERMAL,
        ("heat_capacity", "bulk_modulus"),
    ),
    "grueneisen": Rule(
        lambda t, rho, c_v, gamma: gamma / (rho * c_v), ("heat_capacity", "thermal_pressure"), ("heat_capacity",)
    ),
}
_DERIVATIVES: Mapping[str, Rule] = {
    "A10": Rule(lambda t, rho, energy: energy / t, ("residual_energy",)),
    "A01": Rule(lambda t, rho, pressure: pressure / (rho * t) - 1.0, ("pressure",)),
    "A20": Rule(lambda t, rho, c_v: -c_v, ("residual_heat_capacity",)),
    "A11": Rule(lambda t, rho, pressure, gamma: pressure / (rho * t) - gamma / rho, ("pressure", "thermal_pressure")),
    "A02": Rule(
        lambda t, rho, pressure, modulus: (modulus - 2.0 * pressure) / (rho * t) + 1.0, ("pressure", "bulk_modulus")
    ),
}
PARTS: Mapping[str, tuple[str, ...]] = {
    **{name: rule.parts for name, rule in RULES.items()},
    "enthalpy": ("residual_energy", "pressure"),
}
"""What each derived property is made of, beside temperature, density and the ideal heat capacity."""


def derived(
    properties: Mapping[str, Estimate],
    *,
    temperature: float | Estimate,
    density: float,
    ideal_heat_capacity: float | None,
) -> dict[str, Estimate]:
    """Properties of a state from its direct ones, reduced units, mass 1; those only whose parts are there.

    properties : of `estimators.canonical`; a heat_capacity among them is taken as it is
    temperature : an Estimate where it was measured itself, correlated with the rest
    ideal_heat_capacity : c_v of the ideal gas, k_B per particle; without it there are no totals

    Keys: heat_capacity and isobaric_heat_capacity (c_p = c_v + T gamma_V^2/(rho B_T)), thermal_expansion
    (gamma_V/B_T), sound_speed (w^2 = c_p B_T/(c_v rho)), joule_thomson ((T alpha - 1)/(rho c_p)), grueneisen
    (gamma_V/(rho c_v)), enthalpy (per particle, zero for the ideal gas at T 0). Those are left out that divide by what
    is not clearly above zero, see `unclear`.
    """
    known = _with_heat_capacity(properties, ideal_heat_capacity)
    doubtful = unclear(known, ideal_heat_capacity=ideal_heat_capacity)
    clear = {name: rule for name, rule in RULES.items() if known.keys() >= set(rule.parts) and name not in doubtful}
    if ideal_heat_capacity is not None and known.keys() >= {*PARTS["enthalpy"]}:
        clear["enthalpy"] = enthalpy(ideal_heat_capacity)
    total = {name: each for name, each in known.items() if name not in properties}
    return total | _applied(clear, known, temperature, density)


def enthalpy(ideal_heat_capacity: float) -> Rule:
    """With c_v of the ideal gas, k_B per particle."""
    return Rule(lambda t, rho, energy, pressure: ideal_heat_capacity * t + energy + pressure / rho, PARTS["enthalpy"])


def unclear(properties: Mapping[str, Estimate], *, ideal_heat_capacity: float | None) -> dict[str, str]:
    """Derived properties whose parts are there and that yet cannot be told, each with the reason.

    They divide by a heat capacity or a bulk modulus that is less than four standard errors above zero, where the value
    may have a pole and no error bar of first order means anything.
    """
    known = _with_heat_capacity(properties, ideal_heat_capacity)
    near = [name for name in ("heat_capacity", "bulk_modulus") if name in known and not _is_clear(known[name])]
    return {
        name: f"the {divisor.replace('_', ' ')} that it is divided by is not clearly above zero"
        for divisor in near
        for name, rule in RULES.items()
        if divisor in rule.divisors and known.keys() >= set(rule.parts)
    }


def helmholtz_derivatives(
    properties: Mapping[str, Estimate], *, temperature: float | Estimate, density: float
) -> dict[str, Estimate]:
    """A10, A01, A20, A11, A02 from the direct properties of a state (arguments as of `derived`), as far as they go.

    A10 = u/T; A01 = P/(rho T) - 1; A20 = -c_v,res; A11 = 1 + A01 - gamma_V/rho; A02 = B_T/(rho T) - 1 - 2 A01.
    The method is that of the parts where these share one, else "derived".
    """
    rules = {name: rule for name, rule in _DERIVATIVES.items() if properties.keys() >= set(rule.parts)}
    found = _applied(rules, properties, temperature, density)
    methods = {name: {properties[part].method for part in rule.parts} for name, rule in rules.items()}
    return {
        name: replace(each, method=methods[name].pop() if len(methods[name]) == 1 else "derived")
        for name, each in found.items()
    }


def _with_heat_capacity(properties: Mapping[str, Estimate], ideal: float | None) -> Mapping[str, Estimate]:
    if ideal is None or "heat_capacity" in properties or "residual_heat_capacity" not in properties:
        return properties
    return {**properties, "heat_capacity": properties["residual_heat_capacity"] + ideal}


def _is_clear(divisor: Estimate) -> bool:
    return divisor.value > CLEAR * divisor.standard_error


def _applied(
    rules: Mapping[str, Rule], properties: Mapping[str, Estimate], temperature: float | Estimate, density: float
) -> dict[str, Estimate]:
    """The covariance of all parts is found once, from their influences over blocks."""
    needed = list(dict.fromkeys(part for rule in rules.values() for part in rule.parts))
    at = temperature if isinstance(temperature, Estimate) else exact(temperature)
    parts = {name: in_blocks(each) for name, each in (("", at), *((name, properties[name]) for name in needed))}
    with np.errstate(invalid="ignore"):
        covariance = covariance_matrix(list(parts.values()))
    covariance = np.where(np.isfinite(covariance), covariance, 0.0)
    index = {name: number for number, name in enumerate(parts)}
    found = {}
    for name, rule in rules.items():
        own = ("", *rule.parts)
        rows = [index[part] for part in own]
        found[name] = combine(
            lambda t, *values, formula=rule.formula: formula(t, density, *values),
            *(parts[part] for part in own),
            covariance=covariance[np.ix_(rows, rows)],
        )
    return found


def in_blocks(estimate: Estimate) -> Estimate:
    """The same with influences summed over blocks where a state has very many samples."""
    samples: dict[State, int] = defaultdict(int)
    for chain, values in estimate.influence.items():
        samples[chain[:3]] += len(values)
    influence = {
        chain: coarsened(values, max(len(values) * BLOCKS // samples[chain[:3]], FEWEST_BLOCKS))
        if samples[chain[:3]] > BLOCKS and len(values) > FEWEST_BLOCKS
        else values
        for chain, values in estimate.influence.items()
    }
    return replace(estimate, influence=influence) if max(samples.values(), default=0) > BLOCKS else estimate
