"""Liquid-vapour equilibrium and spinodals of the equations; the freezing line."""

import math

import numpy as np
import pytest
import teqp

from reference import find, names
from reference.errors import AboveCritical, OutOfRange
from reference.freezing import freezing_density, melting_density

FRACTIONS = [None, 0.75, 0.9, 0.97, 0.99, 0.999, 0.9999, 0.99999]  # of the critical temperature; None: lowest covered


def temperature_of(name: str, fraction: float | None) -> float:
    reference = find(name)
    return reference.temperature_range[0] if fraction is None else fraction * reference.critical_temperature


@pytest.mark.parametrize("fraction", FRACTIONS)
@pytest.mark.parametrize("name", names())
def test_both_phases_share_pressure_and_chemical_potential(name: str, fraction: float | None) -> None:
    reference, temperature = find(name), temperature_of(name, fraction)
    pair = reference.coexistence(temperature)
    potentials = []
    for density in (pair.liquid, pair.vapour):
        a = reference.derivatives(temperature, density)
        assert density * temperature * (1.0 + a[0, 1]) == pytest.approx(pair.pressure, abs=1e-11, rel=1e-11)
        assert 1.0 + 2.0 * a[0, 1] + a[0, 2] > 0.0
        potentials.append(math.log(density) + a[0, 0] + a[0, 1])
    assert potentials[0] == pytest.approx(potentials[1], abs=1e-11, rel=0)
    vapour_edge, liquid_edge = reference.spinodals(temperature)
    assert pair.vapour < vapour_edge < liquid_edge < pair.liquid


@pytest.mark.parametrize("name", names())
def test_spinodals_are_the_extrema_of_the_pressure(name: str) -> None:
    reference = find(name)
    for temperature in (0.75, 0.9, 1.05):
        for edge, sign in zip(reference.spinodals(temperature), (-1.0, 1.0), strict=True):
            a = reference.derivatives(temperature, np.array([edge - 1e-4, edge, edge + 1e-4]))
            stiffness = 1.0 + 2.0 * a[0, 1] + a[0, 2]
            assert abs(stiffness[1]) < 1e-9
            assert sign * stiffness[2] > 0.0 > sign * stiffness[0]


@pytest.mark.parametrize("name", names())
def test_vapour_pressure_obeys_clapeyron(name: str) -> None:
    """dP/dT = (s_v - s_l)/(v_v - v_l); the central difference at step 1e-3 is good to 1e-5 relative."""
    reference, temperature, step = find(name), 0.85, 1e-3
    pair = reference.coexistence(temperature)
    v = {density: 1.0 / density for density in (pair.liquid, pair.vapour)}
    entropy = {}
    for density in v:
        a = reference.derivatives(temperature, density)
        entropy[density] = a[1, 0] - a[0, 0] - math.log(density)
    slope = (entropy[pair.vapour] - entropy[pair.liquid]) / (v[pair.vapour] - v[pair.liquid])
    upper, lower = reference.coexistence(temperature + step), reference.coexistence(temperature - step)
    assert (upper.pressure - lower.pressure) / (2.0 * step) == pytest.approx(slope, rel=1e-4)


@pytest.mark.parametrize(
    ("name", "kind"), [("thol-2016", "LJ126_TholJPCRD2016"), ("kolafa-nezbeda-1994", "LJ126_KolafaNezbeda1994")]
)
def test_coexistence_equals_an_independent_library(name: str, kind: str) -> None:
    """Its solver stops near 1e-9 in the densities."""
    model = teqp.make_model({"kind": kind, "model": {}})
    for temperature in (0.7, 0.8, 0.9, 1.0, 1.15, 1.25):
        pair = find(name).coexistence(temperature)
        liquid, vapour = model.pure_VLE_T(temperature, 1.01 * pair.liquid, 0.97 * pair.vapour, 30)
        assert pair.liquid == pytest.approx(liquid, rel=1e-8)
        assert pair.vapour == pytest.approx(vapour, rel=1e-8)


