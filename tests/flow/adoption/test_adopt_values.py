"""Adopted samples say the same as at home, and less where columns lack."""

import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import canonry
from canonry.health import CHECKS
from canonry.job import report
from estimators.canonical import rung_properties
from estimators.reweight import pool
from sampler.fluid import Fluid
from sampler.series import Series
from tests.flow.adoption.conftest import (
    ARGON,
    INSERTED,
    NAMES,
    SIZES,
    Home,
    assert_same,
    command,
    description,
    table,
    taken_in,
)


@pytest.mark.parametrize("kinetic_part", ["set", "instantaneous"])
def test_adopted_in_reduced_units_samples_say_what_they_say_at_home(home: Home, kinetic_part: str) -> None:
    taken_in(home, lambda each: table(each, kinetic_part=kinetic_part), pressure_kinetic=kinetic_part)
    assert_same(canonry.estimate("got").properties, home.properties, but=INSERTED)


def test_adopted_in_SI_with_frames_samples_say_what_they_say_at_home(home: Home) -> None:
    """From files, the way a user does it: per molecule, in kJ/mol, bar and angstrom, states in K and kg/m3."""
    scale = home.study.scale
    sizes = {"energy": 64 / scale.factor("residual_energy"), "pressure": 0.1 / scale.factor("pressure")}
    sizes["time"] = 1e-3 / scale.factor("time")
    lines = [
        "title = 'From afar'\nmolecules = 64\ncolumns = { time = 't', potential = 'U', dynamical = 'U_dyn', "
        "kinetic = 'K', pressure = 'P' }\nunits = { energy = 'kJ/mol', pressure = 'bar', time = 'fs', "
        "length = 'angstrom' }\nenergy = 'per molecule'\nlong_range = true\npressure_kinetic = 'set'\n"
        f"kinetic_freedom = 192\n[fluid]\npotential = 'lennard-jones'\n{ARGON}\ncutoff = '7.491 angstrom'\n"
        "truncation = 'corrected'\n"
    ]
    for number, (state, series) in enumerate(home.series.items()):
        files = [f"{number}-{each.repeat}" for each in series]
        for name, each in zip(files, series, strict=True):
            table(each, sizes=sizes).to_csv(f"{name}.csv", index=False)
            blocks = (
                "64\na frame\n" + "".join(f"Ar {x!r} {y!r} {z!r}\n" for x, y, z in (3.405 * frame).tolist())
                for frame in each.frames
            )
            Path(f"{name}.xyz").write_text("".join(blocks))
        temperature, density = state.temperature * 119.8, state.density * scale.factor("density")
        lines.append(
            f"[[rungs]]\ntemperature = '{temperature!r} K'\ndensity = '{density!r} kg/m3'\n"
            f"files = {[f'{name}.csv' for name in files]}\n"
            f"frames = {{ files = {[f'{name}.xyz' for name in files]}, first = 50, every = 50 }}\n"
        )
    Path("spec.toml").write_text("".join(lines))
    output = command("adopt", "spec.toml", "--into", "got").output
    assert "cannot be said" not in output
    assert re.search(r"143\.76 +1176\.23 +64 +2 +6000 +0\.1078 +120", output)
    results = canonry.estimate("got")
    assert results.units == "SI"
    assert results.title == "From afar"
    reduced = canonry.estimate("got", units="reduced")
    assert_same(reduced.properties, home.properties)
    np.testing.assert_allclose(reduced.structure["g"], home.structure["g"], rtol=1e-9)
    assert "spec.toml" in results.provenance["samples"]
    assert "described in spec.toml" in Path(report("got") and "got/report.html").read_text(encoding="utf-8")


@pytest.mark.parametrize("long_range", [True, False])
def test_a_long_range_part_that_is_lacking_is_added(home: Home, long_range: bool) -> None:
    def made(series: Series) -> pd.DataFrame:
        energy, virial, _ = (0.0, 0.0, 0.0) if long_range else series.fluid.tail(series.state.density)
        return table(series).assign(U=series.energy - 64 * energy, W=series.virial - 64 * virial)

    columns = {holds: name for holds, name in NAMES.items() if holds not in ("pressure", "kinetic")}
    taken_in(home, made, columns=columns, long_range=long_range)
    assert_same(canonry.estimate("got").properties, home.properties, but=INSERTED)


