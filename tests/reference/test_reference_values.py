"""Values of a reference: thermodynamic identities, uncertainty, range, names."""

import math
import pickle

import numpy as np
import pytest

from reference import Reference, find, names
from reference.errors import OutOfRange, ReferenceRefusal, UnknownProperty, UnknownReference
from reference.properties import DERIVED, DIRECT, PROPERTIES
from reference.source import Accuracy

STEP = 1e-30
STATES = [(1.0, 0.8), (1.5, 0.6), (2.0, 0.3), (0.85, 0.005), (0.75, 0.84)]
ALL_STATES = pytest.mark.parametrize(("temperature", "density"), STATES)
ALL_NAMES = pytest.mark.parametrize("name", names())

# NIST Standard Reference Simulation Website, Lennard-Jones NVT Monte Carlo, N 500, cutoff 3 with long-range
# corrections, T 0.85; read, but the error of P at rho 0.776 from memory: rho, u, its error, P, its error
MONTE_CARLO = [
    (0.005, -0.051901, 7.53e-5, 0.0041003, 5.05e-7),
    (0.009, -0.093973, 1.29e-4, 0.0071641, 2.24e-6),
    (0.776, -5.5121, 4.55e-4, 0.0067714, 1.72e-3),
    (0.78, -5.5386, 7.26e-4, 0.047924, 3.18e-3),
    (0.86, -6.0305, 2.38e-3, 1.266, 1.36e-2),
]
# Slopes along isochores of the molecular dynamics of G. Chaparro, E. A. Mueller, J. Chem. Phys. 158, 184505 (2023);
# computed, good to 0.005: rho, T, c_v without its ideal part, gamma_V
ISOCHORES = [
    (0.1, 2.399948, 0.07499, 0.12014),
    (0.3, 2.399794, 0.18006, 0.51336),
    (0.5, 1.699953, 0.35334, 1.32310),
    (0.6, 1.699941, 0.42827, 1.99267),
    (0.7, 1.500020, 0.58277, 2.99539),
    (0.8, 1.199904, 0.83498, 4.56256),
    (0.8, 7.200411, 0.47854, 2.66010),
]


def complex_property(reference: Reference, name: str, temperature: complex, density: complex) -> complex:
    """Straight from the definitions, for a complex step in either variable; ideal c_v 1.5."""
    a = reference.derivatives(temperature, density)
    pressure = density * temperature * (1.0 + a[0, 1])
    if name == "pressure":
        return complex(pressure)
    energy = temperature * (1.5 + a[1, 0])
    return complex(energy + pressure / density if name == "enthalpy" else energy)


def slopes(reference: Reference, name: str, temperature: float, density: float) -> tuple[float, float]:
    """Derivatives with respect to temperature and density."""
    along_temperature = complex_property(reference, name, temperature + 1j * STEP, density).imag / STEP
    along_density = complex_property(reference, name, temperature, density + 1j * STEP).imag / STEP
    return along_temperature, along_density


def absolute(reference: Reference, temperature: float, density: float) -> dict[str, float]:
    """By integration of P along the isotherm, and of its slope dP/dT for the entropy, from the ideal gas."""
    points, weights = np.polynomial.legendre.leggauss(64)
    densities, weights = 0.5 * density * (points + 1.0), 0.5 * density * weights
    pressures = np.array([complex_property(reference, "pressure", temperature, rho).real for rho in densities])
    rates = np.array([slopes(reference, "pressure", temperature, rho)[0] for rho in densities])
    helmholtz = float(weights @ (pressures / densities**2 - temperature / densities))
    z = complex_property(reference, "pressure", temperature, density).real / (density * temperature)
    return {
        "residual_helmholtz_energy": helmholtz,
        "residual_entropy": -float(weights @ (rates / densities**2 - 1.0 / densities)),
        "residual_chemical_potential": helmholtz + temperature * (z - 1.0),
    }