def test_published_simulation_brackets_the_saturated_states() -> None:
    """NIST Standard Reference Simulation Website, NVT Monte Carlo at T 0.85; read.

    At rho 0.776 P is 0.0068(17) and dP/d rho 10, so 4 standard errors are 0.0007 in density, to which the accuracy of
    the equation, 0.005 in P, adds 0.0005. At rho 0.009 the vapour has P 0.00716 and rises by less than 0.8 per density.
    """
    pair = find("thol-2016").coexistence(0.85)
    assert abs(pair.liquid - 0.776) < 0.0012
    assert 0.009 < pair.vapour < 0.011
    assert 0.0071641 < pair.pressure < 0.0071641 + 0.8 * (pair.vapour - 0.009)


@pytest.mark.parametrize("name", names())
def test_critical_point_is_where_the_loop_closes(name: str) -> None:
    """At the critical density dP/d rho changes sign within 1e-4 of the critical temperature."""
    reference = find(name)
    for factor, sign in ((1.0 - 1e-4, -1.0), (1.0 + 1e-4, 1.0)):
        a = reference.derivatives(factor * reference.critical_temperature, reference.critical_density)
        assert sign * (1.0 + 2.0 * a[0, 1] + a[0, 2]) > 0.0


@pytest.mark.parametrize("name", names())
def test_no_coexistence_from_the_critical_temperature_upwards(name: str) -> None:
    reference = find(name)
    for temperature in (reference.critical_temperature, 1.5):
        with pytest.raises(AboveCritical, match=r"no liquid and vapour coexist at temperature .*critical point at"):
            reference.coexistence(temperature)
        with pytest.raises(AboveCritical, match="no liquid and vapour coexist"):
            reference.spinodals(temperature)


@pytest.mark.parametrize(
    ("temperature", "density", "phase"),
    [
        (0.85, 0.3, "two-phase"),
        (0.85, 0.02, "two-phase"),
        (0.85, 0.76, "two-phase"),
        (0.85, 0.009, "fluid"),
        (0.85, 0.78, "fluid"),
        (1.0, 0.8, "fluid"),
        (1.25, 0.3, "two-phase"),
        (1.4, 0.3, "fluid"),
    ],
)
@pytest.mark.parametrize("name", ["thol-2016", "kolafa-nezbeda-1994"])
def test_phase(name: str, temperature: float, density: float, phase: str) -> None:
    assert find(name).phase(temperature, density) == phase


def test_the_shifted_fluid_is_no_longer_two_phase_at_temperature_1_10() -> None:
    """Its critical temperature is 1.086: M. Thol et al., Int. J. Thermophys. 36, 25 (2015); read."""
    assert find("thol-2015").phase(1.10, 0.3) == "fluid"
    assert find("thol-2016").phase(1.10, 0.3) == "two-phase"


def test_coexistence_stays_in_the_range_of_the_equation() -> None:
    for ask in (lambda r: r.coexistence(0.6), lambda r: r.spinodals(0.6), lambda r: r.phase(0.6, 0.1)):
        with pytest.raises(OutOfRange, match=r"thol-2016 holds from temperature 0\.7 to 9, found 0\.6"):
            ask(find("thol-2016"))


def test_freezing_line_has_its_published_densities() -> None:
    """M. A. van der Hoef, J. Chem. Phys. 113, 8142 (2000), from memory: 0.9239 and 1.0107 at T 1.0, 0.868 at T 0.75."""
    assert freezing_density(1.0) == pytest.approx(0.9239, abs=1e-4)
    assert melting_density(1.0) == pytest.approx(1.0107, abs=1e-4)
    assert freezing_density(0.75) == pytest.approx(0.868, abs=1e-3)


def test_freezing_line_rises_with_temperature_and_meets_the_liquid_near_the_triple_point() -> None:
    """The liquid at T 0.7 is just above its triple point, so it freezes within 0.02 of its saturated density."""
    temperatures = np.linspace(0.7, 2.0, 27)
    freezing = np.array([freezing_density(t) for t in temperatures])
    melting = np.array([melting_density(t) for t in temperatures])
    assert (np.diff(freezing) > 0.0).all()
    assert (melting > freezing + 0.05).all()
    gap = freezing_density(0.7) - find("thol-2016").coexistence(0.7).liquid
    assert 0.0 < gap < 0.02


@pytest.mark.parametrize("line", [freezing_density, melting_density])
@pytest.mark.parametrize("temperature", [0.5, 2.5, math.nan])
def test_freezing_line_ends(line: object, temperature: float) -> None:
    assert callable(line)
    with pytest.raises(OutOfRange, match=r"known from temperature 0\.7 to 2, found"):
        line(temperature)
