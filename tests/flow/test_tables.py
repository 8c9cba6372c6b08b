"""Tables: which value is the headline, what is refused, and what is written."""

from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import canonry.estimation
from canonry.directory import write
from canonry.findings import Finding
from canonry.isochore import Isochore
from canonry.job import estimate, run
from canonry.results import Results
from estimators.derived import PARTS
from estimators.estimate import Estimate, mean
from estimators.reweight import Reweighted
from sampler.fluid import State
from sampler.series import Series

LIQUID = """
[fluid]
potential = "lennard-jones"
cutoff = {cutoff}
truncation = "{truncation}"
ideal_heat_capacity = {ideal}
[state]
{states}
particles = 64
[sampling]
seed = 6
scheme = "{scheme}"
equilibration = 1000
steps = 20000
repeats = {repeats}
frame_every = 200
"""
DEFAULTS = {
    "cutoff": 2.1,
    "truncation": "corrected",
    "ideal": 1.5,
    "states": "density = 0.7\ntemperatures = [1.3, 1.6, 2.0]",
    "scheme": "baoab",
    "repeats": 1,
}
PROPERTIES = {
    *("residual_energy", "residual_heat_capacity", "heat_capacity", "pressure"),
    *("compressibility_factor", "thermal_pressure", "bulk_modulus"),
    *("isobaric_heat_capacity", "thermal_expansion", "sound_speed", "joule_thomson", "grueneisen", "enthalpy"),
}
TOTALS = {"heat_capacity", "isobaric_heat_capacity", "sound_speed", "joule_thomson", "grueneisen", "enthalpy"}
INSERTED = {"residual_chemical_potential", "residual_helmholtz_energy", "residual_entropy"}
CHANGES = {"residual_helmholtz_change", "residual_entropy_change"}
STATES = [State(1.0, 0.8, 500), State(1.2, 0.8, 500)]


def sampled(directory: Path, **changes: object) -> Results:
    path = directory / "study.toml"
    path.write_text(LIQUID.format(**DEFAULTS | changes))
    return run(path, into=directory / "study")


@pytest.fixture(scope="module")
def liquid(tmp_path_factory: pytest.TempPathFactory) -> Results:
    return sampled(tmp_path_factory.mktemp("liquid"))


@pytest.fixture(scope="module")
def apart(tmp_path_factory: pytest.TempPathFactory) -> Results:
    """Two rungs that share nothing."""
    return sampled(tmp_path_factory.mktemp("apart"), states="density = 0.8\ntemperatures = [1.0, 3.0]", cutoff=2.0)


def once(rows: pd.DataFrame) -> bool:
    return not rows.duplicated(["temperature", "density", "property"]).any()


def test_one_headline_for_each_property_and_state(liquid: Results, apart: Results) -> None:
    for results, states in ((liquid, 3), (apart, 2)):
        headlines = results.properties[results.properties["headline"]]
        changes = headlines[headlines["property"].isin(CHANGES)]
        assert len(headlines) - len(changes) == states * len(PROPERTIES | INSERTED)
        assert set(headlines["property"]) - CHANGES == PROPERTIES | INSERTED
        assert set(headlines["property"][headlines["method"] == "insertion"]) == INSERTED
        assert len(changes) == (0 if results is apart else 4)
        assert once(headlines)


def test_overlapping_rungs_are_reweighted(liquid: Results) -> None:
    headlines = liquid.properties[liquid.properties["headline"] & ~liquid.properties["property"].isin(INSERTED)]
    assert (headlines["method"] == "reweighted").mean() > 0.8
    own = liquid.properties[liquid.properties["method"] != "reweighted"].set_index(["temperature", "property"])
    rows = headlines[(headlines["method"] == "reweighted") & ~headlines["property"].isin(CHANGES)]
    for _, row in rows.iterrows():
        other = own.loc[(row["temperature"], row["property"])]
        errors = np.hypot(row["standard_error"], other["standard_error"])
        assert abs(row["value"] - other["value"]) <= 3.0 * errors
        assert row["standard_error"] < 1.3 * other["standard_error"]


def test_rungs_apart_keep_their_own_values_with_caution(apart: Results) -> None:
    headlines = apart.properties[apart.properties["headline"]]
    assert not (headlines["method"] == "reweighted").any()
    inserted = headlines["method"] == "insertion"
    assert set(headlines["property"][inserted]) == INSERTED
    assert not headlines["reason"][inserted].str.contains("shares too few samples").any()
    assert set(headlines["trust"][~inserted]) <= {"caution", "no"}
    assert headlines["reason"][~inserted].str.contains("shares too few samples").all()


