"""The commands: what they write and print, and how they refuse."""

import csv
import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner, Result

import canonry
import canonry.plan
from canonry.cli import main
from canonry.results import COLUMNS
from canonry.starter import FLUIDS
from canonry.study import load
from canonry.tables import TABLES
from reference import find, names

ROOT = Path(__file__).parents[2]
GAS = """title = "A gas"
[fluid]
potential = "lennard-jones"
cutoff = 3.4
[state]
density = 0.1
temperatures = [1.5, 1.75, 2.0]
particles = 32
[sampling]
seed = 8
equilibration = 1000
steps = 20000
frame_every = 200
[compare]
against = ["thol-2016"]
"""
IN_SI = {
    "[state]": 'epsilon = "119.8 K"\nsigma = "3.405 angstrom"\nmass = "39.948 u"\n[state]',
    "[1.5, 1.75, 2.0]": '["179.7 K", "209.65 K", "239.6 K"]',
}


@pytest.fixture(autouse=True)
def quick(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """Short trials, and a directory apart."""
    monkeypatch.setattr(canonry.plan, "_TRIAL", 10_000)
    monkeypatch.chdir(tmp_path)


DILUTE = {  # so few pairs that 64 particles are like many, within the error bars
    "density = 0.1": "density = 0.01",
    "particles = 32": "particles = 64",
    "cutoff = 3.4": "cutoff = 6.0",
    "[1.5, 1.75, 2.0]": "[2.5, 3.0]",
}


def command(*arguments: object, code: int = 0) -> Result:
    result = CliRunner().invoke(main, list(map(str, arguments)))
    assert result.exit_code == code, result.output
    assert result.exception is None or isinstance(result.exception, SystemExit)
    return result


def study(text: str = GAS, name: str = "gas", **changes: str) -> Path:
    for old, new in changes.items():
        assert old in text
        text = text.replace(old, new)
    path = Path(f"{name}.toml")
    path.write_text(text)
    return path


@pytest.fixture(scope="module")
def sampled(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Result]:
    """A finished study directory, and what the run that made it said."""
    home = tmp_path_factory.mktemp("home")
    (home / "gas.toml").write_text(GAS)
    directory = home / "gas"
    return directory, command("run", home / "gas.toml", "--into", directory)


def rows(directory: Path, name: str) -> list[dict[str, str]]:
    with (directory / f"{name}.csv").open() as file:
        return list(csv.DictReader(file))


def test_run_writes_every_file(sampled: tuple[Path, Result]) -> None:
    directory, _ = sampled
    found = {path.name for path in directory.iterdir()}
    tables = {f"{name}.csv" for name in TABLES}
    assert found == tables | {"study.toml", "report.html", "sessions.csv", "rungs"}
    assert load(directory / "study.toml").to_toml() == load(directory.with_suffix(".toml")).to_toml()


@pytest.mark.parametrize("name", ["properties", "curve", "verdict"])
def test_tables_have_their_columns(sampled: tuple[Path, Result], name: str) -> None:
    assert tuple(rows(sampled[0], name)[0]) == COLUMNS[name]


def test_structure_has_its_columns_with_units(sampled: tuple[Path, Result]) -> None:
    first = rows(sampled[0], "structure")[0]
    assert list(first) == [
        *("temperature", "temperature_unit", "density", "density_unit", "species_a", "species_b"),
        *("r", "r_unit", "g", "standard_error", "coordination", "g_forced", "forced_error"),
    ]


def test_run_shows_plan_progress_and_closing_table(sampled: tuple[Path, Result]) -> None:
    directory, result = sampled
    assert "Cost:" in result.stderr
    assert "sampling 100 %" in result.stderr
    assert "Cost:" not in result.stdout
    head, titles, _, *lines = result.stdout.splitlines()
    assert head == f"Against thol-2016: {rows(directory, 'verdict')[-1]['outcome']}"
    assert titles.split() == ["T", "density", "c_v", "reference", "z", "outcome", "P", "reference", "z", "outcome"]
    assert [line.split()[0] for line in lines[:3]] == ["1.5", "1.75", "2"]
    assert all(len(line) <= 100 for line in result.stdout.splitlines()[:6])


def test_closing_table_repeats_the_tables(sampled: tuple[Path, Result]) -> None:
    directory, result = sampled
    for line, temperature in zip(result.stdout.splitlines()[3:6], ("1.5", "1.75", "2"), strict=True):
        cells = line.split()
        for place, name in ((2, "heat_capacity"), (6, "pressure")):
            (row,) = (
                row
                for row in rows(directory, "verdict")
                if (row["temperature"], row["property"]) == (temperature, name)
            )
            assert abs(float(cells[place].split("(")[0]) - float(row["value"])) <= float(row["standard_error"])
            assert float(cells[place + 1]) == pytest.approx(float(row["reference_value"]), rel=1e-4)
            assert float(cells[place + 2]) == pytest.approx(float(row["z"]), abs=0.051)
            assert cells[place + 3] == row["outcome"]


def test_report_and_estimate_repeat_what_run_wrote(sampled: tuple[Path, Result]) -> None:
    directory, _ = sampled
    before = {path: path.read_bytes() for path in directory.glob("*.csv")}
    for name in ("estimate", "report"):
        command(name, directory)
        assert {path: path.read_bytes() for path in directory.glob("*.csv")} == before


def test_check_shows_the_plan_and_samples_nothing() -> None:
    path = study()
    result = command("check", path)
    assert "32 particles, cutoff 3.4 σ, corrected" in result.stdout
    assert "1000 + 20000 steps" in result.stdout
    assert "2.02e+06 particle-steps" in result.stdout  # 3 x 32 x 21000
    assert "cutoff of 5 σ at least, not 3.4 σ" in " ".join(result.stdout.split())
    assert sorted(Path().iterdir()) == [path]


def test_warnings_of_check_are_one_for_a_density_and_fit_the_terminal(monkeypatch: pytest.MonkeyPatch) -> None:
    changes = {
        "0.1": "0.3",
        "[1.5, 1.75, 2.0]": "[0.9, 0.95, 1.0, 1.7]",
        "= 32": "= 500",
        "cutoff = 3.4": "cutoff = 5.0",
    }
    path = study(**changes)
    for columns, widest in (("", 80), ("60", 60)):  # none: not on a terminal here
        monkeypatch.setenv("COLUMNS", columns)
        told = command("check", path).stdout.split("Warning: ")[1:]
        warning = [each for each in told if "coexist" in each]
        assert len(warning) == 1
        assert "T = 0.9, 0.95, 1 ε/k_B, density 0.3 σ⁻³: liquid and vapour" in " ".join(warning[0].split())
        lines = f"Warning: {warning[0]}".splitlines()
        assert len(lines) >= 3
        assert widest - 20 < max(map(len, lines)) <= widest


def test_check_echoes_both_kinds_of_units() -> None:
    result = command("check", study(**IN_SI))
    assert "time step 0.005 σ √(m/ε) = 0.0107817 ps" in result.stdout
    lines = [line.split() for line in result.stdout.splitlines()]
    assert ["1.5", "179.7", "0.1", "168.032", "6.72e+05"] in [line[:5] for line in lines]


def test_check_as_json() -> None:
    plan = json.loads(command("check", study(), "--json", "--workers", 1).stdout)
    assert [rung["particle_steps"] for rung in plan["rungs"]] == [32 * 21000] * 3
    assert plan["workers"] == 1
    assert plan["seconds"] > 0.0


def test_sample_then_estimate_then_report_equals_run(sampled: tuple[Path, Result]) -> None:
    study()
    command("sample", "gas.toml")
    assert sorted(path.name for path in Path("gas").iterdir()) == ["rungs", "sessions.csv", "study.toml"]
    assert command("estimate", "gas.toml").stdout.endswith("\nTables are in gas.\n")
    assert not Path("gas", "report.html").exists()
    command("report", "gas")
    older = Path("gas", "report.html").stat().st_mtime_ns
    said = command("estimate", "gas.toml").stdout
    assert "Tables and report.html" not in said
    assert "The report.html there is older; `canonry report gas` writes it anew." in said
    assert Path("gas", "report.html").stat().st_mtime_ns == older
    for name in ("properties", "curve", "structure", "verdict", "summary"):
        assert Path("gas", f"{name}.csv").read_bytes() == (sampled[0] / f"{name}.csv").read_bytes()
    assert "finished" in command("run", "gas.toml").stdout


def test_units_of_one_kind_are_those_of_the_other_times_a_factor(sampled: tuple[Path, Result]) -> None:
    path = study(**IN_SI)
    command("run", path)
    scale = load(path).scale
    assert scale is not None
    reduced, si = rows(sampled[0], "properties"), rows(Path("gas"), "properties")
    assert [row["property"] for row in reduced] == [row["property"] for row in si]
    for one, other in zip(reduced, si, strict=True):
        for column, quantity in (("value", one["property"]), ("standard_error", one["property"])):
            expected = float(one[column]) * scale.factor(quantity)
            assert float(other[column]) == pytest.approx(expected, rel=1e-6)
        for quantity in ("temperature", "density"):
            expected = float(one[quantity]) * scale.factor(quantity)
            assert float(other[quantity]) == pytest.approx(expected, rel=1e-9)
        assert other["headline"] == one["headline"]
    command("estimate", "gas", "--units", "reduced")
    again = pd.read_csv("gas/properties.csv")
    assert list(again["unit"]) == [row["unit"] for row in reduced]
    assert again["value"].to_numpy() == pytest.approx([float(row["value"]) for row in reduced], rel=1e-6)
    assert "finished" not in command("run", "gas").stdout  # tables are in other units than those of the study
    assert rows(Path("gas"), "properties") == si


def test_summary_holds_the_headlines(sampled: tuple[Path, Result]) -> None:
    headlines = [row for row in rows(sampled[0], "properties") if row["headline"] == "True"]
    summary = rows(sampled[0], "summary")
    assert [row["temperature"] for row in summary] == ["1.5", "1.75", "2"]
    for row in headlines:
        (state,) = (state for state in summary if state["temperature"] == row["temperature"])
        name = row["property"]
        found = (state[name], state[f"{name}_error"], state[f"{name}_unit"])
        assert found == (row["value"], row["standard_error"], row["unit"])


@pytest.mark.parametrize("fluid", [None, *FLUIDS])
def test_new_writes_a_study_that_checks(fluid: str | None) -> None:
    command("new", "mine.toml", *(["--fluid", fluid] if fluid else []))
    assert load("mine.toml").states


def test_reference_lists_what_there_is() -> None:
    text = command("reference").stdout
    records = json.loads(command("reference", "--json").stdout)
    assert [record["name"] for record in records] == names()
    for name in names():
        assert f"{name}: {find(name).title}" in text
        assert str(find(name).source) in text


def test_reference_gives_values_at_states() -> None:
    result = command("reference", "thol-2016", "-T", 1.0, "-T", 1.5, "--density", 0.8, "--json")
    values = {(row["temperature"], row["property"]): row for row in json.loads(result.stdout)}
    for temperature in (1.0, 1.5):
        known = find("thol-2016").value("pressure", temperature=temperature, density=0.8)
        assert values[temperature, "pressure"]["value"] == known.value
        assert values[temperature, "pressure"]["uncertainty"] == known.uncertainty
    assert "P" in command("reference", "thol-2016", "-T", 1.0, "--density", 0.8).stdout.split()


def test_compare_gives_the_verdict_and_writes_nothing(sampled: tuple[Path, Result]) -> None:
    directory, _ = sampled
    before = {path: path.stat().st_mtime_ns for path in directory.rglob("*")}
    table = rows(directory, "verdict")
    code = {"agrees": 0, "disagrees": 3, "undecided": 4}[table[-1]["outcome"]]
    result = command("compare", directory, "--json", code=code)
    for found, row in zip(json.loads(result.stdout), table, strict=True):
        assert found["outcome"] == row["outcome"]
        assert row["z"] == "" if found["z"] is None else float(row["z"]) == pytest.approx(found["z"], rel=1e-6)
    text = command("compare", directory, "--against", "thol-2016", "--against", "kolafa-nezbeda-1994", code=code).stdout
    assert "Against thol-2016" in text
    assert "Against kolafa-nezbeda-1994" in text
    assert {path: path.stat().st_mtime_ns for path in directory.rglob("*")} == before


@pytest.mark.parametrize(
    ("changes", "code"),
    [
        (DILUTE, 0),
        ({"density = 0.1": "density = 0.6", "cutoff = 3.4": "cutoff = 1.2"}, 3),  # most of the attraction cut off
        ({"[1.5, 1.75, 2.0]": "[10.0, 12.0]"}, 4),  # warmer than the reference goes
        (DILUTE | {"[compare]": '[compare]\ntolerance = { heat_capacity = "20 %", pressure = "20 %" }'}, 0),
        (DILUTE | {"[compare]": '[compare]\ntolerance = { pressure = "0.01 %" }'}, 4),  # finer than the error bars
    ],
    ids=["agrees", "disagrees", "undecided", "within tolerance", "tolerance too fine"],
)
def test_exit_code_of_compare(changes: dict[str, str], code: int) -> None:
    command("run", study(**changes))  # done, whatever the verdict
    command("compare", "gas", code=code)


def test_public_functions_return_tables(sampled: tuple[Path, Result]) -> None:
    directory, _ = sampled
    study()
    results = canonry.run("gas.toml")
    assert results.properties["value"].to_numpy() == pytest.approx(
        [float(row["value"]) for row in rows(directory, "properties")], rel=1e-9
    )
    assert canonry.estimate("gas").title == canonry.load("gas.toml").title == canonry.load("gas").title == "A gas"
    assert canonry.load(Path("gas")) == canonry.load("gas.toml")
    verdict = canonry.compare("gas", against=["kolafa-nezbeda-1994"])
    assert set(verdict["reference"]) == {"kolafa-nezbeda-1994"}
    assert np.isfinite(verdict["z"][verdict["temperature"].notna()]).all()


WRONG = [
    ({"cutoff": "cutof"}, r"gas.toml: fluid.cutof = 3.4: unknown key; did you mean cutoff?"),
    ({"3.4": "5.0"}, "beyond half the box"),
    ({"3.4": "-1.0"}, "gas.toml: fluid.cutoff = -1.0: what is needed"),
    ({"0.1": "nan"}, "gas.toml: state.density = nan: what is needed"),
    ({"[1.5, 1.75, 2.0]": "[]"}, "the list is empty"),
    ({"[1.5, 1.75, 2.0]": '["1.5 K"]'}, "a value with a unit needs fluid.epsilon"),
    ({"[compare]": "[compare"}, "this is not TOML"),
    ({'"thol-2016"': '"thol-2015"'}, "thol-2015 describes another fluid"),
]


@pytest.mark.parametrize("name", ["run", "check", "sample"])
@pytest.mark.parametrize(("changes", "message"), WRONG, ids=[message for _, message in WRONG])
def test_a_wrong_study_is_refused_in_one_paragraph(name: str, changes: dict[str, str], message: str) -> None:
    result = command(name, study(**changes), code=2)
    assert result.stdout == ""
    assert result.stderr.startswith("Error: gas.toml: ")
    assert message in result.stderr
    assert result.stderr.count("\n") == 1
    assert not Path("gas").exists()


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ("run none.toml", "none.toml: no such file"),
        ("run gas.toml --into gas.toml", "gas.toml: it cannot be used as study directory"),
        ("run gas.toml --into gas.toml/deep", "it cannot be used as study directory"),
        ("run gas.toml --into /proc/gas", "/proc/gas: it cannot be used as study directory"),
        ("run gas.toml --units SI", "--units SI: the study gives no fluid.epsilon"),
        ("run .", "there is no study.toml in it"),
        ("estimate gas.toml", "gas: this is no study directory"),
        ("report empty", "empty: this is no study directory"),
        ("compare gas.toml", "gas: this is no study directory"),
        ("new gas.toml", "gas.toml: it exists and is left as it is"),
        ("new other.toml --fluid oregano", "--fluid oregano: not known; what is accepted is argon"),
        ("new none/other.toml", "none/other.toml: No such file or directory"),
        ("reference thol-2017", "no reference is called 'thol-2017'; did you mean 'thol-2016'?"),
        ("reference thol-2016 -T 0.1 --density 0.5", "thol-2016 holds from temperature 0.7 to 9, found 0.1"),
    ],
)
def test_a_wrong_request_is_refused_in_one_paragraph(arguments: str, message: str) -> None:
    Path("empty").mkdir()
    text = study().read_text()
    result = command(*arguments.split(), code=2)
    assert result.stdout == ""
    assert result.stderr.startswith("Error: ")
    assert message in result.stderr
    assert result.stderr.count("\n") == 1
    assert Path("gas.toml").read_text() == text


