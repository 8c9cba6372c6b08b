"""Several isochores: the surface between them in tables, `canonry reweight` and at a pressure."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner

import canonry
from canonry.cli import main
from canonry.errors import UserError
from canonry.findings import Finding, one_headline
from estimators.estimate import Estimate
from reference import find
from sampler.fluid import State

STUDY = """
title = "From gas to liquid"
[fluid]
potential = "lennard-jones"
cutoff = 2.8
[state]
density = [0.1, 0.35, 0.6]
temperatures = [1.7, 1.9, 2.15]
particles = 125
[sampling]
equilibration = 2000
steps = 12000
frame_every = 100
"""


@pytest.fixture(scope="module")
def directory(tmp_path_factory: pytest.TempPathFactory) -> Path:
    home = tmp_path_factory.mktemp("surface")
    (home / "study.toml").write_text(STUDY)
    canonry.run(home / "study.toml", into=home / "study")
    return home / "study"


def value(table: pd.DataFrame, name: str, **where: float) -> pd.Series:
    """The headline row."""
    rows = table[table["headline"] & (table["property"] == name)]
    for key, each in where.items():
        rows = rows[np.isclose(rows[key], each)]
    (row,) = (row for _, row in rows.iterrows())
    return row


def test_the_surface_is_a_table_over_the_range_of_states(directory: Path) -> None:
    table = pd.read_csv(directory / "surface.csv")
    assert set(table["method"]) == {"surface"}
    assert table["density"].min() == 0.1
    assert table["density"].max() == 0.6
    assert len(table[["temperature", "density"]].drop_duplicates()) == 9 * 13
    assert {"pressure", "isobaric_heat_capacity", "residual_helmholtz_energy"} <= set(table["property"])
    assert (table["standard_error"] > 0.0).all()


def test_absolute_values_at_rungs_are_those_of_the_reference(directory: Path) -> None:
    """By test insertion and along the isotherm from the ideal gas; 4.5 errors, and what 125 particles shift by."""
    table = pd.read_csv(directory / "properties.csv")
    absolute = table[table["property"] == "residual_helmholtz_energy"]
    assert set(absolute["method"]) == {"insertion", "surface"}
    assert absolute.groupby(["temperature", "density"])["headline"].sum().eq(1).all()
    for (temperature, density), rows in absolute.groupby(["temperature", "density"]):
        known = find("thol-2016").value("residual_helmholtz_energy", temperature=temperature, density=density)
        for _, row in rows.iterrows():
            assert abs(row["value"] - known.value) < 4.5 * row["standard_error"] + 0.02
        best = min((["ok", "caution", "no"].index(row["trust"]), row["standard_error"]) for _, row in rows.iterrows())
        (kept,) = rows[rows["headline"]]["standard_error"]
        assert kept == best[1]


def test_between_isochores_the_surface_answers_within_its_error(directory: Path) -> None:
    table = canonry.reweight(directory, temperatures=[1.8], densities=[0.48, 0.8])
    for name, widest in {"residual_energy": 0.02, "pressure": 0.06, "residual_heat_capacity": 0.06}.items():
        row = value(table, name, temperature=1.8, density=0.48)
        known = find("thol-2016").value(name, temperature=1.8, density=0.48)
        assert row["method"] == "surface"
        assert 0.0 < row["standard_error"] < widest
        assert abs(row["value"] - known.value) < 4.5 * row["standard_error"] + 2 * known.uncertainty, name
    outside = table[table["density"] == 0.8]
    assert outside["value"].isna().all()
    assert outside["reason"].str.contains("nearest supported state").all()


def test_a_pressure_finds_its_density(directory: Path) -> None:
    table = canonry.reweight(directory, temperatures=[1.9], pressure=0.6)
    density = value(table, "density")
    assert value(table, "pressure")["value"] == pytest.approx(0.6)
    assert density["value"] == pytest.approx(table["density"].iloc[0])
    assert 0.0 < density["standard_error"] < 0.02
    there = canonry.reweight(directory, temperatures=[1.9], densities=[float(density["value"])])
    assert value(there, "pressure")["value"] == pytest.approx(0.6, abs=1e-6)
    fixed, free = (value(each, "residual_energy") for each in (there, table))
    assert free["value"] == pytest.approx(fixed["value"], abs=1e-6)
    assert free["standard_error"] > fixed["standard_error"]  # the density's own error is in it


def test_another_fluid_at_a_pressure_is_this_one_at_a_corresponding_pressure(directory: Path) -> None:
    """P sigma^3/epsilon, T/epsilon and rho sigma^3 are the same."""
    other = canonry.reweight(
        directory, temperatures=[1.9 * 1.02], pressure=0.6 * 1.02 / 1.01**3, epsilon=1.02, sigma=1.01
    )
    own = canonry.reweight(directory, temperatures=[1.9], pressure=0.6)
    assert value(other, "density")["value"] == pytest.approx(value(own, "density")["value"] / 1.01**3, rel=1e-9)
    assert value(other, "pressure")["value"] == pytest.approx(0.6 * 1.02 / 1.01**3)
    assert value(other, "residual_energy")["value"] == pytest.approx(
        1.02 * value(own, "residual_energy")["value"], rel=1e-9
    )


def test_a_pressure_that_no_sampled_density_has_is_refused(directory: Path) -> None:
    result = CliRunner().invoke(main, ["reweight", str(directory), "-T", "1.9", "--pressure", "9"])
    assert result.exit_code == 0
    assert "Refused at T = 1.9 ε/k_B: sampled densities at T = 1.9 ε/k_B hold pressures from 0." in " ".join(
        result.output.split()
    )
    table = canonry.reweight(directory, temperatures=[1.9], pressure=9.0)
    assert table["value"].isna().all()
    assert table["density"].isna().all()


def test_densities_and_a_pressure_exclude_each_other(directory: Path) -> None:
    with pytest.raises(UserError, match="--pressure 1: densities are asked for too; what is accepted is either"):
        canonry.reweight(directory, pressure=1, densities=[0.5])


def test_the_caveats_tell_how_rungs_agree_with_the_others(directory: Path) -> None:
    text = (directory / "report.html").read_text()
    assert "values deviate by" in text


def test_one_headline_is_the_most_trusted_and_then_the_most_precise() -> None:
    def finding(trust: str, error: float, headline: bool = True) -> Finding:
        estimate = Estimate(1.0, {}, unsampled=error**2)
        return Finding(State(1.0, 0.5, 10), "pressure", "average", estimate, 1.0, trust, "", headline)

    rough, fine, doubtful, other = finding("ok", 2.0), finding("ok", 1.0), finding("no", 0.1), finding("ok", 0.1, False)
    kept = [each.headline for each in one_headline([rough, fine, doubtful, other])]
    assert kept == [False, True, False, False]
