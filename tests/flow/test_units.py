"""Units against argon values worked out by hand, and text with a unit."""

import math

import pytest
from scipy.constants import Avogadro, Boltzmann, R, atomic_mass

from canonry.quantities import NotAccepted, from_text, percent, rounded, shortest_text
from canonry.units import PROPERTIES, UNITS, Scale, unit_label

ARGON = Scale(epsilon=119.8 * Boltzmann, sigma=3.405e-10, mass=39.948 * atomic_mass)


@pytest.mark.parametrize(
    ("quantity", "by_hand"),
    [
        # epsilon/k_B = 119.8 K; sigma^3 = 3.94777e-29 m3; m = 6.63352e-26 kg; epsilon = 1.654017e-21 J
        ("temperature", 119.8),
        ("density", 1680.32),
        ("length", 0.3405),
        ("volume", 0.0394777),
        ("time", 2.15635),
        ("friction", 1 / 2.15635),
        ("residual_energy", 0.996072),
        ("enthalpy", 0.996072),
        ("residual_chemical_potential", 0.996072),
        ("residual_heat_capacity", 8.314463),
        ("heat_capacity", 8.314463),
        ("isobaric_heat_capacity", 8.314463),
        ("residual_helmholtz_energy", 0.996072),
        ("residual_entropy", 8.314463),
        ("residual_helmholtz_change", 8.314463),
        ("residual_entropy_change", 8.314463),
        ("pressure", 41.8975),
        ("bulk_modulus", 41.8975),
        ("thermal_pressure", 0.349729),
        ("thermal_expansion", 1 / 119.8),
        ("sound_speed", 157.905),
        ("joule_thomson", 1 / 0.349729),
        ("compressibility_factor", 1.0),
        ("grueneisen", 1.0),
    ],
)
def test_factors_of_argon_by_hand(quantity: str, by_hand: float) -> None:
    # the hand values carry six digits
    assert ARGON.factor(quantity) == pytest.approx(by_hand, rel=5e-6)


def test_every_quantity_is_checked_above_and_has_both_labels() -> None:
    checked = test_factors_of_argon_by_hand.pytestmark[0].args[1]
    assert {quantity for quantity, _ in checked} == set(UNITS)
    assert all(unit_label(name, "SI") and unit_label(name, "reduced") for name in UNITS)
    assert set(PROPERTIES) < set(UNITS)


def test_labels() -> None:
    assert unit_label("pressure", "SI") == "MPa"
    assert unit_label("pressure", "reduced") == "epsilon/sigma^3"
    assert unit_label("heat_capacity", "SI") == "J/(mol K)"
    assert unit_label("compressibility_factor", "SI") == unit_label("compressibility_factor", "reduced") == "1"


def test_relations_between_the_units_hold() -> None:
    # one mole at one reduced state: c_v T is an energy, gamma_V T and u rho are pressures, m w^2 = B_T/rho
    density = ARGON.factor("density") / (39.948 * atomic_mass * Avogadro)  # mol/m3
    temperature = ARGON.factor("temperature")
    assert ARGON.factor("heat_capacity") * temperature == pytest.approx(1e3 * ARGON.factor("residual_energy"))
    assert ARGON.factor("thermal_pressure") * temperature == pytest.approx(ARGON.factor("pressure"))
    assert 1e3 * ARGON.factor("residual_energy") * density == pytest.approx(1e6 * ARGON.factor("pressure"))
    speed = math.sqrt(1e6 * ARGON.factor("bulk_modulus") / ARGON.factor("density"))
    assert ARGON.factor("sound_speed") == pytest.approx(speed)
    assert ARGON.factor("length") * 1e3 / ARGON.factor("time") == pytest.approx(speed)
    cooling = temperature / ARGON.factor("pressure")
    assert ARGON.factor("joule_thomson") == pytest.approx(cooling)


@pytest.mark.parametrize("size", [0.0, -1.0, math.nan, math.inf])
def test_a_scale_is_positive(size: float) -> None:
    with pytest.raises(ValueError, match="sigma must be a positive number"):
        Scale(epsilon=1e-21, sigma=size, mass=1e-26)


