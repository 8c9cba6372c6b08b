"""The time step's bias from the study file to the tables: which rungs are sampled exactly, and what is said of them."""

from pathlib import Path

import pandas as pd
import pytest
from click.testing import CliRunner

import canonry
from canonry.cli import main
from canonry.errors import UserError

STUDY = """
[fluid]
potential = "lennard-jones"
cutoff = 2.0
[state]
density = [0.8, 0.85]
temperatures = [1.3, 1.4, 1.5]
particles = 64
[sampling]
scheme = "obabo"
time_step = 0.016
equilibration = 500
steps = 40000
"""


def test_the_ends_of_each_isochore_are_sampled_exactly_too(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    Path("study.toml").write_text(STUDY)
    plain = CliRunner().invoke(main, ["run", "study.toml"])
    assert plain.exit_code == 0, plain.output
    assert "step-bias" not in Path("study/health.csv").read_text()
    with_bias = CliRunner().invoke(main, ["run", "study.toml", "--step-bias"])
    assert with_bias.exit_code == 0, with_bias.output
    health = canonry.run("study.toml").health
    rows = health[health["check"] == "step-bias"]
    ends = {(temperature, density) for temperature in (1.3, 1.5) for density in (0.8, 0.85)}
    assert set(zip(rows["temperature"], rows["density"], strict=True)) == ends
    assert len(rows) == 3 * len(ends)  # u, P and c_v of each
    # obabo shifts u by 0.0136 (dt/0.01)^2 at T 1.5 and density 0.84 (measured), 0.035 here; its error is about 0.006
    assert (rows["statistic"] > 3).sum() >= 2
    budget = pd.read_csv("study/budget.csv", keep_default_na=False).set_index(["temperature", "density", "property"])
    shifts = budget["time_step"]
    assert {*shifts[1.4]} == {"not known"}
    assert all(0.005 < float(shifts[temperature, density, "residual_energy"]) < 0.06 for temperature, density in ends)
    again = CliRunner().invoke(main, ["run", "study.toml", "--step-bias"])
    assert "is finished" in again.stdout


def test_exact_sampling_has_no_bias_to_look_for(tmp_path: Path) -> None:
    study = tmp_path / "study.toml"
    study.write_text(STUDY.replace("obabo", "metropolised").replace("40000", "500"))
    with pytest.raises(UserError, match=r"scheme = metropolised: .* accepted with --step-bias is baoab or obabo"):
        canonry.run(study, into=tmp_path / "study", step_bias=True)


def test_the_share_of_accepted_steps_is_told(tmp_path: Path) -> None:
    study = tmp_path / "study.toml"
    text = STUDY.replace("obabo", "metropolised").replace("40000", "2000")
    study.write_text(text)
    (told,) = [caveat for caveat in canonry.run(study, into=tmp_path / "coarse").caveats if "Metropolis" in caveat]
    assert "a smaller time step wastes fewer" in told  # at 0.016 four in ten pass
    study.write_text(text.replace("0.016", "0.002"))
    (told,) = [caveat for caveat in canonry.run(study, into=tmp_path / "fine").caveats if "Metropolis" in caveat]
    shares = [float(word) for word in told.split() if word[0].isdigit()]
    assert 99 < min(shares) <= max(shares) <= 100
    assert "wastes" not in told
