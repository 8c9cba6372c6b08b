"""Helmholtz derivatives against printed values, an independent library and the complex step."""

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
import teqp

from reference import find, names
from reference.equations import thol_2015

ORDERS = [(m, n) for m in range(3) for n in range(3 - m)]
STEP = 1e-30

# M. Thol et al., J. Phys. Chem. Ref. Data 45, 023101 (2016), printed by the authors for T 1.32, rho 0.31; read
PRINTED_2016 = {
    (0, 0): -0.848655028421735,
    (1, 0): -1.72121486947745,
    (0, 1): -0.682159784922984,
    (2, 0): -3.06580477714764,
    (1, 1): -1.43011286241234,
    (0, 2): 0.364319525724386,
}
# With the authors' code for J. Kolafa, I. Nezbeda, Fluid Phase Equilib. 100, 1 (1994); T, rho, u, P, to 2e-6; read
PRINTED_1994 = [
    (1.3, 0.2, -1.5371511277396868, 0.12147936810578708),
    (1.3, 0.4, -2.806016725054152, 0.11253334756806482),
]


def multifluid(reference: Any) -> Any:
    """The same coefficients in the independent library's general model: checks the evaluation, not the typing."""
    equation = reference.equation
    power = [(*term, 0.0) for term in equation.polynomial] + list(equation.exponential)
    columns = [[list(column) for column in zip(*rows, strict=True)] for rows in (power, equation.gaussian)]
    point = {"T": equation.reducing_temperature, "rhomolar": equation.reducing_density, "p": 1.0}
    terms = [
        {"type": "ResidualHelmholtzPower", **dict(zip("ntdl", columns[0], strict=True))},
        {
            "type": "ResidualHelmholtzGaussian",
            **dict(zip(("n", "t", "d", "eta", "beta", "gamma", "epsilon"), columns[1], strict=True)),
        },
    ]
    equation_of_state = {
        "gas_constant": 1.0,
        "molar_mass": 1.0,
        "STATES": {"reducing": point, "critical": point},
        "alphar": terms,
        "alpha0": [],
    }
    component = {
        "EOS": [equation_of_state],
        "INFO": {"NAME": "fluid", "CAS": "0", "REFPROP_NAME": "fluid"},
        "STATES": {"critical": point},
        "ANCILLARIES": {},
    }
    return teqp.make_model({"kind": "multifluid", "model": {"components": [component], "BIP": [], "departure": []}})


INDEPENDENT: dict[str, Callable[[], Any]] = {
    "thol-2016": lambda: teqp.make_model({"kind": "LJ126_TholJPCRD2016", "model": {}}),
    "thol-2015": lambda: multifluid(thol_2015.REFERENCE),
    "kolafa-nezbeda-1994": lambda: teqp.make_model({"kind": "LJ126_KolafaNezbeda1994", "model": {}}),
}


def test_every_reference_has_an_independent_model() -> None:
    assert set(INDEPENDENT) == set(names())


@pytest.mark.parametrize("name", names())
def test_derivatives_equal_an_independent_library(name: str) -> None:
    """All six orders over the range of temperature and density, to 1e-10 of the larger of 1 and the value."""
    model, reference, pure = INDEPENDENT[name](), find(name), np.array([1.0])
    temperature = np.linspace(*reference.temperature_range, 18)
    density = np.concatenate([[1e-3, 1e-2], np.linspace(0.05, 1.15, 14)])
    ours = reference.derivatives(temperature[:, None], density[None, :])
    assert ours.shape == (3, 3, 18, 16)
    for m, n in ORDERS:
        derivative = getattr(model, f"get_Ar{m}{n}")
        theirs = np.array([[derivative(t, rho, pure) for rho in density] for t in temperature])
        np.testing.assert_allclose(ours[m, n], theirs, rtol=1e-10, atol=1e-10)


def test_derivatives_of_thol_2016_are_those_its_authors_print() -> None:
    a = find("thol-2016").derivatives(1.32, 0.31)
    for (m, n), printed in PRINTED_2016.items():
        assert a[m, n] == pytest.approx(printed, abs=1e-10, rel=0)


@pytest.mark.parametrize(("temperature", "density", "energy", "pressure"), PRINTED_1994)
def test_kolafa_nezbeda_gives_the_published_energy_and_pressure(
    temperature: float, density: float, energy: float, pressure: float
) -> None:
    a = find("kolafa-nezbeda-1994").derivatives(temperature, density)
    assert temperature * a[1, 0] == pytest.approx(energy, abs=2e-6, rel=0)
    assert density * temperature * (1.0 + a[0, 1]) == pytest.approx(pressure, abs=2e-6, rel=0)


@pytest.mark.parametrize("name", names())
def test_higher_derivatives_are_derivatives_of_the_lower(name: str) -> None:
    """Complex step in temperature and density: exact to rounding, so the bound is 1e-12 of the terms' size."""
    reference = find(name)
    temperature, density = np.meshgrid(np.linspace(0.75, 6.0, 9), np.linspace(0.02, 1.0, 9))
    a = reference.derivatives(temperature, density)
    along_density = reference.derivatives(temperature, density + 1j * STEP).imag / STEP * density
    along_temperature = reference.derivatives(temperature + 1j * STEP, density).imag / STEP * -temperature
    scale = 1.0 + np.abs(a).max(axis=(0, 1), where=np.isfinite(a), initial=0.0)
    expected = {
        (0, 1): along_density[0, 0],
        (1, 0): along_temperature[0, 0],
        (0, 2): along_density[0, 1] - a[0, 1],
        (2, 0): along_temperature[1, 0] - a[1, 0],
        (1, 1): along_temperature[0, 1],
    }
    for (m, n), value in expected.items():
        assert np.max(np.abs(a[m, n] - value) / scale) < 1e-12
    assert np.max(np.abs(a[1, 1] - along_density[1, 0]) / scale) < 1e-12


@pytest.mark.parametrize("name", names())
def test_derivatives_broadcast_and_leave_higher_orders_blank(name: str) -> None:
    reference = find(name)
    scalar = reference.derivatives(1.1, 0.7)
    assert scalar.shape == (3, 3)
    assert np.isnan(scalar[[1, 2, 2], [2, 1, 2]]).all()
    grid = reference.derivatives(np.array([[1.0], [1.1]]), np.array([0.5, 0.6, 0.7]))
    np.testing.assert_allclose(grid[:, :, 1, 2], scalar, rtol=1e-14)
    empty = reference.derivatives(1.1, 0.0)
    for m, n in ORDERS:
        assert empty[m, n] == 0.0


@pytest.mark.parametrize(("name", "curvature"), [("thol-2016", 1e-4), ("thol-2015", 1e-6)])
def test_isotherm_is_flat_at_the_published_critical_point(name: str, curvature: float) -> None:
    """dP/d rho = d2P/d rho2 = 0 was imposed in both fits, so eight printed digits leave 1e-7 in the slope.

    A wrong digit in nearly any coefficient shows here; the bound on the curvature is what the printed digits leave.
    """
    reference = find(name)
    a = reference.derivatives(reference.critical_temperature, reference.critical_density + 1j * STEP)
    slope = 1.0 + 2.0 * a[0, 1] + a[0, 2]
    assert abs(slope.real) < 1e-7
    assert abs(slope.imag / STEP) < curvature
