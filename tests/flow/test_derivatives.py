"""All derivatives of the residual Helmholtz energy at six states, and what follows from them, against an equation.

Thol 2016 (M. Thol et al., J. Phys. Chem. Ref. Data 45, 023101 (2016)) within its stated accuracy, read as 95 %. Every
difference is judged in combined standard errors, 3.5 of them: one false alarm in 2000 for each value with a fixed
seed. Combined are the statistical error, the equation's standard uncertainty, the shift of a closed box of N particles
and that of the tail, which are not corrected for (canonry/budget.py), and the time step's own bias at 0.005, scheme
baoab: below 0.0003 in u and 0.001 in P. Each statistical error is bounded as well.
"""

import math
from pathlib import Path

import numpy as np
import pytest

from canonry.budget import finite_size, tail
from estimators.canonical import rung_properties
from estimators.derived import derived, helmholtz_derivatives
from estimators.estimate import Estimate, exact
from estimators.structure import pair_structure
from reference import find
from reference.properties import DIRECT
from sampler.fluid import Fluid, State
from sampler.protocol import Protocol
from sampler.rung import advance, assemble
from sampler.store import Chain

EQUATION = find("thol-2016")
IDEAL = 1.5
ORDERS = ("A10", "A01", "A20", "A11", "A02")
STEP_BIAS = {"residual_energy": 0.0003, "pressure": 0.001}
# temperature, density, then the largest standard error allowed of A10, A01, A20, A11, A02, and of what follows
FOLLOWING = (
    *("heat_capacity", "isobaric_heat_capacity", "thermal_expansion", "sound_speed"),
    *("joule_thomson", "grueneisen", "enthalpy"),
)
TABLE = {
    (2.0, 0.1): ((0.0017, 0.002, 0.007, 0.01, 0.068), (0.007, 0.17, 0.067, 0.033, 0.31, 0.0067, 0.0046)),
    (2.5, 0.3): ((0.0011, 0.0038, 0.0056, 0.023, 0.16), (0.0055, 0.33, 0.07, 0.059, 0.13, 0.012, 0.011)),
    (3.0, 0.5): ((0.00098, 0.0052, 0.0078, 0.043, 0.26), (0.0078, 0.19, 0.021, 0.055, 0.046, 0.019, 0.018)),
    (1.0, 0.7): ((0.0027, 0.016, 0.028, 0.16, 1.1), (0.027, 1.1, 0.2, 0.081, 0.051, 0.051, 0.018)),
    (0.8, 0.85): ((0.0046, 0.028, 0.066, 0.39, 2.4), (0.064, 0.61, 0.069, 0.05, 0.03, 0.08, 0.026)),
    (2.5, 0.85): ((0.0022, 0.012, 0.027, 0.14, 0.74), (0.027, 0.16, 0.0077, 0.04, 0.017, 0.037, 0.036)),
}
STEPS = 60_000


@pytest.fixture(scope="module", params=TABLE, ids=lambda at: f"T{at[0]}-rho{at[1]}")
def sampled(request):
    """A state, its direct properties from one run, and their shifts that are not corrected for."""
    temperature, density = request.param
    dense = density > 0.4
    state = State(temperature, density, 300 if dense else 256)
    fluid = Fluid(cutoff=3.0 if dense else 4.0)
    protocol = Protocol(seed=31, equilibration=2000, steps=STEPS, friction=2.0 if dense else 1.0, frame_every=100)
    chain = Chain(Path(), fluid, state, protocol, 0)
    segments, before = [], None
    for index, (first, _) in enumerate(chain.segments):
        before = advance(chain, index, before, np.zeros(1, np.uint8))
        segments += [before] if first >= protocol.settling else []
    series = [assemble(chain, segments)]
    shifts = {name: [] for name in DIRECT}
    for known in (finite_size(state, EQUATION), tail(fluid, state, pair_structure(series)), STEP_BIAS):
        for name in DIRECT:
            shifts[name].append(known.get(name, 0.0))
    return state, rung_properties(series), shifts


def uncertainty(of, state, shifts) -> dict[str, float]:
    """Of each value that `of` makes of the direct properties, all that is not statistical, to first order."""
    at = {"temperature": state.temperature, "density": state.density}
    published = {name: EQUATION.value(name, **at) for name in DIRECT}
    plain = {name: each.value for name, each in published.items()}
    moved = [plain | {name: plain[name] + each.uncertainty} for name, each in published.items()]
    moved += [plain | {name: plain[name] + every[source] for name, every in shifts.items()} for source in range(3)]
    found = [of({name: exact(value) for name, value in each.items()}) for each in (plain, *moved)]
    return {
        name: math.sqrt(sum((each[name].value - centre.value) ** 2 for each in found[1:]))
        for name, centre in found[0].items()
    }


def held(estimates: dict[str, Estimate], published: dict[str, float], rest: dict[str, float], largest) -> None:
    for (name, estimate), most in zip(estimates.items(), largest, strict=True):
        combined = math.hypot(estimate.standard_error, rest[name])
        assert 0.0 < estimate.standard_error <= most, (name, estimate.standard_error)
        assert abs(estimate.value - published[name]) <= 3.5 * combined, (
            name,
            estimate.value,
            estimate.standard_error,
            published[name],
            rest[name],
        )


def test_all_derivatives(sampled) -> None:
    state, properties, shifts = sampled
    at = {"temperature": state.temperature, "density": state.density}
    known = EQUATION.derivatives(state.temperature, state.density)
    rest = uncertainty(lambda parts: helmholtz_derivatives(parts, **at), state, shifts)
    found = helmholtz_derivatives(properties, **at)
    assert tuple(found) == ORDERS
    held(found, {name: float(known[int(name[1]), int(name[2])]) for name in ORDERS}, rest, TABLE[tuple(at.values())][0])


def test_all_that_follows(sampled) -> None:
    state, properties, shifts = sampled
    at = {"temperature": state.temperature, "density": state.density}
    rest = uncertainty(lambda parts: derived(parts, ideal_heat_capacity=IDEAL, **at), state, shifts)
    found = derived(properties, ideal_heat_capacity=IDEAL, **at)
    assert tuple(found) == FOLLOWING
    known = {name: EQUATION.value(name, ideal_heat_capacity=IDEAL, **at).value for name in FOLLOWING}
    held(found, known, rest, TABLE[tuple(at.values())][1])