@ALL_STATES
@ALL_NAMES
def test_properties_obey_thermodynamics(name: str, temperature: float, density: float) -> None:
    """Every property from derivatives of P, energy and enthalpy instead of the formulas; exact to rounding."""
    reference = find(name)
    p_t, p_rho = slopes(reference, "pressure", temperature, density)
    e_t, _ = slopes(reference, "energy", temperature, density)
    h_t, h_rho = slopes(reference, "enthalpy", temperature, density)
    c_p = h_t - h_rho * p_t / p_rho
    pressure = complex_property(reference, "pressure", temperature, density).real
    # dT/dP at constant enthalpy, with rho as the other variable
    joule_thomson = h_rho / (h_rho * p_t - h_t * p_rho)
    expected = {
        "pressure": pressure,
        "compressibility_factor": pressure / (density * temperature),
        "residual_energy": complex_property(reference, "energy", temperature, density).real - 1.5 * temperature,
        "residual_heat_capacity": e_t - 1.5,
        "heat_capacity": e_t,
        "thermal_pressure": p_t,
        "bulk_modulus": density * p_rho,
        "isobaric_heat_capacity": c_p,
        "thermal_expansion": p_t / (density * p_rho),
        "sound_speed": math.sqrt(c_p / e_t * p_rho),
        "joule_thomson": joule_thomson,
        "grueneisen": p_t / (density * e_t),
        "enthalpy": complex_property(reference, "enthalpy", temperature, density).real,
        **absolute(reference, temperature, density),
    }
    assert set(expected) == set(PROPERTIES)
    for key, value in expected.items():
        found = reference.value(key, temperature=temperature, density=density).value
        assert found == pytest.approx(value, rel=1e-9, abs=1e-12), key


def test_an_ideal_heat_capacity_of_2_5_adds_one() -> None:
    state = {"temperature": 1.2, "density": 0.7}
    reference = find("thol-2016")
    for key, gain in (("heat_capacity", 1.0), ("isobaric_heat_capacity", 1.0), ("enthalpy", 1.2)):
        richer = reference.value(key, ideal_heat_capacity=2.5, **state).value
        assert richer - reference.value(key, **state).value == pytest.approx(gain, rel=1e-12)
    kept = reference.value("residual_heat_capacity", ideal_heat_capacity=2.5, **state).value
    assert kept == reference.value("residual_heat_capacity", **state).value


def test_dilute_gas_is_ideal() -> None:
    """At rho 1e-4 and T 3 the residual parts are B2 rho of order 1e-4."""
    ideal = {
        "compressibility_factor": 1.0,
        "heat_capacity": 1.5,
        "isobaric_heat_capacity": 2.5,
        "thermal_expansion": 1.0 / 3.0,
        "sound_speed": math.sqrt(5.0),
        "grueneisen": 2.0 / 3.0,
        "enthalpy": 7.5,
    }
    for key, value in ideal.items():
        result = find("thol-2016").value(key, temperature=3.0, density=1e-4)
        assert result.value == pytest.approx(value, rel=1e-3)
        assert 0.0 < result.uncertainty < 1e-4


def test_absolute_properties_are_as_uncertain_as_the_pressure_along_the_isotherm() -> None:
    """Half the width of P, which goes as rho^2 up to density 0.1, over rho^2 and integrated: in proportion to rho."""
    reference = find("thol-2016")
    low = reference.value("residual_helmholtz_energy", temperature=2.0, density=0.05).uncertainty
    high = reference.value("residual_helmholtz_energy", temperature=2.0, density=0.10).uncertainty
    accuracy = reference.accuracy["pressure"]
    assert high == pytest.approx(0.5 * accuracy.absolute / 0.1, rel=0.3)
    assert high / low == pytest.approx(2.0, rel=0.2)
    energy = reference.accuracy["residual_energy"].half_width(-1.0, density=0.1)
    entropy = reference.value("residual_entropy", temperature=2.0, density=0.1).uncertainty
    assert 0.5 * high < entropy < 0.5 * (high + energy)


def test_bulk_modulus_of_the_shifted_fluid() -> None:
    """13.5 at rho 0.8, T 1.0: M. Thol et al., Int. J. Thermophys. 36, 25 (2015), coefficients read."""
    result = find("thol-2015").value("bulk_modulus", temperature=1.0, density=0.8)
    assert result.value == pytest.approx(13.5, abs=0.05)
    assert result.uncertainty < 0.1
    full = find("thol-2016").value("bulk_modulus", temperature=1.0, density=0.8)
    assert full.value < 12.5


@pytest.mark.parametrize(("density", "energy", "energy_error", "pressure", "pressure_error"), MONTE_CARLO)
@pytest.mark.parametrize("name", ["thol-2016", "kolafa-nezbeda-1994"])
def test_published_monte_carlo_lies_within_the_stated_accuracy(
    name: str, density: float, energy: float, energy_error: float, pressure: float, pressure_error: float
) -> None:
    """Within two standard uncertainties of the equation plus two of the simulation."""
    rows = {"residual_energy": (energy, energy_error), "pressure": (pressure, pressure_error)}
    for key, (published, error) in rows.items():
        result = find(name).value(key, temperature=0.85, density=density)
        assert abs(result.value - published) < 2.0 * (result.uncertainty + error)
        assert result.uncertainty < (0.0065 if key == "residual_energy" else 0.0085)