@pytest.mark.parametrize(
    ("against", "message"),
    [
        ("thol-2017", "no reference is called 'thol-2017'; did you mean 'thol-2016'?"),
        ("thol-2015", 'what it needs is truncation "shifted" at cutoff 2.5 sigma'),
    ],
)
def test_a_reference_of_another_model_is_refused(sampled: tuple[Path, Result], against: str, message: str) -> None:
    assert message in command("compare", sampled[0], "--against", against, code=2).stderr


def test_estimates_without_samples_are_refused(sampled: tuple[Path, Result]) -> None:
    Path("gas").mkdir()
    Path("gas", "study.toml").write_text(GAS)
    for name in ("estimate", "report", "compare"):
        assert "gas: there are no samples yet" in command(name, "gas", code=2).stderr


def test_a_run_that_flies_apart_says_what_to_change() -> None:
    path = study(**{"density = 0.1": "density = 0.8", "3.4": "1.7", "seed = 8": "seed = 8\ntime_step = 0.1"})
    result = command("run", path, code=2)
    assert "flew apart" in result.stderr
    assert "take a time_step smaller than 0.1" in result.stderr


def test_help_loads_no_heavy_library() -> None:
    heavy = {"h5py", "numba", "numpy", "pandas", "pint", "pymbar", "rich", "scipy"}
    code = (
        f"import sys; sys.path.insert(1, {str(ROOT)!r})\n"
        "from click.testing import CliRunner\nfrom canonry.cli import main\n"
        "result = CliRunner().invoke(main, ['--help'])\n"
        f"print(result.exit_code, {heavy!r} & set(sys.modules))"
    )
    result = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert result.stdout.strip() == "0 set()", result.stderr
