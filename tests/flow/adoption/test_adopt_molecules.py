"""Samples of molecules whose pair functions are not known here."""

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

import canonry
from canonry.errors import UserError
from canonry.job import report
from sampler.fluid import State
from tests.flow.adoption.conftest import INSERTED, Home, assert_same, command, description, table

MOLECULES, TEMPERATURES, DENSITY, EXPONENT, WITHIN = 40, (280.0, 300.0, 325.0), "5 mol/L", 2.0, 3
"""Homogeneous wells, U(V) = V^-m h with h a sum of 3N squares, so that U ~ Gamma(3N/2, T), W = m U, c_v,res = 3/2 and
P = rho T (1 + 3m/2); molecules that also hold WITHIN springs each, so that energy within is Gamma(WITHIN N/2, T)."""


def elsewhere(generator: np.random.Generator, temperature: float, n: int) -> pd.DataFrame:
    """Independent samples of flexible molecules, energies in kJ/mol of the box, pressures in bar with all of K in it.

    Of 3 + WITHIN degrees of freedom a molecule, those within hold 2K/3V in the pressure that their forces take back.
    """
    kilojoule, kelvin = 1.0, 8.31446261815324e-3  # of k_B T, kJ/mol
    thermal = kelvin * temperature * kilojoule
    between = thermal * generator.gamma(1.5 * MOLECULES, size=n)
    within = thermal * generator.gamma(0.5 * WITHIN * MOLECULES, size=n)
    kinetic = thermal * generator.gamma(0.5 * (3 + WITHIN) * MOLECULES, size=n)
    taken_back = -thermal * WITHIN * MOLECULES / 3.0
    volume = MOLECULES / 5.0  # L for one mole of boxes; kJ/L are MPa
    pressure = 10.0 * (2.0 / 3.0 * kinetic + taken_back + EXPONENT * between) / volume
    return pd.DataFrame({"E": between + within, "between": between, "K": kinetic, "P": pressure})


def of_molecules(intramolecular: Any, columns: dict[str, str], n: int = 4000) -> dict[str, Any]:
    generator = np.random.default_rng(77)
    return {
        "molecules": MOLECULES,
        "columns": columns,
        "units": {"energy": "kJ/mol", "pressure": "bar"},
        "energy": "total",
        "long_range": False,
        "pressure_kinetic": "instantaneous",
        "kinetic_freedom": (3 + WITHIN) * MOLECULES,
        "intramolecular": intramolecular,
        "interval": "1 ps",
        "fluid": {"potential": "elsewhere", "mass": "44.01 u"},
        "rungs": [
            {"temperature": f"{t} K", "density": DENSITY, "samples": [elsewhere(generator, t, n)]} for t in TEMPERATURES
        ],
    }


GAS = 8.31446261815324  # J/(mol K)
TOTALS = {"heat_capacity", "isobaric_heat_capacity", "sound_speed", "joule_thomson", "grueneisen", "enthalpy"}