def test_refused_points_of_a_curve_keep_their_row(apart: Results, liquid: Results) -> None:
    assert len(apart.curve) == len(liquid.curve) == 61 * len(PROPERTIES)
    refused = apart.curve[apart.curve["value"].isna()]
    middle = apart.curve["temperature"].between(1.5, 2.1)
    assert middle.sum() > 90
    assert set(apart.curve[middle].index) <= set(refused.index)
    assert (refused["trust"] == "no").all()
    assert refused["standard_error"].isna().all()
    unclear = refused["reason"].str.contains("not clearly above zero")
    assert set(refused["property"][unclear]) <= {*PARTS}
    assert refused["reason"][~unclear].str.contains("effective samples").all()
    assert (refused["effective_samples"] < 50.0).eq(~unclear).all()
    assert (apart.curve.drop(refused.index)["effective_samples"] >= 50.0).all()
    assert liquid.curve["value"].notna().all()


def test_a_curve_spans_the_rungs_and_no_more(liquid: Results) -> None:
    temperatures = liquid.curve["temperature"]
    assert (temperatures.min(), temperatures.max()) == (1.3, 2.0)
    assert once(liquid.curve)


def test_a_curve_meets_the_reweighted_values_at_its_ends(liquid: Results) -> None:
    pooled = liquid.properties[liquid.properties["method"] == "reweighted"].set_index(["temperature", "property"])
    for _, row in liquid.curve[liquid.curve["temperature"].isin([1.3, 2.0])].iterrows():
        assert row["value"] == pooled.loc[(row["temperature"], row["property"]), "value"]


def test_heat_capacity_is_the_residual_one_with_the_ideal_part(liquid: Results, tmp_path: Path) -> None:
    table = liquid.properties.set_index(["temperature", "method", "property"])["value"].unstack()
    full, residual = table["heat_capacity"].dropna(), table["residual_heat_capacity"].dropna()
    assert (full - residual).to_numpy() == pytest.approx(1.5, abs=1e-12)
    without = sampled(tmp_path, ideal='"unknown"', states="points = [[1.6, 0.7]]")
    assert set(without.properties["property"]) == (PROPERTIES | INSERTED) - TOTALS
    assert not TOTALS.intersection(without.summary)


def test_a_rung_alone_stands_by_itself(tmp_path: Path) -> None:
    results = sampled(tmp_path, states="points = [[1.6, 0.7], [1.3, 0.6]]")
    assert results.properties["headline"].all()
    assert not results.properties["reason"].str.contains("overlap").any()
    assert len(results.curve) == len(results.overlap) == 0
    assert (tmp_path / "study" / "curve.csv").read_text().startswith("temperature,")


def test_a_bulk_modulus_that_needs_contact_is_the_rungs_own(tmp_path: Path) -> None:
    results = sampled(tmp_path, truncation="shifted")
    rows = results.properties[results.properties["property"] == "bulk_modulus"]
    assert len(rows) == 3
    assert rows["headline"].all()
    assert not rows["reason"].str.contains("overlap|combined").any()


def test_without_a_bath_temperatures_are_measured(tmp_path: Path) -> None:
    results = sampled(tmp_path, scheme="velocity-verlet", repeats=2)
    found = sorted(results.summary["temperature"])
    assert found == pytest.approx([1.3, 1.6, 2.0], rel=0.15)
    assert all(one != other for one, other in zip(found, (1.3, 1.6, 2.0), strict=True))
    assert results.properties["headline"].all()
    assert len(results.curve) == 0
    assert set(results.structure["temperature"]) == set(results.ledger["temperature"]) == set(found)
    assert any("mean kinetic energy" in caveat for caveat in results.caveats)
    rows = results.properties.set_index(["temperature", "property"])["value"]
    for temperature in found:
        factor = rows[temperature, "pressure"] / (0.7 * temperature)
        # less the bias of a ratio of two noisy numbers, about var(T)/T^2 = 1e-5 here
        assert rows[temperature, "compressibility_factor"] == pytest.approx(factor, rel=5e-5)


def test_repeats_of_different_energy_are_not_one_sample(tmp_path: Path, liquid: Results) -> None:
    """At constant energy u scatters less than in a bath; two energies taken as one would make it scatter more."""
    results = sampled(tmp_path, scheme="velocity-verlet", repeats=2)
    free = results.properties[results.properties["property"] == "residual_energy"]
    bound = liquid.properties[(liquid.properties["property"] == "residual_energy") & ~liquid.properties["headline"]]
    assert len(free) == len(bound) == 3
    assert (free["standard_error"].to_numpy() < bound["standard_error"].to_numpy()).all()


def test_coordination_counts_what_g_says(liquid: Results) -> None:
    """Of 63 others at density 0.7: g times the volume of each shell."""
    for _, rows in liquid.structure.groupby("temperature"):
        r, width = rows["r"].to_numpy(), rows["r"].iloc[1] - rows["r"].iloc[0]
        shells = 4.0 / 3.0 * np.pi * ((r + 0.5 * width) ** 3 - (r - 0.5 * width) ** 3)
        expected = np.cumsum(rows["g"] * shells * 63 * 0.7 / 64)
        assert rows["coordination"].to_numpy() == pytest.approx(expected.to_numpy(), rel=1e-6)


