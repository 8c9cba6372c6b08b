"""Properties of one state from the joint distribution of its Helmholtz derivatives, as estimates."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
import numpy.typing as npt

from estimators.derived import CLEAR
from estimators.estimate import Estimate
from estimators.surface.measured import Measured
from estimators.surface.properties import ABSOLUTE, DIRECT, Formula, derived_properties, linear
from estimators.surface.regression import Prediction

__all__ = ["METHOD", "Answer", "clear_formulas", "estimate", "gradient"]

Floats = npt.NDArray[np.float64]

METHOD = "surface"
STEP = 1e-20


@dataclass(frozen=True, eq=False)
class Answer:
    """What the surface says at a state.

    properties : by name, with error bars, method "surface"; empty if refused
    path : how those came about that derivatives alone do not tell (`properties.ABSOLUTE`)
    refused : the reason why there are none, empty if there are
    """

    temperature: float
    density: float
    properties: Mapping[str, Estimate] = field(repr=False)
    path: str = ""
    refused: str = ""


def clear_formulas(
    found: Prediction, *, temperature: float, density: float, ideal_heat_capacity: float | None
) -> dict[str, Formula]:
    """Formulas of all properties but those that divide by what is not clearly above zero there."""
    formulas: dict[str, Formula] = {
        name: linear(name, temperature=temperature, density=density) for name in (*DIRECT, *ABSOLUTE)
    }
    more = derived_properties(temperature=temperature, density=density, ideal_heat_capacity=ideal_heat_capacity)
    every = formulas | {name: formula for name, (formula, _) in more.items()}

    def is_clear(name: str) -> bool:
        slopes = gradient(every[name], found.values)
        return bool(every[name](found.values) > CLEAR * (slopes @ found.covariance @ slopes) ** 0.5)

    return formulas | {name: formula for name, (formula, divisors) in more.items() if all(map(is_clear, divisors))}


def gradient(formula: Formula, values: Floats) -> Floats:
    """By complex steps, (6,)."""
    return np.array([np.imag(formula(values + 1j * STEP * unit)) / STEP for unit in np.eye(len(values))])


def estimate(formula: Formula, slopes: Floats, found: Prediction, measured: Measured) -> Estimate:
    """A property with its error bar: what samples carry as their influence, the rest as variance of its own.

    slopes : (6,), by how much the property errs with each of the derivatives

    Free of bias to first order, as estimates are that `combine` makes.
    """
    weights = slopes @ found.weights
    variance = float(slopes @ found.covariance @ slopes)
    carried = float(weights @ measured.noise @ weights - weights**2 @ measured.unsampled)
    value = float(formula(found.values)) - _bias(formula, found)
    unsampled = max(variance - carried, 0.0)
    return Estimate(value, measured.influence(weights), METHOD, measured.underlying, unsampled)


def _bias(formula: Formula, found: Prediction) -> float:
    """Half the second derivatives times the covariance, by differences one standard deviation wide."""
    variances, axes = np.linalg.eigh(found.covariance)
    arms = (axes * np.sqrt(np.maximum(variances, 0.0))).T
    middle = formula(found.values)
    return float(0.5 * sum(formula(found.values + arm) + formula(found.values - arm) - 2.0 * middle for arm in arms))
