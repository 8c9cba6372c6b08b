"""A study directory that is sampled in several goes holds the same as one sampled in a single go."""

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from click.testing import CliRunner

import canonry
import canonry.estimation
import canonry.plan
import canonry.progress
import sampler.protocol
from canonry.border import Border
from canonry.cli import main
from canonry.directory import claim, locate
from canonry.errors import UserError
from canonry.numbers import with_error
from canonry.sampling import outstanding

ROOT = Path(__file__).parents[2]
TABLES = ("properties", "curve", "structure", "health", "budget", "verdict", "summary")
STUDY = """
[fluid]
potential = "lennard-jones"
cutoff = {cutoff}
[state]
density = {density}
temperatures = {temperatures}
particles = 32
[sampling]
seed = {seed}
repeats = {repeats}
equilibration = 200
steps = {steps}
record_every = 5
frame_every = 100
[compare]
against = ["thol-2016"]
"""
DEFAULTS = {"cutoff": 3.0, "density": 0.1, "temperatures": [1.5, 2.0], "seed": 4, "repeats": 1, "steps": 3100}


@pytest.fixture(autouse=True)
def many_segments(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """Segments of 600 steps, so that these small studies have several a repeat; shorter trials; a directory apart."""
    monkeypatch.setattr(sampler.protocol, "_SEGMENT", 600 * 32)
    monkeypatch.setattr(canonry.plan, "_TRIAL", 10_000)
    monkeypatch.chdir(tmp_path)


def write(name: str, **changes: object) -> Path:
    path = Path(f"{name}.toml")
    path.write_text(STUDY.format(**DEFAULTS | changes))
    return path


def run(*arguments: object, code: int = 0):
    result = CliRunner().invoke(main, ["run", *map(str, arguments)])
    assert result.exit_code == code, result.output
    return result


def tables(directory: str | Path) -> dict[str, bytes]:
    return {name: Path(directory, f"{name}.csv").read_bytes() for name in TABLES}


def segments(directory: str | Path) -> dict[Path, bytes]:
    return {path: path.read_bytes() for path in sorted(Path(directory).rglob("segment-*.h5"))}


@pytest.fixture
def sampled(tmp_path: Path) -> Path:
    run(write("study"))
    return Path("study")


def test_a_second_run_says_finished_and_touches_nothing(sampled: Path) -> None:
    before = {path: path.stat().st_mtime_ns for path in sampled.rglob("*")}
    result = run("study.toml")
    assert "study is finished" in result.stdout
    assert "thol-2016" in result.stdout
    assert {path: path.stat().st_mtime_ns for path in sampled.rglob("*")} == before


@pytest.mark.parametrize(
    "longer",
    [
        {"steps": 4500},
        {"temperatures": [1.5, 1.7, 2.0]},
        {"repeats": 2},
        {"density": [0.05, 0.1]},
        {"steps": 3600, "temperatures": [1.3, 1.5, 2.0], "repeats": 2},
    ],
    ids=["steps", "inserted temperature", "repeats", "density", "all"],
)
def test_an_extended_study_equals_one_sampled_at_once(sampled: Path, longer: dict[str, object]) -> None:
    kept = segments(sampled)
    result = run(write("study", **longer))
    assert "holds a part already" in result.stderr
    run(write("direct", **longer), "--workers", 1)
    assert tables("study") == tables("direct")
    after = segments(sampled)
    last = max(path.name for path in kept)
    assert all(after[path] == content for path, content in kept.items() if path.name != last)


@pytest.mark.parametrize("table", TABLES)
def test_damaged_tables_are_made_anew(sampled: Path, table: str) -> None:
    """Empty, cut off behind the header, foreign, torn within a line, no text; the times of the file tell nothing."""
    expected, victim = tables(sampled), sampled / f"{table}.csv"
    whole, stamp = victim.read_bytes(), victim.stat()
    header = whole[: whole.index(b"\n") + 1]
    damaged = [b"", header, b"a,b\n1,2\n", whole[: whole.rindex(b",")], b"\xe9\0"]
    if table == "structure":
        damaged.remove(header)  # a study without frames has no more than that
    for content in damaged:
        victim.write_bytes(content)
        os.utime(victim, ns=(stamp.st_atime_ns, stamp.st_mtime_ns))
        assert "finished" not in run("study.toml").stdout
        assert tables(sampled) == expected
    assert "finished" in run("study.toml").stdout


def test_a_study_cut_short_equals_one_that_asked_for_less(sampled: Path) -> None:
    run(write("study", steps=2000, temperatures=[2.0]))
    run(write("direct", steps=2000, temperatures=[2.0]))
    assert tables("study") == tables("direct")


def test_title_and_references_may_change(sampled: Path) -> None:
    kept = {path: path.stat().st_mtime_ns for path in segments(sampled)}
    text = Path("study.toml").read_text().replace('["thol-2016"]', '["kolafa-nezbeda-1994"]')
    Path("study.toml").write_text(f'title = "Another"\n{text}')
    result = run("study.toml")
    assert "Against kolafa-nezbeda-1994" in result.stdout
    assert "thol-2016" not in result.stdout
    assert 'title = "Another"' in (sampled / "study.toml").read_text()
    assert {path: path.stat().st_mtime_ns for path in segments(sampled)} == kept


@pytest.mark.parametrize("after", [1, 4, 9])
def test_an_interrupted_run_goes_on_where_it_stopped(monkeypatch: pytest.MonkeyPatch, after: int) -> None:
    original = canonry.progress._Tally.add
    count = 0

    def interrupted(self, progress) -> None:
        nonlocal count
        count += 1
        if count == after:
            raise KeyboardInterrupt
        original(self, progress)

    write("study")
    with monkeypatch.context() as patch:
        patch.setattr(canonry.progress._Tally, "add", interrupted)
        result = run("study.toml", code=130)
    assert "Interrupted" in result.stderr
    assert not list(Path("study").rglob(".segment*"))
    kept = segments("study")
    assert kept
    run("study")
    assert segments("study").items() >= kept.items()
    run(write("direct"))
    assert tables("study") == tables("direct")


def test_the_interrupt_of_a_terminal_leaves_a_directory_that_goes_on() -> None:
    write("study", steps=60_000)
    code = (
        f"import sys; sys.path.insert(1, {str(ROOT)!r}); import sampler.protocol; sampler.protocol._SEGMENT = 19200\n"
        "from canonry.cli import main; main(['run', 'study.toml'])"
    )
    command = [sys.executable, "-c", code]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
        while process.poll() is None and len(segments("study")) < 3:
            time.sleep(0.02)
        process.send_signal(signal.SIGINT)
        stdout, stderr = process.communicate(timeout=60)
    assert process.returncode == 130, stderr
    assert "Interrupted" in stderr
    assert "Traceback" not in stderr
    assert stdout == ""
    run(write("study", steps=2400))
    run(write("direct", steps=2400))
    assert tables("study") == tables("direct")


def test_a_series_is_cut_at_the_sample_however_rare_its_frames_are(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(canonry.estimation, "settled_start", lambda values: 333)
    for every, frames in ((100, True), (6000, True), (7000, False)):
        path = write("study", temperatures=[2.0], steps=6000)
        path.write_text(path.read_text().replace("frame_every = 100", f"frame_every = {every}"))
        results = canonry.run(path, into=f"every-{every}")
        assert results.equilibration[["cut", "samples"]].to_numpy().tolist() == [[333, 1200]]
        assert bool(len(results.structure)) == frames


@pytest.mark.parametrize(
    ("density", "temperatures", "reason"),
    [(0.3, [1.1, 1.4], "liquid and vapour coexist here"), (1.02, [1.2, 1.7], "beyond freezing")],
)
def test_values_of_no_stable_phase_come_with_caution(density: float, temperatures: list[float], reason: str) -> None:
    path = write("study", density=density, cutoff=1.5, temperatures=temperatures, steps=20_000)
    results = canonry.run(path)
    cold = results.properties["temperature"] == temperatures[0]
    for rows, where in (
        (results.properties, cold),
        (results.curve, results.curve["temperature"] < temperatures[0] + 0.01),
    ):
        assert rows["reason"][where].str.contains(reason).all()
        assert set(rows["trust"][where]) <= {"caution", "no"}
    assert not results.properties["reason"][~cold].str.contains(reason).any()
    assert results.summary["trust"].iloc[0] != "ok"
    said = run(path).stdout
    assert "* with caution" in said or "! not to be trusted" in said
    assert "Failed check: one-phase" in said


def test_live_error_bars_without_a_bath_are_those_of_the_tables(monkeypatch: pytest.MonkeyPatch) -> None:
    """Repeats differ in energy there, and are not one sample; nothing is cut off while sampling goes on."""
    monkeypatch.setattr(canonry.estimation, "settled_start", lambda values: 0)
    write("study", repeats=2, temperatures=[2.0])
    Path("study.toml").write_text(Path("study.toml").read_text().replace("seed", 'scheme = "velocity-verlet"\nseed'))
    rows = canonry.run("study.toml").properties.set_index("property")
    study, directory = locate(Path("study"))
    shown = canonry.progress._Tally(study, outstanding(study, directory), Border.of(study))._look(study.states[0])
    for text, name in zip(shown, ("heat_capacity", "pressure"), strict=True):
        assert text == with_error(rows.loc[name, "value"], rows.loc[name, "standard_error"])


def test_estimates_of_an_unfinished_study_say_so(sampled: Path) -> None:
    last = max(segments(sampled), key=lambda path: path.name)
    last.unlink()
    result = CliRunner().invoke(main, ["estimate", "study"])
    assert result.exit_code == 0, result.output
    assert "Not all samples asked for are there yet" in result.stderr
    assert "finished" not in run("study.toml").stdout


@pytest.mark.parametrize("length", [0, 700, -1])
def test_a_damaged_segment_is_put_aside_named_and_sampled_again(sampled: Path, length: int) -> None:
    expected = tables(sampled)
    victim = sorted(segments(sampled))[2]
    content = victim.read_bytes()
    victim.write_bytes(content[:length])
    result = run("study.toml")
    assert f"{victim.name}.damaged-1" in result.stderr
    assert victim.with_name(f"{victim.name}.damaged-1").read_bytes() == content[:length]
    assert tables(sampled) == expected


@pytest.mark.parametrize(
    ("key", "old", "new", "message"),
    [
        ("fluid.cutoff", "cutoff = 3.0", "cutoff = 2.5", "is 3.0 there and 2.5"),
        ("fluid.truncation", "[state]", 'truncation = "shifted"\n[state]', "is corrected there and shifted"),
        ("fluid.ideal_heat_capacity", "[state]", "ideal_heat_capacity = 2.5\n[state]", "is 1.5 there and 2.5"),
        ("state.particles", "particles = 32", "particles = 64", "is 32 there and 64"),
        ("sampling.seed", "seed = 4", "seed = 5", "is 4 there and 5"),
        ("sampling.time_step", "[compare]", "time_step = 0.002\n[compare]", "is 0.005 there and 0.002"),
        ("sampling.friction", "[compare]", "friction = 3.0\n[compare]", "is 1.0 there and 3.0"),
        ("sampling.scheme", "[compare]", 'scheme = "obabo"\n[compare]', "is baoab there and obabo"),
        ("sampling.precision", "[compare]", 'precision = "double"\n[compare]', "is mixed there and double"),
        ("sampling.equilibration", "equilibration = 200", "equilibration = 300", "is 200 there and 300"),
        ("sampling.record_every", "record_every = 5", "record_every = 10", "is 5 there and 10"),
        ("sampling.frame_every", "frame_every = 100", "frame_every = 200", "is 100 there and 200"),
    ],
)
def test_the_directory_of_another_study_is_refused(sampled: Path, key: str, old: str, new: str, message: str) -> None:
    everything = {path: path.read_bytes() for path in sampled.rglob("*") if path.is_file()}
    text = Path("study.toml").read_text()
    if key == "fluid.truncation":
        text = text.replace('against = ["thol-2016"]', "")
    Path("study.toml").write_text(text.replace(old, new))
    result = run("study.toml", code=2)
    assert f"Error: study: it belongs to another study, {key} {message}" in result.stderr
    assert result.stdout == ""
    assert {path: path.read_bytes() for path in sampled.rglob("*") if path.is_file()} == everything


DEFAULTS_OF_A_LIQUID = """
[fluid]
potential = "lennard-jones"
[state]
density = {density}
temperatures = [2.0]
particles = {particles}
[sampling]
equilibration = 50
steps = 600
record_every = 5
frame_every = 100
"""


def test_defaults_stay_those_of_the_samples_when_a_thin_density_is_added() -> None:
    """The cutoff of 5 that is the default at density 0.4 does not even fit the box; the plan says that 3 is short."""
    path = Path("study.toml")
    path.write_text(DEFAULTS_OF_A_LIQUID.format(density=0.6, particles=150))
    run(path)
    kept = segments("study")
    path.write_text(DEFAULTS_OF_A_LIQUID.format(density="[0.4, 0.6]", particles=150))
    result = run(path)
    assert "density 0.4 σ⁻³: the correction" in " ".join(result.stderr.replace("Density", "density").split())
    study = canonry.load("study")
    assert (study.fluid.cutoff, study.sampling.friction) == (3.0, 2.0)
    assert list(study.isochores) == [0.4, 0.6]
    assert segments("study").items() > kept.items()
    assert "finished" in run(path).stdout
    assert "the default cutoff 5 sigma is beyond half the box" in run(path, "--into", "new", code=2).stderr


def test_a_default_that_no_longer_fits_the_box_is_refused() -> None:
    path = Path("study.toml")
    path.write_text(DEFAULTS_OF_A_LIQUID.format(density=0.4, particles=420))
    run(path)
    path.write_text(DEFAULTS_OF_A_LIQUID.format(density="[0.4, 0.8]", particles=420))
    assert "cutoff 5 sigma is beyond half the box of 420 particles at density 0.8" in run(path, code=2).stderr


def test_check_says_what_is_left_and_touches_nothing(sampled: Path) -> None:
    def check(study: object, *options: str) -> str:
        result = CliRunner().invoke(main, ["check", str(study), *options])
        assert result.exit_code == 0, result.output
        return result.stdout

    assert "study holds all these samples already" in check("study")
    write("study", temperatures=[1.5, 1.7, 2.0])
    assert "(33 %) are left to do" in check("study.toml")
    assert json.loads(check("study.toml", "--json"))["particle_steps_left"] == 32 * 3300
    write("study", seed=5)
    assert "already" not in check("study.toml")  # samples of another study are of no use to it
    victims = sorted(segments(sampled))
    victims[1].unlink()
    victims[-1].write_bytes(b"")
    before = {path: path.stat().st_mtime_ns for path in sampled.rglob("*")}
    assert json.loads(check("study", "--json"))["particle_steps_left"] == 32 * (600 + 100)
    assert {path: path.stat().st_mtime_ns for path in sampled.rglob("*")} == before


def test_a_directory_without_samples_may_change_its_study() -> None:
    study, directory = locate(write("study"))
    claim(study, directory)
    other, _ = locate(write("study", seed=5))
    claim(other, directory)
    assert "seed = 5" in (directory / "study.toml").read_text()


def test_a_directory_with_other_things_is_left_alone() -> None:
    Path("study").mkdir()
    Path("study", "properties.csv").write_text("mine")
    study, directory = locate(write("study"))
    with pytest.raises(UserError, match=r"it holds properties\.csv but no study\.toml"):
        claim(study, directory)
    assert os.listdir("study") == ["properties.csv"]


def test_every_stretch_of_sampling_is_booked(sampled: Path) -> None:
    run(write("study", steps=3600))
    sessions = (sampled / "sessions.csv").read_text().splitlines()
    assert sessions[0] == "started,seconds,particle_steps,canonry,machine"
    steps = [int(line.split(",")[2]) for line in sessions[1:]]
    assert steps == [
        2 * 32 * 3300,
        2 * 32 * 600,
    ]  # 200 + 3100 steps of two rungs; then the last 100 of each anew as 600