def test_histograms_are_densities_around_the_mean(liquid: Results) -> None:
    own = liquid.properties[liquid.properties["method"] == "average"].set_index(["temperature", "property"])["value"]
    for temperature, rows in liquid.histograms.groupby("temperature"):
        width = np.diff(rows["energy"]).mean()
        assert rows["probability"].sum() * width == pytest.approx(1.0, rel=1e-9)
        centre = (rows["energy"] * rows["probability"]).sum() * width
        assert centre == pytest.approx(own[temperature, "residual_energy"], abs=width)


def test_provenance_names_what_made_it(liquid: Results) -> None:
    assert liquid.provenance["seed"] == "6"
    for name in ("canonry", "python", "numpy", "scipy", "numba", "pymbar", "machine", "sampled"):
        assert liquid.provenance[name]
    assert "1 session" in liquid.provenance["wall time of sampling"]


@pytest.mark.parametrize("name", ["sampled_energy", "virial"])
def test_what_has_not_settled_is_cut_off(monkeypatch: pytest.MonkeyPatch, tmp_path: Path, name: str) -> None:
    """A transient that dies out within 400 of 2000 samples, in the energy or in the virial alone."""
    sampled(tmp_path, states="points = [[1.6, 0.7]]")
    honest = canonry.estimation.recorded

    def unsettled(*arguments):
        (series,) = honest(*arguments)
        values = getattr(series, name)
        transient = 10.0 * values.std() * np.exp(-np.arange(len(series)) / 100.0)
        return [replace(series, **{name: values + transient})]

    monkeypatch.setattr(canonry.estimation, "recorded", unsettled)
    (cut,) = estimate(tmp_path / "study").equilibration["cut"]
    assert 250 <= cut <= 1000


