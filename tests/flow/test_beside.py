"""Another size and constant energy beside a study: from the command to the checks, the budget and the refusals."""

from collections.abc import Callable
from dataclasses import dataclass, replace
from pathlib import Path
from types import MappingProxyType
from typing import Any

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner

import canonry
import canonry.sampling
from canonry.beside import asked, found
from canonry.budget import size
from canonry.cli import main
from canonry.directory import stored
from canonry.errors import UserError
from canonry.findings import Finding
from estimators.estimate import Estimate, exact, mean
from sampler.fluid import State
from sampler.series import Series

STUDY = """
[fluid]
potential = "lennard-jones"
cutoff = 2.0
truncation = "force-shifted"
[state]
density = 0.8
temperatures = [1.3, 1.4, 1.5]
particles = 64
[sampling]
seed = 5
repeats = 2
equilibration = 1000
steps = 12000
"""
ENDS = {1.3, 1.5}


@pytest.fixture(scope="module")
def sampled(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A study directory with sizes of 128 and 100 and constant energy, reported without these samples."""
    directory = tmp_path_factory.mktemp("beside")
    (directory / "study.toml").write_text(STUDY)
    canonry.run(directory / "study.toml", into=directory / "study")
    study = stored(directory / "study")
    for options in ({"second_size": 128, "constant_energy": True}, {"second_size": 100}):
        for each in asked(study, directory / "study", **options):
            canonry.sampling.sample(each.study, each.place)
    return directory / "study"


def rows(directory: Path, check: str, words: str) -> pd.DataFrame:
    health = pd.read_csv(directory / "health.csv")
    return health[(health["check"] == check) & health["meaning"].str.contains(words)]


def test_what_was_asked_for_is_sampled_reported_and_not_sampled_again(sampled: Path) -> None:
    before = pd.read_csv(sampled / "health.csv")
    assert not before["meaning"].str.contains("particles differ from|constant energy").any()
    # all samples are there, the tables are older
    asking = ["run", str(sampled), "--second-size", "128", "--constant-energy"]
    first = CliRunner().invoke(main, asking)
    assert first.exit_code == 0, first.output
    assert "is finished" not in first.stdout
    for check, words in (
        ("box", "64 particles differ from 128"),
        ("box", "64 particles differ from 100"),
        ("heat-routes", "kinetic energy at constant energy"),
    ):
        read = rows(sampled, check, words)
        assert {*read["temperature"]} == ENDS
        assert len(read) == len(ENDS)
        assert read["passed"].all()
    again = CliRunner().invoke(main, asking)
    assert "is finished: nothing is missing" in again.stdout
    assert {each.name for each in sampled.iterdir() if each.is_dir()} == {
        "rungs", "size-100", "size-128", "constant-energy",
    }  # fmt: skip


def test_each_repeat_of_constant_energy_has_a_temperature_of_its_own(sampled: Path) -> None:
    (beside,) = (each for each in found(stored(sampled), sampled) if each.place.name == "constant-energy")
    assert {state.temperature for state in beside.samples} == ENDS
    for state, samples in beside.samples.items():
        temperatures = np.array([each for each, _ in samples.repeats])
        # the canonical spread is T sqrt(1/(N c_v)), 8 % at c_v 2.3; five of that
        assert np.all(np.abs(temperatures / state.temperature - 1.0) < 0.4)
        assert abs(temperatures[0] - temperatures[1]) > 1e-4
        # another trajectory than the study's of the same name: never taken for correlated with it
        marks = {chain[0] for chain in samples.properties["residual_heat_capacity"].influence}
        assert marks.isdisjoint(ENDS)


def in_place(name: str, altered: Callable[[Series], Series]) -> Callable[..., list[Series]]:
    """What is read of the folder of this name, altered."""
    recorded = canonry.sampling.recorded

    def read(study: Any, directory: Path, state: State) -> list[Series]:
        series = recorded(study, directory, state)
        return [altered(each) for each in series] if directory.name == name else series

    return read


def test_a_planted_size_effect_fails_the_box(sampled: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def shifted(each: Series) -> Series:
        return replace(each, energy=each.column("energy") + 0.1 * each.state.particles)

    monkeypatch.setattr("canonry.sampling.recorded", in_place("size-128", shifted))
    canonry.estimate(sampled)
    # u has an error of some 0.01: ten of them
    assert not rows(sampled, "box", "differ from 128")["passed"].any()
    assert rows(sampled, "box", "differ from 100")["passed"].all()
    budget = pd.read_csv(sampled / "budget.csv", keep_default_na=False).set_index(["temperature", "property"])
    sizes = budget["finite_size"]
    # 100 particles tell less of infinitely many than 128 do, so these count: 0.1 M/(M - N) = 0.2
    assert all(0.1 < float(sizes[each, "residual_energy"]) < 0.3 for each in ENDS)
    assert float(sizes[1.4, "residual_energy"]) < 0.01
    values = pd.read_csv(sampled / "properties.csv", keep_default_na=False)
    touched = values[values["temperature"].isin(ENDS) & (values["property"] == "pressure")]
    assert (touched["trust"] != "ok").all()


def test_a_planted_heat_capacity_fails_the_heat_routes(sampled: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    def livelier(each: Series) -> Series:
        kinetic = each.column("kinetic")
        change = 0.25 * (kinetic - np.mean(kinetic))
        return replace(each, kinetic=kinetic + change, energy=each.column("energy") - change)

    monkeypatch.setattr("canonry.sampling.recorded", in_place("constant-energy", livelier))
    canonry.estimate(sampled)
    # half as much again in the variance of K, of which 1 - var(K)/(N T^2 3/2) = 1.5/c_v is left: c_v 2.3 becomes 5
    assert not rows(sampled, "heat-routes", "constant energy")["passed"].any()
    assert rows(sampled, "heat-routes", "slope of the energy")["passed"].all()


def test_energies_beyond_the_reach_of_the_ladder_say_nothing(sampled: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Repeats as warm as 1.3 x 1.4 = 1.8 or more: of the samples at 1.5 less than a fifth counts there."""

    def warmer(each: Series) -> Series:
        return replace(each, kinetic=1.4 * each.column("kinetic"))

    monkeypatch.setattr("canonry.sampling.recorded", in_place("constant-energy", warmer))
    canonry.estimate(sampled)
    assert rows(sampled, "heat-routes", "constant energy").empty
    assert {*rows(sampled, "heat-routes", "slope of the energy")["temperature"]} >= ENDS
    assert len(rows(sampled, "box", "differ from 128")) == len(ENDS)


def test_too_few_samples_say_nothing(tmp_path: Path) -> None:
    study = tmp_path / "study.toml"
    study.write_text(STUDY.replace("12000", "200"))
    canonry.run(study, into=tmp_path / "study", second_size=100, constant_energy=True)
    meanings = pd.read_csv(tmp_path / "study" / "health.csv")["meaning"]
    assert not meanings.str.contains("particles differ from 100|constant energy").any()


@pytest.mark.parametrize(
    ("options", "scheme", "refusal"),
    [
        ({"second_size": 64}, "baoab", "--second-size 64: that is the size of the study itself; .* such as 128"),
        ({"second_size": 51}, "baoab", r"--second-size 51: the cutoff of 2 sigma needs 52 particles at density 0\.8"),
        ({"second_size": -1}, "baoab", "--second-size -1: .* whole number from 52 to 10000000"),
        ({"second_size": 100.5}, "baoab", r"--second-size 100\.5: .* whole number from 52 to 10000000"),
        ({"second_size": 128}, "velocity-verlet", "--second-size 128: .* velocity-verlet has no bath; accepted is"),
        ({"constant_energy": True}, "velocity-verlet", "--constant-energy: the study's own samples are"),
        ({"step_bias": True}, "velocity-verlet", "--step-bias: .* accepted is baoab or obabo"),
    ],
)
def test_what_would_say_nothing_is_refused_before_sampling(
    tmp_path: Path, options: dict[str, Any], scheme: str, refusal: str
) -> None:
    study = tmp_path / "study.toml"
    study.write_text(STUDY + f'scheme = "{scheme}"\n')
    with pytest.raises(UserError, match=refusal):
        canonry.run(study, into=tmp_path / "study", **options)
    assert not (tmp_path / "study").exists()


def test_the_smallest_size_accepted_fits_the_cutoff(tmp_path: Path) -> None:
    study = tmp_path / "study.toml"
    study.write_text(STUDY)
    (beside,) = asked(canonry.load(study), tmp_path, second_size=52)
    assert min(state.box for state in beside.study.states) >= 2 * 2.0 > State(1.0, 0.8, 51).box
    assert {state.temperature for state in beside.study.states} == ENDS


@dataclass
class Sizes:
    """As much of what samples say as the shift of their size needs."""

    properties: tuple[Finding, ...]
    sizes: MappingProxyType[State, dict[str, Estimate]]


def test_the_shift_of_a_size_is_extrapolated_to_infinitely_many() -> None:
    """u = 2 + 6/N, exact in one property, with errors above the shift in another."""
    own, others = State(1.0, 0.8, 60), [State(1.0, 0.8, number) for number in (30, 120)]

    def noisy(state: State) -> Estimate:
        noise = np.random.default_rng(state.particles).normal(size=400)
        return mean({(1.0, 0.8, state.particles, 0): noise - np.mean(noise)})

    def finding(name: str, value: Estimate) -> Finding:
        return Finding(own, name, "average", value, 1.0, "ok", "", True)

    held = Sizes(
        (finding("residual_energy", exact(2.1)), finding("pressure", noisy(own))),
        MappingProxyType(
            {each: {"residual_energy": exact(2.0 + 6.0 / each.particles), "pressure": noisy(each)} for each in others}
        ),
    )
    shifts = size(held, own)  # type: ignore[arg-type]
    assert shifts["residual_energy"] == pytest.approx(0.1)
    # 30 particles: N/N' - 1 = 1 times the difference, 120: twice; errors of 0.05 each add to 0.07
    assert shifts["pressure"] == pytest.approx(np.sqrt(2 / 400), rel=0.15)
    assert size(held, State(1.1, 0.8, 60)) == {}  # type: ignore[arg-type]
