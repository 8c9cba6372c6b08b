"""Adopting samples that were taken elsewhere: the same estimates as at home, what is asked for and what is noticed."""

import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest
from click.testing import CliRunner, Result

import canonry
import canonry.adopted
import canonry.adoption
import canonry.estimation
from canonry.adoption import Adoption
from canonry.cli import main
from canonry.directory import stored
from canonry.errors import UserError
from canonry.job import report
from canonry.sampling import recorded
from canonry.study import Study, load
from canonry.suspicion import times
from estimators.canonical import rung_properties
from estimators.reweight import pool
from sampler.fluid import Fluid, State
from sampler.series import Series

ARGON = 'epsilon = "119.8 K"\nsigma = "3.405 angstrom"\nmass = "39.948 u"'
HOME = f"""
[fluid]
potential = "lennard-jones"
{ARGON}
cutoff = 2.2
[state]
density = 0.7
temperatures = [1.2, 1.4, 1.65]
particles = 64
[sampling]
seed = 12
repeats = 2
equilibration = 2000
steps = 30000
frame_every = 500
"""
NAMES = {"time": "t", "potential": "U", "dynamical": "U_dyn", "kinetic": "K", "pressure": "P", "virial": "W"}


@dataclass(frozen=True)
class Home:
    """A study sampled here, its series by state, and what it says."""

    study: Study
    series: Mapping[State, list[Series]]
    properties: pd.DataFrame
    structure: pd.DataFrame


@pytest.fixture(scope="module")
def home(tmp_path_factory: pytest.TempPathFactory) -> Home:
    directory = tmp_path_factory.mktemp("home")
    (directory / "liquid.toml").write_text(HOME)
    with pytest.MonkeyPatch.context() as patch:
        keep_all(patch)
        results = canonry.run(directory / "liquid.toml", into=directory / "liquid")
    study = stored(directory / "liquid")
    series = {state: recorded(study, directory / "liquid", state) for state in study.states}
    return Home(study, series, results.properties, results.structure)