@pytest.mark.parametrize(("density", "temperature", "heat_capacity", "thermal_pressure"), ISOCHORES)
@pytest.mark.parametrize("name", ["thol-2016", "kolafa-nezbeda-1994"])
def test_published_isochores_lie_within_the_stated_accuracy(
    name: str, density: float, temperature: float, heat_capacity: float, thermal_pressure: float
) -> None:
    """Within two standard uncertainties of the equation plus the 0.005 of the data."""
    rows = {"residual_heat_capacity": heat_capacity, "thermal_pressure": thermal_pressure}
    for key, published in rows.items():
        result = find(name).value(key, temperature=temperature, density=density)
        assert abs(result.value - published) < 2.0 * result.uncertainty + 0.005
        assert 0.0 < result.uncertainty < 0.013


def test_second_opinion_agrees_within_both_accuracies() -> None:
    """Two equations of the same fluid, fitted to different data, away from the critical point."""
    for temperature, density in [(1.0, 0.8), (1.5, 0.6), (1.2, 0.75), (2.5, 0.9), (3.0, 0.4)]:
        for key in ("residual_energy", "pressure"):
            first = find("thol-2016").value(key, temperature=temperature, density=density)
            second = find("kolafa-nezbeda-1994").value(key, temperature=temperature, density=density)
            assert abs(first.value - second.value) < 2.0 * (first.uncertainty + second.uncertainty), (key, temperature)


def test_accuracy_is_absolute_where_dense_relative_where_large_and_vanishes_with_the_gas() -> None:
    accuracy = Accuracy(absolute=0.01, order=2, relative=0.002, origin="test")
    assert accuracy.half_width(1.0, density=0.8) == 0.01
    assert accuracy.half_width(-50.0, density=0.8) == pytest.approx(0.1)
    assert accuracy.half_width(0.0, density=0.01) == pytest.approx(1e-4)


@ALL_NAMES
def test_standard_uncertainty_is_half_the_95_percent_figure_and_says_whose(name: str) -> None:
    reference = find(name)
    assert set(reference.accuracy) == set(DIRECT)
    a = reference.derivatives(1.5, 0.6)
    for key, residual in {"residual_energy": 1.5 * a[1, 0], "residual_heat_capacity": -a[2, 0]}.items():
        result = reference.value(key, temperature=1.5, density=0.6)
        half_width = reference.accuracy[key].half_width(float(residual), density=0.6)
        assert result.uncertainty == pytest.approx(0.5 * half_width, rel=1e-12)
        assert "not from a statement of its authors" in result.accuracy_note
        assert "Chaparro" in result.accuracy_note


def test_the_shifted_equation_says_that_its_accuracy_is_borrowed() -> None:
    values = {
        name: find("thol-2015").value(name, temperature=1.0, density=0.8) for name in ("bulk_modulus", "pressure")
    }
    assert values["bulk_modulus"].accuracy_note.startswith("borrowed from the equation of the same authors")
    assert values["pressure"].accuracy_note.startswith("from the deviation of the equation from our own sampling")
    assert values["pressure"].uncertainty == pytest.approx(0.015, rel=1e-12)


def test_uncertainty_of_a_derived_property_is_propagated() -> None:
    """Z = P/(rho T) exactly; h = u + P/rho + 1.5 T in quadrature."""
    reference, state = find("thol-2016"), {"temperature": 1.5, "density": 0.6}
    u, p = (reference.value(key, **state).uncertainty for key in ("residual_energy", "pressure"))
    z, h = (reference.value(key, **state) for key in ("compressibility_factor", "enthalpy"))
    assert z.uncertainty == pytest.approx(p / 0.9, rel=1e-12)
    assert h.uncertainty == pytest.approx(math.hypot(u, p / 0.6), rel=1e-12)
    for key in DERIVED:
        assert reference.value(key, **state).accuracy_note.startswith("propagated from the accuracies of")


