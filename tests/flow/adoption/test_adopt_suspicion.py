"""Samples from elsewhere that are not what they are said to be."""

from typing import Any

import numpy as np
import pandas as pd
import pytest

import canonry
import canonry.notes
from canonry.errors import UserError
from canonry.suspicion import times
from sampler.series import Series
from tests.flow.adoption.conftest import NAMES, SIZES, Home, description, table, taken_in


def test_times_that_stand_twice_go_back_or_are_uneven_are_said(home: Home) -> None:
    def restarted(series: Series) -> pd.DataFrame:
        whole = table(series)
        return pd.concat([whole[:1500], whole[1400:]])

    adoption = taken_in(home, restarted)
    assert [len(each) for each in adoption.series] == [3000] * 6
    np.testing.assert_array_equal(adoption.series[0].energy, home.series[home.study.states[0]][0].energy)
    assert "rungs[1], repeat 0: 100 of 3100 rows carry a time that stands there again" in adoption.notes[0]
    results = canonry.estimate("got")
    assert adoption.notes[0] in results.caveats
    for each in (results.properties, results.curve):
        assert (each["trust"] != "ok").all()
        assert each["reason"].str.contains("rows carry the same times as later ones and were left out").all()

    plain = times(np.arange(100.0))
    assert (plain.interval, plain.notes, list(plain.rows)) == (1.0, (), list(range(100)))
    gaps = times(np.delete(np.arange(100.0), [40, 41, 70]))
    assert len(gaps.rows) == 97
    assert "2 of 96 intervals differ from the usual one, they are from 1 to 3 of it" in gaps.notes[0].says
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


def test_times_that_are_uneven_here_and_there_leave_no_doubt_and_else_at_their_own_rung(home: Home) -> None:
    """A sample in 70 lacks, which makes that share of the intervals uneven; then one in 700."""
    doubted = canonry.notes.DOUBTS["times-uneven"].reason
    for spacing, doubtful in ((70, {1.2}), (700, set())):

        def thinned(series: Series, spacing: int = spacing) -> pd.DataFrame:
            whole = table(series)
            lacking = whole.index % spacing == spacing // 2
            return whole[~lacking] if series.state.temperature == 1.2 else whole

        adoption = taken_in(home, thinned, into=f"thinned-{spacing}")
        assert len(adoption.notes) == 2
        assert all("error bars take them as even" in note for note in adoption.notes)
        results = canonry.estimate(adoption.directory)
        found = results.properties["reason"].str.contains(doubted, regex=False)
        assert set(results.properties["temperature"][found]) == doubtful
        assert set(results.properties["trust"][found]) <= {"caution", "no"}
        there = results.properties["temperature"].isin(doubtful)
        assert set(results.properties["property"][found]) == set(results.properties["property"][there])
        assert found[there].all()
        near = results.curve["temperature"] < 1.4
        marks = results.curve["reason"].str.contains(doubted, regex=False)
        assert (marks == near & bool(doubtful)).all()


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
@pytest.mark.parametrize("witness", ["kinetic", "temperatures", "two temperatures", "reference", "positions"])
def test_pressures_in_another_unit_than_stated_are_seen_through(
    home: Home, stated: str, true: str, witness: str
) -> None:
    """By how they follow the kinetic energy, by their rise with temperature, and by what is known of the fluid.

    Two temperatures tell the unit with no pair functions at all, kinetic energies or positions, from 600 samples of a
    repeat; that takes the noise that pressures share with the energy to be taken off.
    """
    scale = home.study.scale
    unit = {"bar": 0.1, "MPa": 1.0, "kPa": 1e-3, "atm": 0.101325}[true] / scale.factor("pressure")
    part = "instantaneous" if witness == "kinetic" else "set"
    columns = ("time", "potential", "dynamical", "kinetic", "pressure")
    if witness == "two temperatures":
        columns = ("time", "potential", "dynamical", "pressure")
    if witness in ("reference", "positions"):
        columns = ("time", "pressure")
    spec = description(
        home,
        columns={holds: NAMES[holds] for holds in columns},
        units={"energy": "reduced", "pressure": stated, "time": "reduced", "length": "reduced"},
        pressure_kinetic=part,
        fluid=home_fluid("plain" if witness == "positions" else "corrected"),
        long_range=witness != "positions",
        intramolecular=False,
    )
    if witness == "two temperatures":
        spec["fluid"] = {**SIZES, "potential": "elsewhere"}
    spec["rungs"] = spec["rungs"][: {"temperatures": 3, "two temperatures": 2}.get(witness, 1)]
    for rung, series in zip(spec["rungs"], home.series.values(), strict=False):
        made = [table(each, kinetic_part=part, sizes={"pressure": unit}) for each in series]
        if witness == "two temperatures":
            made = [each[-600:] for each in made]
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
    return {"potential": "lennard-jones", "cutoff": 2.2, "truncation": truncation, **SIZES}


@pytest.mark.parametrize(
    ("shown_by", "rungs", "changes"),
    [
        ("", 1, {}),
        ("temperatures", 2, {}),
        ("kinetic", 1, {"columns": NAMES, "pressure_kinetic": "instantaneous"}),
        ("reference", 1, {"fluid": home_fluid("corrected")}),
    ],
)
def test_that_nothing_shows_the_unit_of_pressures_is_said(
    home: Home, shown_by: str, rungs: int, changes: dict[str, Any]
) -> None:
    columns = {holds: NAMES[holds] for holds in ("time", "potential", "pressure")}
    spec = description(
        home, **{"columns": columns, "fluid": {**SIZES, "potential": "elsewhere"}, "intramolecular": False} | changes
    )
    spec["rungs"] = spec["rungs"][:rungs]
    for rung, series in zip(spec["rungs"], home.series.values(), strict=False):
        rung["samples"] = [table(each, kinetic_part=spec["pressure_kinetic"]) for each in series]
    notes = canonry.adopt(spec, into="got").notes
    told = [note for note in notes if note.startswith("rungs[1]: nothing shows whether its pressures are in the unit")]
    assert len(told) == (0 if shown_by else 1)
