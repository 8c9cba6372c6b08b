"""Files that hold samples elsewhere, and the directory that adoption makes of them."""

from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import pytest

import canonry
import canonry.adopted
import canonry.adoption
from canonry.directory import stored
from canonry.errors import UserError
from canonry.sampling import recorded
from canonry.study import load
from sampler.series import Series
from tests.flow.adoption.conftest import HOME, Home, command, description, table, taken_in

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