@pytest.mark.parametrize(
    ("name", "temperature", "density", "message"),
    [
        ("thol-2016", 0.6, 0.8, r"thol-2016 holds from temperature 0\.7 to 9, found 0\.6"),
        ("thol-2016", 9.5, 0.8, r"thol-2016 holds from temperature 0\.7 to 9, found 9\.5"),
        (
            "thol-2016",
            5.0,
            1.25,
            r"thol-2016 holds up to pressure 65, and temperature 5 at density 1\.25 lies above it",
        ),
        ("thol-2015", 1.0, 1.05, r"thol-2015 holds up to pressure 7, and temperature 1 at density 1\.05"),
        ("kolafa-nezbeda-1994", 2.0, 1.3, r"holds up to density 1\.2, found 1\.3"),
        (
            "thol-2016",
            0.85,
            0.3,
            r"unstable at temperature 0\.85 and density 0\.3: it separates into liquid and vapour",
        ),
        ("kolafa-nezbeda-1994", 1.0, 0.3, r"unstable at temperature 1 and density 0\.3"),
        ("thol-2016", math.nan, 0.8, r"temperature must be a positive number, found nan"),
        ("thol-2016", 1.0, -0.8, r"density must be a positive number, found -0\.8"),
    ],
)
def test_states_outside_the_range_are_refused(name: str, temperature: float, density: float, message: str) -> None:
    with pytest.raises(OutOfRange, match=message) as refusal:
        find(name).value("pressure", temperature=temperature, density=density)
    assert isinstance(refusal.value, ValueError)
    assert find(name).covers(temperature, density) == str(refusal.value)


def test_loops_inside_the_two_phase_region_are_refused_though_locally_stable() -> None:
    """At T 0.9, rho 0.25 the equation has dP/d rho > 0, an artefact between its spinodals."""
    reference = find("thol-2016")
    a = reference.derivatives(0.9, 0.25)
    assert 1.0 + 2.0 * a[0, 1] + a[0, 2] > 0.0
    assert "unstable" in reference.covers(0.9, 0.25)


@pytest.mark.parametrize("state", [(0.7, 0.85), (9.0, 0.9), (0.85, 0.77), (1.31, 0.2), (1.4, 0.31)])
def test_the_range_includes_its_ends_and_metastable_states(state: tuple[float, float]) -> None:
    assert find("thol-2016").covers(*state) == ""


def test_an_absurd_density_is_refused_without_a_warning() -> None:
    with np.errstate(all="raise"):
        assert "holds up to pressure 65" in find("thol-2016").covers(1.0, 1e300)


def test_a_property_it_does_not_give_is_refused() -> None:
    with pytest.raises(UnknownProperty, match="thol-2016 does not give 'viscosity'; it gives residual_energy, "):
        find("thol-2016").value("viscosity", temperature=1.0, density=0.8)


@pytest.mark.parametrize("ideal", [0.0, -1.5, math.nan])
def test_ideal_heat_capacity_must_be_positive(ideal: float) -> None:
    with pytest.raises(OutOfRange, match="ideal_heat_capacity must be a positive number"):
        find("thol-2016").value("heat_capacity", temperature=1.0, density=0.8, ideal_heat_capacity=ideal)


def test_names_are_known_and_a_misspelt_one_is_met_with_the_nearest() -> None:
    assert names() == ["thol-2016", "thol-2015", "kolafa-nezbeda-1994"]
    for name in names():
        reference = find(name)
        assert reference.name == name
        assert str(reference.source.year) in str(reference.source)
    with pytest.raises(UnknownReference, match=r"no reference is called 'tol-2016'; did you mean 'thol-2016'\?"):
        find("tol-2016")
    with pytest.raises(UnknownReference, match=r"no reference is called 'xyz'\. There are: thol-2016, thol-2015, "):
        find("xyz")


def test_same_model_needs_the_same_truncation() -> None:
    for name in ("thol-2016", "kolafa-nezbeda-1994"):
        assert find(name).same_model("corrected", 3.0)
        assert not find(name).same_model("shifted", 2.5)
        assert not find(name).same_model("plain", 3.0)
    shifted = find("thol-2015")
    assert shifted.same_model("shifted", 2.5)
    assert not shifted.same_model("shifted", 3.0)
    assert not shifted.same_model("corrected", 2.5)
    assert not shifted.same_model("force-shifted", 2.5)


def test_references_and_refusals_survive_pickling() -> None:
    for name in names():
        copy = pickle.loads(pickle.dumps(find(name)))
        np.testing.assert_array_equal(copy.derivatives(1.1, 0.7), find(name).derivatives(1.1, 0.7))
    with pytest.raises(ReferenceRefusal) as refusal:
        find("thol-2016").coexistence(2.0)
    copy = pickle.loads(pickle.dumps(refusal.value))
    assert type(copy) is type(refusal.value)
    assert str(copy) == str(refusal.value)