def test_what_costs_a_moment_is_told(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    sampled(tmp_path, states="points = [[1.6, 0.7], [1.3, 0.7]]")
    for cached, words in ((True, ""), (False, ", compiling for this machine once")):
        monkeypatch.setattr(canonry.estimation, "is_cached", lambda cached=cached: cached)
        told: list[str] = []
        estimate(tmp_path / "study", watch=told.append)
        estimating = [f"estimating rung {n} of 2{words}" for n in (1, 2)]
        assert told == [*estimating, "reweighting between the rungs", "laying a surface through all rungs"]
    told.clear()
    (tmp_path / "study" / "study.toml").write_text(
        (tmp_path / "study" / "study.toml").read_text().replace("steps = 20000", "steps = 100")
    )
    estimate(tmp_path / "study", watch=told.append)
    assert told[0] == "estimating rung 1 of 2"


def test_samples_of_a_rung_keep_nothing_else_in_memory(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    """A column that is a view would keep all columns, and frames are most of what was recorded."""
    kept: list[Series] = []
    honest = canonry.estimation.rung_properties

    def watched(series, **contact):
        kept.extend(series)
        return honest(series, **contact)

    monkeypatch.setattr(canonry.estimation, "rung_properties", watched)
    sampled(tmp_path, states="points = [[1.6, 0.7]]")
    (series,) = kept
    columns = [getattr(series, name) for name in ("energy", "sampled_energy", "virial", "hypervirial")]
    for column in (*columns, series.kinetic, series.ledger):
        whole = column if column.base is None else column.base
        assert whole.size <= 20000 // 10
    assert series.frames.size == 0
    assert series.frames.base is None


@dataclass
class Pooled:
    """Reweighting that gives what it is told."""

    answer: Reweighted
    temperatures: list[float] = field(default_factory=lambda: [1.0, 1.2])
    overlap: np.ndarray = field(default_factory=lambda: np.array([[0.7, 0.3], [0.3, 0.7]]))

    def curve(self, temperatures: list[float]) -> list[Reweighted]:
        return [self.answer for _ in temperatures]


def known(value: float, samples: int = 4000, method: str = "fluctuation") -> Estimate:
    """An estimate of uncorrelated samples with standard error 1."""
    noise = np.random.default_rng(3).standard_normal(samples)
    noise = (noise - noise.mean()) / noise.std() * np.sqrt(samples)
    return replace(mean({(1.0, 0.8, 500, 0): noise}), value=value, method=method)


def pressures(own: Estimate, answer: Reweighted) -> list[Finding]:
    values = {"residual_heat_capacity": known(0.0), "pressure": own}
    isochore = Isochore({STATES[0]: values, STATES[1]: values}, Pooled(answer), {}, 1.5)
    return [each for each in isochore.properties() if each.property == "pressure" and each.state == STATES[0]]


def reweighted(value: float) -> Reweighted:
    properties = {"residual_heat_capacity": known(0.0), "pressure": known(value, method="reweighted")}
    return Reweighted(1.0, 800.0, properties)


@pytest.mark.parametrize(("gap", "chosen"), [(0.0, True), (4.1, True), (-4.1, True), (4.4, False), (-4.4, False)])
def test_headline_is_reweighted_where_both_agree_within_three_combined_errors(gap: float, chosen: bool) -> None:
    """Both with error 1: the limit is 3 sqrt(2) = 4.24."""
    own, other = pressures(known(10.0), reweighted(10.0 + gap))
    assert (own.headline, other.headline) == (not chosen, chosen)
    assert (own.method, other.method) == ("fluctuation", "reweighted")
    assert own.trust == ("ok" if chosen else "caution")
    assert ("three combined standard errors" in own.reason) is not chosen
    assert other.effective_samples == 800.0


def test_headline_is_the_rungs_own_where_reweighting_is_refused() -> None:
    (own,) = pressures(known(10.0), Reweighted(1.0, 31.0, {}, "31 effective samples"))
    assert (own.headline, own.trust, own.reason) == (True, "caution", "31 effective samples")


def told(own: Estimate, other: Estimate) -> dict[str, list[Finding]]:
    """Of the first of two rungs by property, from a bulk modulus of each kind."""
    values = {"thermal_pressure": known(50.0), "bulk_modulus": own}
    answer = Reweighted(1.0, 800.0, values | {"bulk_modulus": other})
    isochore = Isochore({STATES[0]: values, STATES[1]: values}, Pooled(answer), {}, 1.5)
    every = [each for each in isochore.properties() if each.state == STATES[0]]
    return {name: [each for each in every if each.property == name] for name in ("bulk_modulus", "thermal_expansion")}


def test_a_quotient_by_what_may_be_zero_is_no_headline_where_another_one_is_clear() -> None:
    """Standard errors are 1 and 4 of them are needed: 3.5 +- 1 is not clearly above zero, 5.5 +- 1 is."""
    low, high = known(3.5), known(5.5)
    own, other = told(low, high)["thermal_expansion"]
    assert (own.estimate, own.headline, own.trust) == (None, False, "no")
    assert own.reason == "the bulk modulus that it is divided by is not clearly above zero"
    assert (other.headline, other.method, other.trust) == (True, "reweighted", "ok")
    own, other = told(high, low)["thermal_expansion"]
    assert (own.headline, own.method, own.trust, other.estimate, other.headline) == (True, "derived", "ok", None, False)
    own, other = told(low, low)["thermal_expansion"]
    assert (own.headline, other.headline, own.trust, own.estimate) == (True, False, "no", None)
    assert [each.headline for each in told(low, low)["bulk_modulus"]] == [False, True]


def test_changes_are_told_of_every_rung_but_the_coldest(liquid: Results) -> None:
    """From the equation: energies over 1/T; entropy is the rest. Standard errors bounded."""
    from reference import find

    equation = find("thol-2016")
    a, u = ({at: float(equation.derivatives(at, 0.7)[m, 0]) for at in (1.3, 1.6, 2.0)} for m in (0, 1))
    table = liquid.properties.set_index(["property", "temperature"])
    for at in (1.6, 2.0):
        expected = {
            "residual_helmholtz_change": (a[at] - a[1.3], 0.004),
            "residual_entropy_change": (u[at] - a[at] - u[1.3] + a[1.3], 0.03),
        }
        for name, (value, largest) in expected.items():
            row = table.loc[(name, at)]
            assert (row["method"], row["headline"], row["trust"], row["unit"]) == ("reweighted", True, "ok", "k_B")
            assert 0.0 < row["standard_error"] <= largest
            assert abs(row["value"] - value) <= 4.5 * row["standard_error"] + 0.01 * abs(value)
        assert (name, 1.3) not in table.index


def test_caution_does_not_hide_that_nothing_is_to_be_trusted() -> None:
    (own,) = pressures(known(10.0, samples=20), Reweighted(1.0, 31.0, {}, "31 effective samples"))
    assert own.trust == "no"
    assert own.reason == "too short to tell; 31 effective samples"
    again = own.doubted("31 effective samples", "no")
    assert (again.trust, again.reason) == ("no", own.reason), "a reason is told once"


def test_a_text_file_is_written_whole_or_not_at_all(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = tmp_path / "table.csv"
    write(path, "old")
    monkeypatch.setattr("os.fsync", lambda handle: (_ for _ in ()).throw(OSError("disk full")))
    with pytest.raises(OSError, match="disk full"):
        write(path, "new")
    assert [each.name for each in tmp_path.iterdir()] == ["table.csv"]
    assert path.read_text() == "old"