@pytest.fixture(autouse=True)
def apart(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.chdir(tmp_path)
    keep_all(monkeypatch)


def keep_all(monkeypatch: pytest.MonkeyPatch) -> None:
    """Nothing is cut off as unsettled: what a column would say about that is not what is looked at here."""
    monkeypatch.setattr(canonry.estimation, "settled_start", lambda values: 0)


def table(series: Series, *, kinetic_part: str = "set", sizes: Mapping[str, float] | None = None) -> pd.DataFrame:
    """What another program would have written of a series; `sizes` are those of the units of its columns."""
    state, sizes = series.state, {"energy": 1.0, "pressure": 1.0, "time": 1.0} | dict(sizes or {})
    part = state.particles * state.temperature if kinetic_part == "set" else 2.0 / 3.0 * series.kinetic
    energies = {"U": series.energy, "U_dyn": series.sampled_energy, "K": series.kinetic, "W": series.virial}
    columns = {name: values / sizes["energy"] for name, values in energies.items()}
    pressure = (series.virial + part) / state.volume / sizes["pressure"]
    return pd.DataFrame({"t": series.times / sizes["time"], **columns, "P": pressure})


def description(home: Home, *, columns: Mapping[str, Any] = NAMES, **changes: Any) -> dict[str, Any]:
    """Of all series, in reduced units and with energies of the whole box; rungs without samples."""
    named = {holds: name for holds, name in columns.items() if not (holds == "virial" and "pressure" in columns)}
    whole = {
        "molecules": 64,
        "columns": named,
        "units": "reduced",
        "energy": "total",
        "long_range": True,
        "pressure_kinetic": "set",
        "kinetic_freedom": "3N",
        "fluid": {"potential": "lennard-jones", "cutoff": 2.2, "truncation": "corrected"},
        "rungs": [{"temperature": state.temperature, "density": state.density} for state in home.study.states],
    }
    return whole | changes


def taken_in(home: Home, make: Callable[[Series], Any] = table, **changes: Any) -> Adoption:
    """Adopted from data frames that `make` makes."""
    whole = description(home, **changes)
    for rung, series in zip(whole["rungs"], home.series.values(), strict=True):
        rung["samples"] = [make(each) for each in series]
    return canonry.adopt(whole, into="got")


def assert_same(found: pd.DataFrame, wanted: pd.DataFrame, *, but: set[str] = frozenset()) -> None:
    """All values and errors to rounding, but those of some properties, which are absent from what was found."""
    key = ["temperature", "density", "property", "method"]
    wanted = wanted[~wanted["property"].isin(but)]
    both = wanted.merge(found, on=key, suffixes=("", "_found"), how="outer", indicator=True)
    assert set(both["_merge"]) == {"both"}
    for column in ("value", "standard_error", "effective_samples"):
        np.testing.assert_allclose(both[f"{column}_found"], both[column], rtol=1e-7)
    assert (both["headline"] == both["headline_found"]).all()


@pytest.mark.parametrize("kinetic_part", ["set", "instantaneous"])
def test_adopted_in_reduced_units_samples_say_what_they_say_at_home(home: Home, kinetic_part: str) -> None:
    taken_in(home, lambda each: table(each, kinetic_part=kinetic_part), pressure_kinetic=kinetic_part)
    assert_same(canonry.estimate("got").properties, home.properties)


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
    assert_same(canonry.estimate("got").properties, home.properties)


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


LACKING = {
    "potential": {"residual_energy", "residual_heat_capacity", "heat_capacity", "thermal_pressure", "bulk_modulus"},
    "pressure": {"pressure", "compressibility_factor", "thermal_pressure", "bulk_modulus"},
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
    assert_same(results.properties, wanted, but=LACKING[column])
    told = adoption.missing.groupby("property")["column"].agg(lambda rows: " and ".join(sorted(set(rows)))).to_dict()
    assert set(told) == LACKING[column] | {"g(r)"}
    assert told["g(r)"] == "frames"
    assert all(column in told[name] for name in LACKING[column] - {"bulk_modulus"})
    pd.testing.assert_frame_equal(pd.read_csv("got/missing.csv"), adoption.missing)
    closing = command("estimate", "got").output
    assert ("P" if column == "potential" else "c_v") in closing


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


TEXTS = {
    "commas": ("t,U,K\n", ",", {"time": "t", "potential": "U", "kinetic": "K"}),
    "semicolons and quotes": ('# made yesterday\n"t, ps";"U";"K"\n', ";", {"time": "t, ps", "potential": "U"}),
    "blanks, header in a remark": ("# step of\n# t U K\n", "   ", {"time": "t", "potential": "U", "kinetic": "K"}),
    "tabs": ("t\tU\tK\n", "\t", {"time": "t", "potential": "U"}),
    "numbers of columns": ("", " ", {"time": 1, "potential": 2, "kinetic": 3}),
    "a header that does not fit": (
        "all about it\nmade by hand today\n",
        ",",
        {"time": 1, "kinetic": 3, "potential": 2},
    ),
}


@pytest.mark.parametrize("kind", TEXTS)
def test_delimited_text_is_read(home: Home, kind: str) -> None:
    header, mark, columns = TEXTS[kind]
    series = home.series[home.study.states[0]][0]
    rows = table(series)[["t", "U", "K"]].to_numpy().tolist()
    Path("run.dat").write_text(header + "".join(mark.join(map(repr, row)) + "\n" for row in rows))
    spec = description(home, columns=columns, title="Text")
    spec["rungs"] = [{"temperature": 1.2, "density": 0.7, "files": "run.dat"}]
    (own,) = canonry.adopt(spec, into="got").series
    np.testing.assert_allclose(own.column("energy"), series.energy, rtol=1e-15)
    assert own.has("kinetic") == ("kinetic" in columns)


def test_parquet_is_read_where_it_can_be_and_else_asked_for_politely(
    home: Home, monkeypatch: pytest.MonkeyPatch
) -> None:
    series = home.series[home.study.states[0]][0]
    spec = description(home)
    spec["rungs"] = [{"temperature": 1.2, "density": 0.7, "files": ["run.parquet"]}]

    def lacking(path: Path) -> pd.DataFrame:
        raise ImportError("Unable to find a usable engine")

    monkeypatch.setattr(pd, "read_parquet", lacking)
    with pytest.raises(UserError, match=r"run\.parquet: reading Parquet needs the package pyarrow, which is not"):
        canonry.adopt(spec, into="got")
    monkeypatch.setattr(pd, "read_parquet", lambda path: table(series))
    (own,) = canonry.adopt(spec, into="got").series
    np.testing.assert_array_equal(own.column("energy"), series.energy)


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


def test_a_directory_is_made_whole_or_not_at_all(home: Home, monkeypatch: pytest.MonkeyPatch) -> None:
    Path("full").mkdir()
    Path("full/notes.txt").touch()
    spec = description(home)
    for rung, series in zip(spec["rungs"], home.series.values(), strict=True):
        rung["samples"] = list(map(table, series))
    with pytest.raises(UserError, match="--into full: it exists already; what is needed is a new or empty directory"):
        canonry.adopt(spec, into="full")
    saved = []

    def save(series: Series, *arguments: Any, **more: Any) -> None:
        if len(saved) == 3:
            raise OSError(28, "No space left on device")
        saved.append(series)
        canonry.adopted.save(series, *arguments, **more)

    monkeypatch.setattr(canonry.adoption, "save", save)
    with pytest.raises(UserError, match=r"--into got: it cannot be written \(No space left on device\)"):
        canonry.adopt(spec, into="got")
    assert sorted(path.name for path in Path().iterdir()) == ["full"]


def test_what_was_adopted_is_as_it_was_written(home: Home) -> None:
    adoption = taken_in(home)
    assert stored(adoption.directory) == adoption.study == load("got/study.toml")
    for own in adoption.series:
        (again,) = (each for each in recorded(adoption.study, Path("got"), own.state) if each.repeat == own.repeat)
        for name in ("energy", "sampled_energy", "kinetic", "virial", "hypervirial", "frames"):
            np.testing.assert_array_equal(again.column(name), own.column(name))
        kept = ("interval", "freedom", "frame_stride", "frame_offset", "state", "fluid", "bath", "ledger")
        assert [getattr(again, name) for name in kept] == [getattr(own, name) for name in kept]
    file = Path("got/rungs/0.7-1.4/repeat-1/samples.h5")
    whole = file.read_bytes()
    file.write_bytes(whole[: len(whole) // 2])
    with pytest.raises(UserError, match=r"samples\.h5 cannot be read back .* adopt the samples again"):
        canonry.estimate("got")
    file.write_bytes(whole)
    toml = Path("got/study.toml")
    toml.write_text(toml.read_text().replace("cutoff = 2.2", "cutoff = 2.1"))
    with pytest.raises(UserError, match=r"adopted with cutoff 2\.2, in study\.toml it is 2\.1"):
        canonry.estimate("got")


def test_nothing_is_sampled_where_samples_were_adopted(home: Home) -> None:
    taken_in(home)
    Path("liquid.toml").write_text(HOME)
    before = Path("got/study.toml").read_text()
    for arguments in (["run", "got"], ["sample", "got"], ["check", "got"], ["run", "liquid.toml", "--into", "got"]):
        result = command(*arguments, code=2)
        assert result.output.count("\n") == 1
        assert "got: its samples were adopted, so there is nothing to sample here" in result.output
    with pytest.raises(UserError, match="nothing to sample here"):
        canonry.run("got")
    assert Path("got/study.toml").read_text() == before


WRONG: dict[str, tuple[dict[str, Any], str]] = {
    "unknown key": ({"moleculs": 64}, r"samples: moleculs = 64: unknown key; did you mean molecules\?"),
    "no molecules": ({"molecules": None}, r"molecules: in rungs\[1\], missing; what is needed is a whole number"),
    "no columns": ({"columns": None}, r"columns: in rungs\[1\], missing; .* time, potential, dynamical"),
    "unknown column": ({"columns": {"potental": "U"}}, r"columns\.potental = \"U\": unknown key; did you mean poten"),
    "nothing to say": ({"columns": {"time": "t", "kinetic": "K"}}, "at least one of potential, pressure, virial"),
    "both": ({"columns": NAMES, "x": 0}, "unknown key"),
    "no such column": ({"columns": {"time": "t", "potential": "V"}}, r"there is no column 'V' \(potential\); .* t, U"),
    "no time": ({"columns": {"potential": "U"}}, r"interval: in rungs\[1\], missing; columns has no time; .* number"),
    "no units": ({"units": None}, r"units: in rungs\[1\], missing; .*units of energy, pressure, time"),
    "no unit": ({"units": {"energy": "kJ/mol", "time": "ps"}}, r"units\.energy = \"kJ/mol\": .* needs fluid\.epsilon"),
    "no such unit": ({"units": {"energy": 3}}, r"units\.energy = 3: .* such as \"kJ/mol\", or \"reduced\""),
    "no basis": ({"energy": None}, r"energy: in rungs\[1\], missing; .* need it; what is accepted is \"total\" or"),
    "no tail stated": ({"long_range": None}, r"long_range: in rungs\[1\], missing; .*cutoff.* true or false"),
    "no kinetic part": (
        {"pressure_kinetic": None},
        r"pressure_kinetic: in rungs\[1\], missing; .* \"instantaneous\" or",
    ),
    "no freedom": (
        {"kinetic_freedom": None},
        r"kinetic_freedom: in rungs\[1\], missing; columns\.kinetic needs it; .*3N",
    ),
    "no such freedom": ({"kinetic_freedom": "6N"}, r"kinetic_freedom = \"6N\": .* \"3N\" or \"3N-3\""),
    "no fluid": ({"fluid": {}}, r"fluid\.potential: missing; what is accepted is \"lennard-jones\" or \"elsewhere\""),
    "no cutoff": ({"fluid": {"potential": "lennard-jones"}}, r"fluid\.cutoff: missing; .* the samples were taken"),
    "spheres with parts": ({"intramolecular": True}, r"intramolecular = true: .* single spheres have no such part"),
    "no such tail": (
        {"fluid": {"potential": "lennard-jones", "cutoff": 2.2, "truncation": "shifted"}},
        r"long_range = true: .* truncation \"shifted\" has no such part; what is accepted is false",
    ),
    "no rungs": ({"rungs": None}, r"rungs: missing; .* \[\[rungs\]\] for every temperature and density"),
    "no density": ({"rungs": [{"temperature": 1.2}]}, r"rungs\[1\]\.density: missing; what is needed is a number"),
    "no files": ({"rungs": [{"temperature": 1.2, "density": 0.7}]}, r"rungs\[1\]\.files: missing; .* for each repeat"),
    "pressure set": (
        {"rungs": [{"temperature": 1.2, "pressure": 0.1}]},
        r"rungs\[1\]\.pressure = 0\.1: samples at a set pressure are not taken; .* constant volume \(NVT\)",
    ),
    "both volume and density": (
        {"rungs": [{"temperature": 1.2, "density": 0.7, "volume": 91.4}]},
        r"rungs\[1\]\.volume = 91\.4: density is given too",
    ),
    "twice": (
        {"rungs": [{"temperature": 1.2, "density": 0.7}, {"temperature": 1.2, "density": 0.7}]},
        "stands there twice",
    ),
}


@pytest.mark.parametrize("fault", WRONG)
def test_what_is_not_stated_or_wrong_is_named_with_what_is_accepted(home: Home, fault: str) -> None:
    changes, message = WRONG[fault]
    spec = {key: value for key, value in (description(home) | changes).items() if value is not None}
    if changes.keys() != {"rungs"}:
        for rung, series in zip(spec["rungs"], home.series.values(), strict=True):
            rung["samples"] = list(map(table, series))
    with pytest.raises(UserError, match=message):
        canonry.adopt(spec, into="got")
    assert not Path("got").exists()


def test_a_varying_volume_is_refused_and_a_wrong_one_told(home: Home) -> None:
    columns = {holds: NAMES[holds] for holds in ("time", "potential")} | {"volume": "V"}
    generator = np.random.default_rng(5)
    with pytest.raises(UserError, match=r"columns\.volume = \"V\": in rungs\[1\], the volume varies: .* \(NVT\)$"):
        taken_in(
            home, lambda s: table(s).assign(V=s.state.volume * generator.normal(1.0, 0.01, len(s))), columns=columns
        )
    with pytest.raises(UserError, match=r"the volume is 1\.1 times that of the state"):
        taken_in(home, lambda s: table(s).assign(V=1.1 * s.state.volume), columns=columns)
    taken_in(home, lambda s: table(s).assign(V=1.0001 * s.state.volume), columns=columns)


def test_times_that_stand_twice_go_back_or_are_uneven_are_said(home: Home) -> None:
    def restarted(series: Series) -> pd.DataFrame:
        whole = table(series)
        return pd.concat([whole[:1500], whole[1400:]])

    adoption = taken_in(home, restarted)
    assert [len(each) for each in adoption.series] == [3000] * 6
    np.testing.assert_array_equal(adoption.series[0].energy, home.series[home.study.states[0]][0].energy)
    assert "rungs[1], repeat 0: 100 of 3100 rows carry a time that stands there again" in adoption.notes[0]
    assert adoption.notes[0] in canonry.estimate("got").caveats

    plain = times(np.arange(100.0))
    assert (plain.interval, plain.notes, list(plain.rows)) == (1.0, (), list(range(100)))
    gaps = times(np.delete(np.arange(100.0), [40, 41, 70]))
    assert len(gaps.rows) == 97
    assert "2 of 96 intervals differ from the usual one, they are from 1 to 3 of it" in gaps.notes[0]
    assert times(np.arange(100.0)[::-1]) is None
    later = times(np.array([0.0, 1.0, 2.0, 1.0, 2.0, 3.0]))
    assert list(later.rows) == [0, 3, 4, 5]
    with pytest.raises(UserError, match=r"columns\.time = \"K\": in rungs\[1\], the times of repeat 0 do not rise"):
        canonry.adopt(
            description(home, columns={"time": "K", "potential": "U"})
            | {
                "rungs": [
                    {"temperature": 1.2, "density": 0.7, "samples": [table(home.series[home.study.states[0]][0])]}
                ]
            },
            into="again",
        )


MISTAKEN = {
    "a total energy": (
        lambda each: table(each).assign(U=each.energy + each.kinetic, U_dyn=each.sampled_energy + each.kinetic),
        r"the potential energy holds (0\.9|1\.0).* of the kinetic energy, as a total energy does",
    ),
    "constant energy": (
        lambda each: table(each).assign(K=400.0 - each.sampled_energy),
        r"the potential energy makes up for -(1|0\.99).* of the kinetic energy, as at constant total energy",
    ),
    "the total energy of a run at constant energy": (
        lambda each: table(each).assign(U_dyn=1e-3 * np.sin(each.times)),
        "the potential energy hardly changes",
    ),
    "kinetic energies of a molecule": (
        lambda each: table(each).assign(K=each.kinetic / 64),
        r"the mean kinetic energy is 0\.015[56] times what temperature and kinetic_freedom make it",
    ),
}


@pytest.mark.parametrize("mistake", MISTAKEN)
def test_energies_of_another_kind_are_seen_through(home: Home, mistake: str) -> None:
    make, message = MISTAKEN[mistake]
    with pytest.raises(UserError, match=message):
        taken_in(home, make)


@pytest.mark.parametrize(("stated", "true"), [("bar", "MPa"), ("MPa", "bar"), ("kPa", "bar"), ("MPa", "atm")])
@pytest.mark.parametrize("witness", ["kinetic", "temperatures", "reference", "positions"])
def test_pressures_in_another_unit_than_stated_are_seen_through(
    home: Home, stated: str, true: str, witness: str
) -> None:
    """By how they follow the kinetic energy, by their rise with temperature, and by what is known of the fluid."""
    scale = home.study.scale
    unit = {"bar": 0.1, "MPa": 1.0, "kPa": 1e-3, "atm": 0.101325}[true] / scale.factor("pressure")
    part = "instantaneous" if witness == "kinetic" else "set"
    columns = ("time", "potential", "kinetic", "pressure")
    if witness in ("reference", "positions"):
        columns = ("time", "pressure")
    spec = description(
        home,
        columns={holds: NAMES[holds] for holds in columns},
        units={"energy": "reduced", "pressure": stated, "time": "reduced", "length": "reduced"},
        pressure_kinetic=part,
        fluid=home_fluid("plain" if witness == "positions" else "corrected"),
        long_range=witness != "positions",
    )
    spec["rungs"] = spec["rungs"][: 3 if witness == "temperatures" else 1]
    for rung, series in zip(spec["rungs"], home.series.values(), strict=False):
        made = [table(each, kinetic_part=part, sizes={"pressure": unit}) for each in series]
        if witness == "positions":
            tail = series[0].fluid.tail(0.7)[1] * 0.7
            made = [each.assign(P=each["P"] - tail / unit) for each in made]
            rung["frames"] = {"samples": [each.frames for each in series], "first": 50, "every": 50}
        rung["samples"] = made
    with pytest.raises(UserError, match=rf"units\.pressure = \"{stated}\": .* as in values in .*\b{true}\b.*;"):
        canonry.adopt(spec, into="got")
    spec["units"]["pressure"] = true
    canonry.adopt(spec, into="got")


def home_fluid(truncation: str) -> dict[str, Any]:
    sizes = {"epsilon": "119.8 K", "sigma": "3.405 angstrom", "mass": "39.948 u"}
    return {"potential": "lennard-jones", "cutoff": 2.2, "truncation": truncation, **sizes}


def test_positions_are_held_to_the_rows_they_belong_to(home: Home) -> None:
    series = home.series[home.study.states[0]][0]
    spec = description(home)

    def with_frames(frames: np.ndarray, first: int, every: int) -> dict[str, Any]:
        given = {"samples": [frames], "first": first, "every": every}
        return spec | {"rungs": [{"temperature": 1.2, "density": 0.7, "samples": [table(series)], "frames": given}]}

    outside = series.frames + series.state.box * np.array([3.0, -2.0, 0.0])
    (own,) = canonry.adopt(with_frames(outside, 1, 50), into="first").series
    assert list(own.frame_samples) == list(range(0, 3000, 50))
    np.testing.assert_allclose(own.frames, series.frames, atol=1e-12)
    (own,) = canonry.adopt(with_frames(outside, 50, 50), into="last").series
    np.testing.assert_array_equal(own.frame_samples, series.frame_samples)
    for frames, first, every, message in (
        (outside, 51, 50, r"frames\.first = 51: what is needed is a row from 1 to 50"),
        (outside, 50, 60, r"frames\.every = 60: the last of 60 frames would belong to row 3590 of 3000"),
        (outside[:, :63], 1, 50, r"finite numbers of the shape \(frames, 64, 3\)"),
    ):
        with pytest.raises(UserError, match=message):
            canonry.adopt(with_frames(frames, first, every), into="got")
    Path("run.xyz").write_text("63\n\n" + "Ar 0 0 0\n" * 63)
    given = with_frames(outside, 1, 50)
    given["rungs"][0]["frames"] = {"files": ["run.xyz"], "first": 1, "every": 50}
    with pytest.raises(UserError, match=r"run\.xyz: line 1 is '63'; .* that of the molecules, 64"):
        canonry.adopt(given, into="got")


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
        but={"bulk_modulus", "heat_capacity"},
    )
    assert len(results.structure)
    assert 0.9 < results.structure["g"].iloc[-20:].mean() < 1.1


def own_values(home: Home, state: State) -> pd.DataFrame:
    own = home.properties[home.properties["method"] != "reweighted"]
    return own[own["temperature"] == state.temperature].assign(headline=True)


def test_estimators_leave_out_what_columns_do_not_hold(home: Home) -> None:
    series = home.series[home.study.states[0]]
    whole = rung_properties(series)
    for lacking, but in (("virial", LACKING["pressure"]), ("hypervirial", {"bulk_modulus"})):
        cut = [replace(each, **{lacking: None}) for each in series]
        assert set(rung_properties(cut)) == set(whole) - but
        assert set(pool(cut).at(1.25).properties) == set(whole) - but
    assert Fluid().hypervirial(series[0].energy, series[0].virial) == pytest.approx(series[0].hypervirial)
    assert Fluid(truncation="shifted").hypervirial(series[0].energy, series[0].virial) is None


def command(*arguments: object, code: int = 0) -> Result:
    result = CliRunner().invoke(main, list(map(str, arguments)))
    assert result.exit_code == code, result.output
    assert result.exception is None or isinstance(result.exception, SystemExit)
    return result