def test_energies_of_a_molecule_and_files_that_go_on_make_the_same_series(home: Home) -> None:
    def halves(series: Series) -> list[dict[str, list[float]]]:
        whole = table(series)
        whole[["U", "U_dyn", "K"]] /= 64
        return [{name: part[name].tolist() for name in whole} for part in (whole[:1234], whole[1234:])]

    adoption = taken_in(home, halves, energy="per molecule")
    for own in adoption.series:
        wanted = home.series[own.state][own.repeat]
        for name in ("energy", "sampled_energy", "kinetic", "virial", "hypervirial"):
            np.testing.assert_allclose(own.column(name), wanted.column(name), rtol=1e-9, atol=1e-9)
        assert own.interval == pytest.approx(wanted.interval)


FOLLOWING = {
    *("isobaric_heat_capacity", "thermal_expansion", "sound_speed", "joule_thomson", "grueneisen", "enthalpy"),
}
LACKING = {
    "potential": {"residual_energy", "residual_heat_capacity", "heat_capacity", "thermal_pressure", "bulk_modulus"}
    | FOLLOWING,
    "pressure": {"pressure", "compressibility_factor", "thermal_pressure", "bulk_modulus"} | FOLLOWING,
}


@pytest.mark.parametrize("column", LACKING)
def test_what_a_lacking_column_would_say_is_absent_and_named(home: Home, column: str) -> None:
    """The rest is as at home; without an energy there is nothing to reweight by, and methods are those of rungs."""
    needed = (
        {"time", "potential", "dynamical", "pressure"} - {column} - ({"dynamical"} if column == "potential" else set())
    )
    adoption = taken_in(home, columns={holds: NAMES[holds] for holds in needed})
    results = report("got")
    wanted = home.properties
    if column == "potential":
        wanted = wanted[wanted["method"] != "reweighted"].assign(headline=True)
        assert results.curve.empty
    assert_same(results.properties, wanted, but=LACKING[column] | INSERTED)
    told = adoption.missing.groupby("property")["column"].agg(lambda rows: " and ".join(sorted(set(rows)))).to_dict()
    assert {name for name in told if not name.startswith("check ")} == LACKING[column] | INSERTED | {"g(r)"}
    assert told["g(r)"] == told["residual_chemical_potential"] == "frames"
    pressure = "; pressure or virial" if column == "pressure" else ""
    assert told["residual_helmholtz_energy"] == f"frames{pressure}"
    energy = "; potential, without a part from within molecules" if column == "potential" else ""
    assert told["residual_entropy"] == f"frames{pressure}{energy}"
    assert all(column in told[name] for name in LACKING[column] - {"bulk_modulus"})
    pd.testing.assert_frame_equal(pd.read_csv("got/missing.csv"), adoption.missing)
    closing = command("estimate", "got").output
    assert ("P" if column == "potential" else "c_v") in closing


FRAMED = ("force-temperature", "one-phase", "box", "virial-routes", "quantum")
NEVER = {"ledger", "equal-shares", "step-bias"}  # no column brings the bath's heat, single directions, other sampling


