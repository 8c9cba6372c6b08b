"""`canonry reweight`: values at states that were never sampled, other fluids, and refusals."""

from __future__ import annotations

import json
import shutil
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner

import canonry
from canonry.cli import main
from canonry.directory import load
from canonry.errors import UserError
from canonry.targets import Target, targets

STUDY = """
title = "Three rungs"
[fluid]
potential = "lennard-jones"
epsilon = "120 K"
sigma = "3.4 angstrom"
mass = "40 u"
cutoff = 2.3
truncation = "{truncation}"
[state]
density = 0.75
temperatures = [1.2, 1.3, 1.4]
particles = 108
[sampling]
equilibration = 2000
steps = 8000
frame_every = 100
"""


def sampled(folder: Path, truncation: str) -> Path:
    file = folder / "three.toml"
    file.write_text(STUDY.format(truncation=truncation))
    canonry.run(file, into=folder / "three")
    return folder / "three"


@pytest.fixture(scope="module")
def directory(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return sampled(tmp_path_factory.mktemp("reweighting"), "corrected")


@pytest.fixture(scope="module")
def shifted(tmp_path_factory: pytest.TempPathFactory) -> Path:
    return sampled(tmp_path_factory.mktemp("shifted"), "shifted")


def value(table: pd.DataFrame, name: str, **where: float) -> tuple[float, float]:
    rows = table[(table["property"] == name) & np.all([table[key] == each for key, each in where.items()], axis=0)]
    (row,) = rows.to_dict("records")
    return row["value"], row["standard_error"]


def test_at_a_rung_it_is_the_headline(directory: Path) -> None:
    """The same samples by the same equations; one feature or two."""
    table = canonry.reweight(directory, temperatures=[1.3])
    rows = pd.read_csv(directory / "properties.csv")
    kept = rows[(rows["temperature"] == 1.3) & (rows["method"] == "reweighted")]
    for name in ("residual_energy", "heat_capacity", "pressure", "thermal_pressure", "bulk_modulus"):
        assert value(table, name) == pytest.approx(value(kept, name), rel=1e-5)


def test_another_epsilon_and_sigma_is_another_temperature_and_density(directory: Path) -> None:
    """u(T, rho; eps, sigma) = eps u(T/eps, rho sigma^3); P goes as eps/sigma^3, heat capacities stay."""
    other = canonry.reweight(directory, temperatures=[1.3], epsilon=1.02, sigma=1.001)
    own = canonry.reweight(directory, temperatures=[1.3 / 1.02], densities=[0.75 * 1.001**3])
    for name, factor in {"residual_energy": 1.02, "pressure": 1.02 / 1.001**3, "heat_capacity": 1.0}.items():
        assert np.array(value(other, name)) == pytest.approx(factor * np.array(value(own, name)), rel=1e-6)
    assert set(other["epsilon"]) == {1.02}
    assert value(other, "sound_speed")[0] == pytest.approx(1.02**0.5 * value(own, "sound_speed")[0], rel=1e-6)


def test_units_come_and_go(directory: Path) -> None:
    table = canonry.reweight(directory, temperatures=["156 K"], epsilon="122.4 K", units="SI")
    plain = canonry.reweight(directory, temperatures=[1.3], epsilon=1.02)
    assert set(table["temperature"]) == {156.0}
    factor = 8.31446261815324 * 120.0 / 1000.0  # epsilon in kJ/mol
    assert value(table, "residual_energy")[0] == pytest.approx(factor * value(plain, "residual_energy")[0], rel=1e-6)


def test_a_state_without_support_is_refused_with_the_nearest_and_the_price(directory: Path) -> None:
    table = canonry.reweight(directory, temperatures=[1.3, 3.0], densities=[0.75, 0.65])
    answered = table[table["value"].notna()]
    assert set(zip(answered["temperature"], answered["density"], strict=True)) == {(1.3, 0.75)}
    (reason,) = set(table[(table["temperature"] == 1.3) & (table["density"] == 0.65)]["reason"])
    assert "50 are needed; the nearest supported state is T = 1.3" in reason
    assert "costs 1.1e+06 particle-steps, about 1 s here" in reason
    refused = table[table["value"].isna()]
    assert set(refused["trust"]) == {"no"}
    assert set(refused["method"]) == {"reweighted"}


def test_where_few_samples_still_count_there_is_caution(directory: Path) -> None:
    """Half of the samples still count at a change of 1.5 % or so, a fifth at 3 %."""
    near, far = (canonry.reweight(directory, temperatures=[1.3], densities=[density]) for density in (0.752, 0.772))
    assert not near["reason"].str.contains("still count here").any()
    assert far["reason"].str.contains("of the samples of the nearest rung still count here").all()
    assert set(far["trust"]) <= {"caution", "no"}


def test_the_nearest_supported_state_is_supported_and_next_to_what_is_not(directory: Path) -> None:
    (reason,) = set(canonry.reweight(directory, temperatures=[1.4], densities=[0.65])["reason"])
    nearest = reason.partition("nearest supported state is T = ")[2].partition(";")[0]
    temperature, density = (float(words.split()[0]) for words in nearest.replace("density ", "").split(", "))
    near = canonry.reweight(directory, temperatures=[temperature], densities=[density])
    assert near["value"].notna().all()
    assert near["effective_samples"].min() < 120.0
    beyond = canonry.reweight(directory, temperatures=[temperature], densities=[density - 0.01])
    assert beyond["value"].isna().all()


def test_a_shifted_fluid_is_reweighted_to_another_density_from_its_frames(shifted: Path) -> None:
    table = canonry.reweight(shifted, temperatures=[1.3], densities=[0.75, 0.753])
    here, there = (value(table, "pressure", density=density) for density in (0.75, 0.753))
    rise = 10.0 * 0.004  # B_T d ln rho, B_T known to 20 %
    assert abs(there[0] - here[0] - rise) < 4.5 * np.hypot(there[1], here[1]) + 0.01
    assert there[1] < 0.1  # of some 240 frames
    own = pd.read_csv(shifted / "properties.csv")
    assert value(own[own["headline"]], "pressure", temperature=1.3) == pytest.approx(here, rel=1e-5)


def test_defaults_are_the_states_of_the_study(directory: Path) -> None:
    study = load(directory)
    assert targets(study, epsilon="126 K") == [Target(t, 0.75, pytest.approx(1.05), 1.0) for t in (1.2, 1.3, 1.4)]


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (["-T", "warm"], '-T warm: what is needed is a number with a unit of temperature, such as "120 K"'),
        (["--density", "3 K"], "--density 3 K: 'K' is not a unit of density"),
        (["--epsilon", "0"], "--epsilon 0: what is needed is epsilon from 0.2 to 5 times that of the study"),
        (["--sigma", "nan"], "--sigma nan: what is needed is sigma from 0.2 to 5 times"),
        (["--units", "SI", "--sigma", "1 K"], "--sigma 1 K: 'K' is not a unit of sigma"),
    ],
)
def test_what_cannot_be_asked_is_refused_in_one_paragraph(directory: Path, options: list[str], words: str) -> None:
    result = CliRunner().invoke(main, ["reweight", str(directory), *options])
    assert result.exit_code == 2
    assert words in result.output
    assert result.output.count("\n") == 1