@pytest.mark.parametrize(
    ("intramolecular", "columns", "exact", "lacking"),
    [
        (True, {"potential": "E"}, {"heat_capacity": GAS * (1.5 + 0.5 * WITHIN + 0.5 * (3 + WITHIN))}, "residual"),
        (False, {"potential": "between"}, {"residual_heat_capacity": GAS * 1.5, "residual_energy": True}, "heat_capac"),
        (
            "left out",
            {"potential": "between", "dynamical": "E"},
            {"residual_heat_capacity": GAS * 1.5, "residual_energy": True},
            "heat_capac",
        ),
        ("left out", {"potential": "between"}, {"residual_energy": True}, "residual_heat_capacity"),
    ],
)
def test_molecules_sampled_elsewhere_say_what_their_columns_hold(
    intramolecular: Any, columns: dict[str, str], exact: dict[str, Any], lacking: str
) -> None:
    """Exact values within 4.5 standard errors (24 values: one false alarm in 6000), error bars as independent."""
    adoption = canonry.adopt(of_molecules(intramolecular, columns | {"kinetic": "K", "pressure": "P"}), into="got")
    assert "Energy and pressure hold no part from beyond the cutoff." in adoption.notes
    assert any(lacking in name for name in adoption.missing["property"])
    results = report("got")
    assert not any("lennard" in text.lower() for text in (results.study_toml, Path("got/report.html").read_text()))
    own = results.properties[results.properties["method"] != "reweighted"]
    for _, row in results.properties.iterrows():
        thermal = GAS * row["temperature"] * 1e-3
        wanted = {"residual_energy": 1.5 * thermal, "pressure": 5.0 * thermal * (1.0 + 1.5 * EXPONENT)}
        wanted |= {"compressibility_factor": 1.0 + 1.5 * EXPONENT} | {k: v for k, v in exact.items() if v is not True}
        if row["property"] in wanted:
            assert abs(row["value"] - wanted[row["property"]]) < 4.5 * row["standard_error"], row
    found = set(own["property"])
    assert {*exact, "pressure", "compressibility_factor"} <= found
    assert found.isdisjoint(adoption.missing["property"])
    error = own[own["property"] == "pressure"]["standard_error"].to_numpy()
    # sd of W/V = m sqrt(3N/2) T/V over sqrt(4000); the noise of K is taken off
    alone = (
        EXPONENT * np.sqrt(1.5 * MOLECULES) * GAS * 1e-3 * np.array(TEMPERATURES) / (MOLECULES / 5.0) / np.sqrt(4000)
    )
    np.testing.assert_allclose(error, alone, rtol=0.15)
    reweighted = set(results.properties[results.properties["method"] == "reweighted"]["property"])
    assert bool(reweighted) == ("dynamical" in columns or intramolecular != "left out")
    assert bool(reweighted & {"heat_capacity"}) == (intramolecular is True)


def test_molecules_need_a_mass_in_SI_and_have_no_reference() -> None:
    spec = of_molecules(False, {"potential": "between", "kinetic": "K", "pressure": "P"}, n=500)
    with pytest.raises(UserError, match=r"fluid\.mass: missing; what is needed is that of one molecule"):
        canonry.adopt(spec | {"fluid": {"potential": "elsewhere"}}, into="got")
    with pytest.raises(UserError, match=r"intramolecular: in rungs\[1\], missing; .* \"left out\""):
        canonry.adopt({key: value for key, value in spec.items() if key != "intramolecular"}, into="got")
    with pytest.raises(UserError, match=r"compare\.against = \"thol-2016\": no reference describes a fluid"):
        canonry.adopt(spec | {"compare": {"against": "thol-2016"}}, into="got")
    with pytest.raises(UserError, match=r"rungs\[1\]\.frames: .* entry for each of the 1 repeats|needed is a list"):
        canonry.adopt(spec | {"rungs": [spec["rungs"][0] | {"frames": {"first": 1, "every": 1}}]}, into="got")
    canonry.adopt(spec, into="got")
    result = command("compare", "got", "--against", "thol-2016", code=2)
    assert "no reference describes a fluid that was sampled elsewhere" in result.output


def test_a_fluid_without_pair_functions_has_structure_but_no_routes_from_it(home: Home) -> None:
    spec = description(home, fluid={"potential": "elsewhere"}, intramolecular=False)
    state = home.study.states[0]
    given = {"samples": [each.frames for each in home.series[state]], "first": 50, "every": 50}
    samples = list(map(table, home.series[state]))
    spec["rungs"] = [{"temperature": 1.2, "density": 0.7, "samples": samples, "frames": given}]
    canonry.adopt(spec, into="got")
    results = report("got")
    assert_same(
        results.properties,
        own_values(home, state),
        but={"bulk_modulus", "thermal_expansion"} | TOTALS | INSERTED,
    )
    assert len(results.structure_factor)
    assert len(results.structure)
    assert 0.9 < results.structure["g"].iloc[-20:].mean() < 1.1


def own_values(home: Home, state: State) -> pd.DataFrame:
    own = home.properties[home.properties["method"] != "reweighted"]
    return own[own["temperature"] == state.temperature].assign(headline=True)