@pytest.mark.parametrize(
    ("lacking", "rungs", "checks"),
    [
        ((), 3, {}),
        (
            ("frames",),
            3,
            dict.fromkeys(FRAMED, "frames"),
        ),
        (("kinetic",), 3, {"kinetic-law": "kinetic"}),
        (("pressure", "kinetic"), 3, {"kinetic-law": "kinetic", "virial-routes": "pressure or virial"}),
        ((), 1, dict.fromkeys(("pair-slope", "heat-routes"), "rungs of another temperature")),
        (
            ("potential", "dynamical"),
            1,
            {
                "pair-slope": "potential, or dynamical; rungs of another temperature",
                "heat-routes": "potential, without a part from within molecules; potential, or dynamical; rungs of "
                "another temperature",
                "enough": "potential, without a part from within molecules",
                "virial-routes": "potential, or dynamical",
            },
        ),
    ],
)
@pytest.mark.parametrize("potential", ["lennard-jones", "elsewhere"])
def test_health_checks_are_made_or_named_with_the_column_they_lack(
    home: Home, lacking: tuple[str, ...], rungs: int, checks: dict[str, str], potential: str
) -> None:
    """Every check of samples from elsewhere is in one of both tables, but those that no column lets be made."""
    named = {holds: NAMES[holds] for holds in ("time", "potential", "dynamical", "kinetic", "pressure")}
    spec = description(
        home, columns={holds: name for holds, name in named.items() if holds not in lacking}, intramolecular=False
    )
    spec["fluid"] = (spec["fluid"] if potential == "lennard-jones" else {"potential": potential}) | SIZES
    spec["rungs"] = spec["rungs"][:rungs]
    for rung, series in zip(spec["rungs"], home.series.values(), strict=False):
        rung["samples"] = list(map(table, series))
        if "frames" not in lacking:
            rung["frames"] = {"samples": [each.frames for each in series], "first": 50, "every": 50}
    adoption = canonry.adopt(spec, into="got")
    told = adoption.missing[adoption.missing["property"].str.startswith("check ")]
    named = {(row["property"].removeprefix("check "), row["column"]) for _, row in told.iterrows()}
    never = NEVER
    if potential == "elsewhere":
        never = NEVER | {"force-temperature", "virial-routes", "quantum"}
    assert named == {(check, column) for check, column in checks.items() if check not in never}
    made = set(canonry.estimate("got").health["check"])
    assert made | {check for check, _ in named} == set(CHECKS) - never
    assert made & {check for check, _ in named} <= {"one-phase"}, "without frames the bulk modulus alone is looked at"


def test_the_kinetic_energy_of_the_moment_that_stays_in_a_pressure_is_said(home: Home) -> None:
    columns = {holds: NAMES[holds] for holds in ("time", "potential", "dynamical", "pressure")}
    adoption = taken_in(
        home,
        lambda each: table(each, kinetic_part="instantaneous"),
        columns=columns,
        pressure_kinetic="instantaneous",
    )
    assert any("no column `kinetic`" in note for note in adoption.notes)
    assert "bulk_modulus" in set(adoption.missing["property"])
    found = canonry.estimate("got").properties
    both = home.properties.merge(found, on=["temperature", "property", "method"], suffixes=("", "_found"))
    own = both[both["property"].isin(["pressure", "thermal_pressure"])]
    assert len(own) == 12
    # K is independent of what positions hold: within the error bar that its noise adds, a standard error of the mean of
    # 2K/3V of sqrt(2 N/3) T/V/sqrt(n), about 0.05 for n = 2000 (it decorrelates within a few samples)
    assert (np.abs(own["value"] - own["value_found"]) < 5.0 * own["standard_error_found"]).all()
    assert (own["standard_error_found"] < own["standard_error"] * 3.0).all()


def test_rungs_of_unequal_length_and_a_single_rung_work(home: Home) -> None:
    spec = description(home)
    lengths = iter([(1000, 2500), (3000, 700), (2000, 3000)])
    for rung, series in zip(spec["rungs"], home.series.values(), strict=True):
        rung["samples"] = [table(each)[:length] for each, length in zip(series, next(lengths), strict=True)]
    canonry.adopt(spec, into="uneven")
    cut = [each.after(0) for each in canonry.adopt(spec, into="again").series]
    assert [len(each) for each in cut] == [1000, 2500, 3000, 700, 2000, 3000]
    results = canonry.estimate("uneven")
    assert set(results.equilibration["samples"]) == {1000, 2500, 3000, 700, 2000}
    assert "reweighted" in set(results.properties["method"])
    spec["rungs"] = spec["rungs"][:1]
    canonry.adopt(spec, into="single")
    results = canonry.estimate("single")
    assert results.curve.empty
    assert set(results.properties["temperature"]) == {1.2}


def test_estimators_leave_out_what_columns_do_not_hold(home: Home) -> None:
    series = home.series[home.study.states[0]]
    whole = rung_properties(series)
    for lacking, but in (("virial", LACKING["pressure"]), ("hypervirial", {"bulk_modulus"})):
        cut = [replace(each, **{lacking: None}) for each in series]
        assert set(rung_properties(cut)) == set(whole) - but
        assert set(pool(cut).at(1.25).properties) == set(whole) - but
    assert Fluid().hypervirial(series[0].energy, series[0].virial) == pytest.approx(series[0].hypervirial)
    assert Fluid(truncation="shifted").hypervirial(series[0].energy, series[0].virial) is None