@pytest.mark.parametrize(
    ("text", "quantity", "reduced"),
    [
        ("119.8 K", "temperature", 1.0),
        ("-153.35 degC", "temperature", 1.0),
        ("1.680323 g/cm3", "density", 1.0),
        ("1680.323 kg/m3", "density", 1.0),
        ("1680.323 kg m-3", "density", 1.0),
        ("1.680323 g / cm^3", "density", 1.0),
        ("42.0628 mol/L", "density", 1.0),
        ("25.33079 1/nm3", "density", 1.0),
        ("25.33079 nm**-3", "density", 1.0),
        ("0.3405 nm", "length", 1.0),
        ("3.405 Å", "length", 1.0),
        ("3.405angstrom", "length", 1.0),
        ("2156.35 fs", "time", 1.0),
        ("2.15635 ps", "time", 1.0),
        ("0.463747 1/ps", "friction", 1.0),
        ("0.463747 ps^-1", "friction", 1.0),
        ("41.8975 MPa", "pressure", 1.0),
        ("418.975 bar", "bulk_modulus", 1.0),
        ("0.996072 kJ/mol", "residual_energy", 1.0),
        ("8.314463 J/(mol K)", "heat_capacity", 1.0),
        ("8.314463 J/mol/K", "heat_capacity", 1.0),
        ("8.314463 J/(K·mol)", "heat_capacity", 1.0),
        ("0.349729 MPa/K", "thermal_pressure", 1.0),
    ],
)
def test_text_with_a_unit(text: str, quantity: str, reduced: float) -> None:
    assert from_text(text, quantity, ARGON) == pytest.approx(reduced, rel=5e-6)


@pytest.mark.parametrize(
    ("text", "quantity", "SI"),
    [
        ("119.8 K", "epsilon", 119.8 * Boltzmann),
        ("0.996072 kJ/mol", "epsilon", 119.8 * Boltzmann),
        ("1.654017e-21 J", "epsilon", 119.8 * Boltzmann),
        ("3.405 angstrom", "sigma", 3.405e-10),
        ("39.948 u", "mass", 39.948 * atomic_mass),
        ("39.948 g/mol", "mass", 39.948e-3 / Avogadro),
    ],
)
def test_parameters_in_SI(text: str, quantity: str, SI: float) -> None:
    assert from_text(text, quantity, None) == pytest.approx(SI, rel=1e-6)


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("1.36", "what is needed is a number with a unit of density, such as"),
        ("", "what is needed is a number with a unit"),
        ("dense", "what is needed is a number with a unit"),
        ("nan kg/m3", "what is needed is a number with a unit"),
        ("1.36 g/cm3; 2", "what is needed is a number with a unit"),
        ("1.36 g/cn3", "'g/cn3' is not a unit known here"),
        ("1.36 g/cm2", "'g/cm2' is not a unit of density"),
        ("1.36 K", "'K' is not a unit of density"),
    ],
)
def test_text_that_is_no_density(text: str, message: str) -> None:
    with pytest.raises(NotAccepted, match=message):
        from_text(text, "density", ARGON)


def test_units_too_large_for_a_number_are_not_accepted() -> None:
    with pytest.raises(NotAccepted, match="what is needed"):
        from_text("1 Qm^9 Qm^9 Qm^9 K/m^9/m^9/m^9", "temperature", ARGON)


def test_percent() -> None:
    assert percent("2 %") == 0.02
    assert percent(" 0.5%") == 0.005
    for text in ("%", "0 %", "-1 %", "101 %", "two %"):
        with pytest.raises(NotAccepted, match='such as "2 %"'):
            percent(text)


def test_the_shortest_text_reads_back_to_the_same_value() -> None:
    value = rounded(from_text("1.36 g/cm3", "density", ARGON))
    assert shortest_text(value, "density", ARGON, ["mol/L", "g/cm3"]) == "1.36 g/cm3"
    third = rounded(1.0 / 3.0)
    assert rounded(from_text(shortest_text(third, "temperature", ARGON, ["K"]), "temperature", ARGON)) == third
    with pytest.raises(ValueError, match="more digits"):
        shortest_text(1.0 / 3.0, "temperature", ARGON, ["K"])


def test_molar_gas_constant() -> None:
    assert pytest.approx(R, rel=1e-9) == Boltzmann * Avogadro == ARGON.factor("heat_capacity")
