"""[until]: rounds go on until every precision asked for is met or steps run out, whoever samples and however often."""

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner

import canonry
import canonry.plan
import canonry.progress
import canonry.until
import sampler.protocol
from canonry.allotment import FILE, append, decided, is_settled, protocols
from canonry.attainment import outcome
from canonry.beside import asked
from canonry.border import Border
from canonry.cli import main
from canonry.directory import locate
from canonry.errors import UserError
from canonry.estimation import findings
from canonry.report.methods import paragraph
from canonry.results import Results
from canonry.sampling import left
from canonry.study import COMPARED, LIMITED, Study, Tolerance, Until
from canonry.until import complete, decide, headlines
from estimators.estimate import Estimate, exact, mean
from sampler.fluid import State

TABLES = ("properties", "curve", "structure", "health", "budget", "verdict", "summary")
STUDY = """
[fluid]
potential = "lennard-jones"
cutoff = 2.2
truncation = "{truncation}"
[state]
points = {points}
particles = 32
[sampling]
seed = 4
scheme = "{scheme}"
repeats = {repeats}
equilibration = 600
steps = {steps}
record_every = 5
frame_every = 100
"""
THIN, DENSE = (2.0, 0.05), (2.0, 0.3)
DEFAULTS = {"truncation": "corrected", "points": [[*THIN], [*DENSE]], "scheme": "baoab", "repeats": 1, "steps": 6000}
LIMIT = 0.012  # epsilon/sigma^3: at 6000 steps the pressure of the thin rung is known far better, that of the dense not