def test_a_study_without_samples_says_so(tmp_path: Path) -> None:
    (tmp_path / "study.toml").write_text(STUDY.format(truncation="corrected"))
    with pytest.raises(UserError, match="there are no samples yet"):
        canonry.reweight(tmp_path, temperatures=[1.3])


def test_constant_energy_is_refused(tmp_path: Path) -> None:
    text = STUDY.format(truncation="corrected").replace("[sampling]", '[sampling]\nscheme = "velocity-verlet"')
    (tmp_path / "study.toml").write_text(text)
    with pytest.raises(UserError, match="constant energy"):
        canonry.reweight(tmp_path, temperatures=[1.3])


def test_the_terminal_shows_a_row_a_state_and_every_refusal(directory: Path) -> None:
    result = CliRunner().invoke(main, ["reweight", str(directory), "-T", "1.25", "-T", "1.35", "-T", "4"])
    assert result.exit_code == 0
    assert [line.split()[0] for line in result.output.splitlines()[2:4]] == ["1.25", "1.35"]
    assert "Refused at T = 4 ε/k_B" in result.output
    assert max(map(len, result.output.splitlines())) <= 80


def test_json_holds_every_row(directory: Path) -> None:
    result = CliRunner().invoke(main, ["reweight", str(directory), "-T", "1.25", "--json"])
    rows = json.loads(result.output)
    assert {row["property"] for row in rows} >= {"pressure", "isobaric_heat_capacity", "bulk_modulus"}
    assert all(row["method"] == "reweighted" for row in rows)


def test_a_failed_check_beside_the_answer_lowers_its_trust(directory: Path, tmp_path: Path) -> None:
    """The coldest rung's ledger fails: what lies beside it is not to be trusted, what lies between others may be."""
    study = tmp_path / "study"
    shutil.copytree(directory, study)
    health = pd.read_csv(study / "health.csv")
    health.loc[(health["check"] == "ledger") & (health["temperature"] == 1.2), "passed"] = False
    health.to_csv(study / "health.csv", index=False)
    table = canonry.reweight(study, temperatures=[1.25, 1.35])
    beside, beyond = (table[table["temperature"] == temperature] for temperature in (1.25, 1.35))
    assert beside["reason"].str.contains("(check ledger)", regex=False).all()
    assert set(beside["trust"]) == {"no"}
    assert not beyond["reason"].str.contains("check ledger").any()