@pytest.fixture(autouse=True)
def many_segments(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """Segments of 600 steps, shorter trials, a directory apart."""
    monkeypatch.setattr(sampler.protocol, "_SEGMENT", 600 * 32)
    monkeypatch.setattr(canonry.plan, "_TRIAL", 10_000)
    monkeypatch.chdir(tmp_path)


def write(name: str, until: str = "", **changes: object) -> Path:
    path = Path(f"{name}.toml")
    path.write_text(STUDY.format(**DEFAULTS | changes) + (f"[until]\n{until}\n" if until else ""))
    return path


def run(*arguments: object, code: int = 0):
    result = CliRunner().invoke(main, ["run", *map(str, arguments)])
    assert result.exit_code == code, result.output
    return result


def held(directory: str) -> dict[str, bytes]:
    """All that was sampled, decided and estimated."""
    files = [*Path(directory).rglob("segment-*.h5"), Path(directory, FILE)]
    files += [Path(directory, f"{name}.csv") for name in TABLES]
    return {str(path.relative_to(directory)): path.read_bytes() for path in sorted(files)}


def steps(directory: str) -> dict[tuple[float, float], int]:
    study, place = locate(Path(directory))
    assert left(study, place) == 0
    return {(state.temperature, state.density): each.steps for state, each in protocols(study, place).items()}


def errors(results: Results, name: str) -> dict[tuple[float, float], float]:
    rows = results.properties[results.properties["headline"] & (results.properties["property"] == name)]
    return {(row.temperature, row.density): row.standard_error for row in rows.itertuples()}


def test_the_rung_whose_error_is_too_large_is_sampled_longer() -> None:
    """Its error ends below the limit, and not by more than one doubling of its samples and the noise of errors make."""
    path = write("study", f"pressure = {LIMIT}")
    results = canonry.run(path)
    given, found = steps("study"), errors(results, "pressure")
    assert given[THIN] == 6000
    assert 12_000 < given[DENSE] < 20 * 6000
    assert given[DENSE] % 600 == 0
    assert max(found.values()) <= LIMIT
    assert found[DENSE] > 0.5 * LIMIT
    samples = results.equilibration.set_index("density")["samples"]
    assert samples.to_dict() == {density: count // 5 for (_, density), count in given.items()}
    assert not any(caveat.startswith("Not all samples") for caveat in results.caveats)
    said = run(path)
    assert "study is finished" in said.stdout
    assert "Every precision asked for is met." in said.stdout
    made = Path("study", FILE).read_bytes()
    Path("study", "summary.csv").unlink()
    assert "study is finished" not in run(path).stdout
    assert Path("study", FILE).read_bytes() == made
    assert any(caveat.startswith("Every precision asked for is met") for caveat in results.caveats)
    assert any("come out low by about a tenth of their error" in caveat for caveat in results.caveats)
    methods = paragraph(results)
    assert f"600 steps of equilibration and 6000 to {given[DENSE]} steps, recorded" in methods
    assert f"errors were above those asked for (pressure {LIMIT} ε/σ³), up to 120000 steps." in methods


def test_steps_run_out_and_that_is_said() -> None:
    path = write("study", 'pressure = 1e-5\nheat_capacity = "40 %"\nsteps_at_most = 9000')
    said = run(path)
    assert "until errors are at most c_v 40 %, P 1e-05 ε/σ³, or 9000 steps" in said.stderr
    assert set(steps("study").values()) == {9000}
    told = " ".join(said.stdout.split())
    assert "Not every precision asked for is met within 9000 steps (steps_at_most): the error of P at T = 2" in told
    assert "c_v at" not in told.split("Not every")[1]
    worst = max(errors(canonry.estimate("study"), "pressure").values()) / 1e-5
    assert f"density 0.3 σ⁻³ is {worst:.3g} times what is asked for" in told
    assert "Round 1: " in said.stderr
    assert "Caveat: Not every precision asked for is met within 9000 steps" in said.stderr
    again = run(path)
    assert "study is finished" in again.stdout
    assert "Not every precision asked for is met" in again.stdout


def test_any_number_of_workers_gives_the_same() -> None:
    for workers in (1, 2, 3):
        canonry.run(write(f"with-{workers}", f"pressure = {LIMIT}", repeats=2, steps=1800), workers=workers)
    first, *others = (held(f"with-{workers}") for workers in (1, 2, 3))
    assert decided(Path("with-1"))
    assert all(each == first for each in others)


@pytest.mark.parametrize("after", [1, 21, 30, 41])
def test_an_interrupted_run_goes_on_to_the_same_end(monkeypatch: pytest.MonkeyPatch, after: int) -> None:
    """Interrupted in the sampling of all rungs (22 segments), and of later rounds."""
    original, count = canonry.progress._Tally.add, 0

    def interrupted(self, progress) -> None:
        nonlocal count
        count += 1
        if count == after:
            raise KeyboardInterrupt
        original(self, progress)

    path = write("study", f"pressure = {LIMIT}")
    with monkeypatch.context() as patch:
        patch.setattr(canonry.progress._Tally, "add", interrupted)
        run(path, code=130)
    canonry.run(path)
    canonry.run(write("direct", f"pressure = {LIMIT}"))
    assert held("study") == held("direct")


@pytest.mark.parametrize("written", [False, True])
def test_a_run_interrupted_at_a_barrier_goes_on_to_the_same_end(monkeypatch: pytest.MonkeyPatch, written: bool) -> None:
    def interrupted(directory: Path, shares) -> None:
        if written:
            append(directory, shares)
        raise KeyboardInterrupt

    path = write("study", f"pressure = {LIMIT}")
    with monkeypatch.context() as patch:
        patch.setattr(canonry.until, "append", interrupted)
        run(path, code=130)
    assert len(decided(Path("study"))) == written
    assert not is_settled(*locate(path))
    CliRunner().invoke(main, ["report", "study"])
    assert "study is finished" not in run(path).stdout  # tables of half the samples are no end
    canonry.run(write("direct", f"pressure = {LIMIT}"))
    assert held("study") == held("direct")


def segments(directory: str) -> dict[Path, bytes]:
    return {path: path.read_bytes() for path in Path(directory).rglob("segment-*.h5")}


def test_limits_may_come_later_tighten_and_loosen() -> None:
    """Nothing is sampled twice, and what is sampled beyond what is asked now is kept, but not used without [until]."""
    canonry.run(write("study"))
    assert not Path("study", FILE).exists()
    sampled = segments("study")
    grown = []
    for limit in (3.0 * LIMIT, LIMIT, 0.8 * LIMIT, 2.0 * LIMIT):
        result = run(write("study", f"pressure = {limit}"))
        assert "study is finished" not in result.stdout
        assert "Every precision asked for is met." in result.stdout
        assert max(errors(canonry.estimate("study"), "pressure").values()) <= limit
        assert sampled.items() <= segments("study").items()
        grown.append(len(segments("study")) - len(sampled))
        sampled = segments("study")
    assert [number > 0 for number in grown] == [False, True, True, False]
    longest = steps("study")
    run(write("study"))
    assert set(steps("study").values()) == {6000}
    run(write("study", f"pressure = {0.8 * LIMIT}"))
    assert (steps("study"), segments("study")) == (longest, sampled)


def test_more_steps_and_another_cap_are_what_rounds_go_on_from() -> None:
    until = "pressure = 0.001\nsteps_at_most = "
    canonry.run(write("study", f"{until}7200"))
    assert set(steps("study").values()) == {6000, 7200}
    canonry.run(write("study", f"{until}9000", steps=7800))
    assert steps("study") == {THIN: 7800, DENSE: 9000}
    canonry.run(write("study", f"{until}7800", steps=7200))
    assert set(steps("study").values()) == {7800}
    study, directory = locate(Path("study"))
    assert is_settled(study, directory)
    for changed in (
        replace(study, until=Until(study.until.limits, 9000)),
        replace(study, until=Until({"pressure": Tolerance(0.5, relative=False)}, 7800)),
        replace(study, sampling=replace(study.sampling, repeats=2)),
        replace(study, states=(*study.states, State(2.5, 0.3, 32))),
    ):
        assert not is_settled(changed, directory)


def test_rounds_that_are_lost_are_decided_again() -> None:
    path = write("study", f"pressure = {LIMIT}")
    canonry.run(path)
    before = held("study")
    Path("study", FILE).write_text("round,steps\n1,2\n")
    for command in ("run", "estimate"):
        refused = CliRunner().invoke(main, [command, "study"])
        assert refused.exit_code == 2
        assert "allotment.csv: it is damaged (other columns); what is accepted is no such file" in refused.stderr
    Path("study", FILE).unlink()
    run(path)
    assert held("study") == before


@pytest.mark.parametrize(
    "cell", [b"\n1,", b"\nx,2.0", b"\xff", b"\n3,2.0,0.05,32,1,6000,pressure,0.012,0.1,0.1,0\n", b'\n"']
)
def test_a_damaged_file_of_rounds_is_refused(tmp_path: Path, cell: bytes) -> None:
    append(tmp_path, decide(study_of(), {State(*THIN, 32): {"pressure": exact(1.0)}}, {State(*THIN, 32): 600}))
    assert len(decided(tmp_path)) == 1
    (tmp_path / FILE).write_bytes((tmp_path / FILE).read_bytes().rstrip() + cell)
    with pytest.raises(UserError, match=r"allotment\.csv: it is damaged"):
        decided(tmp_path)


def study_of(steps: int = 6000, most: int = 60_000, **limits: Tolerance) -> Study:
    study, _ = locate(write("any", steps=steps))
    return replace(study, until=Until(limits or {"pressure": Tolerance(0.01, relative=False)}, most))


def with_error(error: float, value: float = 1.0) -> Estimate:
    """An estimate with this standard error."""
    values = np.random.default_rng(1).normal(size=4000)
    found = mean({(2.0, 0.05, 32, 0): values})
    return (found - found.value) * (error / found.standard_error) + value


@pytest.mark.parametrize(
    ("error", "steps", "more"),
    [
        (0.00999, 6000, 0),
        (0.0101, 6000, 1200),  # 1.1 x 1.02 x 6000 = 6733, so 7200
        (0.012, 6000, 3600),  # 1.1 x 1.44 x 6000 = 9504, so 9600
        (0.014, 6000, 6000),  # 1.1 x 1.96 is more than 2
        (10.0, 6000, 6000),
        (math.inf, 6000, 6000),
        (10.0, 59_400, 600),  # no more than steps_at_most
        (10.0, 60_000, 0),
        (10.0, 100, 500),  # up to a whole segment
    ],
)
def test_steps_follow_from_the_error(error: float, steps: int, more: int) -> None:
    state = State(*THIN, 32)
    value = None if math.isinf(error) else with_error(error)
    (share,) = decide(study_of(), {state: {"pressure": value}}, {state: steps})
    assert (share.more, share.steps, share.state, share.limit) == (more, steps, state, "0.01")
    assert share.excess == pytest.approx(error / 0.01, rel=1e-9)


def test_the_worst_property_of_a_rung_decides_and_shares_are_of_the_value() -> None:
    study = study_of(heat_capacity=Tolerance(0.02, relative=True), pressure=Tolerance(0.1, relative=False))
    one, other = State(*THIN, 32), State(*DENSE, 32)
    values = {
        one: {"heat_capacity": with_error(0.048, -2.0), "pressure": with_error(0.05)},
        other: {"heat_capacity": with_error(0.048, 5.0), "pressure": with_error(0.05), "enthalpy": with_error(9.0)},
    }
    shares = decide(study, values, {one: 6000, other: 6000})
    assert [share.excess for share in shares] == pytest.approx([1.2, 0.5, 0.48, 0.5])
    assert [share.more for share in shares] == [3600, 3600, 0, 0]


def test_an_error_bar_that_cannot_be_believed_meets_no_limit() -> None:
    slow = np.cumsum(np.random.default_rng(1).normal(size=400)) * 1e-6
    estimate, state = mean({(2.0, 0.05, 32, 0): slow}), State(*THIN, 32)
    assert (estimate.trust, estimate.standard_error < 0.01) == ("no", True)
    (share,) = decide(study_of(), {state: {"pressure": estimate}}, {state: 6000})
    assert (share.excess, share.more) == (math.inf, 6000)


@pytest.mark.parametrize(
    "changes",
    [
        {"points": [[1.6, 0.05], [*THIN], [*DENSE]]},
        {"truncation": "shifted", "points": [[1.8, 0.3], [*DENSE]]},
        {"scheme": "velocity-verlet", "repeats": 2},
    ],
    ids=["ladder", "contact", "no bath"],
)
def test_decisions_are_taken_on_the_values_of_the_tables(changes: dict[str, object]) -> None:
    """Bit for bit; the bulk modulus of a shifted fluid needs g at contact, without a bath temperatures are measured.

    Only what frames say beyond that has no limit to be held against.
    """
    path = write("study", "bulk_modulus = 100.0\nsound_speed = 100.0", **changes)
    study, directory = locate(path)
    complete(study, directory)
    found: dict[tuple[float, str], list[float]] = {}
    told = findings(study, directory, Border.of(study)).headlines
    beyond = set(COMPARED) - set(LIMITED)
    assert {each.property for each in told} & beyond == (beyond if study.sampling.bath else set())
    for finding in told:
        if finding.property in beyond:
            continue
        estimate = finding.estimate
        found.setdefault((finding.state.density, finding.property), []).append(
            math.nan if estimate is None else (estimate.value, estimate.standard_error)
        )
    made = headlines(study, directory)
    assert [*made] == [*study.states]
    again: dict[tuple[float, str], list[float]] = {}
    for state, values in made.items():
        for name, each in values.items():
            again.setdefault((state.density, name), []).append(
                math.nan if each is None else (each.value, each.standard_error)
            )
    assert {name for _, name in again} >= {"bulk_modulus", "sound_speed", "heat_capacity"}
    assert {key: sorted(map(str, each)) for key, each in again.items()} == {
        key: sorted(map(str, each)) for key, each in found.items()
    }
    assert outcome(study, directory, Border.of(study)) == "Every precision asked for is met."


def test_adopted_samples_have_no_rounds() -> None:
    path = write("study", f"pressure = {LIMIT}")
    text = path.read_text().split("[sampling]")
    path.write_text(f"{text[0]}[adopted]\nsource = 'x'\n[until]{text[1].split('[until]')[1]}")
    with pytest.raises(UserError, match=r"until = .*: the samples of this study were adopted"):
        locate(path)


def test_samplings_beside_a_study_are_as_long_as_its_steps() -> None:
    path = write("study", f"pressure = {LIMIT}")
    study, directory = locate(path)
    assert all(each.study.until is None for each in asked(study, directory, step_bias=True, constant_energy=True))


def test_the_words_of_rounds_are_in_the_units_of_the_study() -> None:
    study = study_of(pressure=Tolerance(1e-4, relative=False))
    states = [State(2.0 + k / 10, 0.05, 32) for k in range(5)]
    append(Path(), decide(study, {state: {"pressure": None} for state in states}, dict.fromkeys(states, 60_000)))
    told = outcome(study, Path(), Border.of(study))
    assert told.startswith("Not every precision asked for is met within 60000 steps (steps_at_most): P at T = 2 ε/k_B")
    assert told.endswith("has no error bar that can be believed; and 2 more.")
    assert outcome(replace(study, until=None), Path(), Border.of(study)) == ""
