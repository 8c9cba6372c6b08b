"""The report page, from invented results."""

import re
from dataclasses import replace
from html.parser import HTMLParser
from itertools import pairwise
from xml.etree import ElementTree

import numpy as np
import pandas as pd
import pytest

from canonry.health import CHECKS
from canonry.report.methods import citations, paragraph
from canonry.report.page import html, write
from canonry.report.prose import prose
from canonry.report.words import doubts, outcome
from canonry.results import COLUMNS, Results
from canonry.units import unit_label

STUDY = """title = "Isochore"

[fluid]
potential = "lennard-jones"
cutoff = 3.0
truncation = "{truncation}"
ideal_heat_capacity = 1.5

[state]
density = 0.8
temperatures = [0.9, 1.0]
particles = 500

[sampling]
seed = 1
repeats = 2
time_step = 0.005
{friction}scheme = "{scheme}"
precision = "mixed"
equilibration = 20000
steps = 200000
record_every = 10
frame_every = 500

[compare]
against = ["thol-2016"]
"""
PROPERTIES = {
    "heat_capacity": (lambda t, rho: 1.5 + 0.9 * rho + 0.35 * rho / t, 0.012),
    "residual_heat_capacity": (lambda t, rho: 0.9 * rho + 0.35 * rho / t, 0.012),
    "pressure": (lambda t, rho: rho * t + 7.5 * rho**3 * (t - 0.75), 0.011),
    "residual_energy": (lambda t, rho: -7.6 * rho + 0.9 * (t - 1.0), 0.0016),
    "compressibility_factor": (lambda t, rho: 1.0 + 7.5 * rho**2 * (t - 0.75) / t, 0.013),
    "thermal_pressure": (lambda t, rho: rho + 7.5 * rho**3, 0.04),
    "bulk_modulus": (lambda t, rho: 25.0 * rho**3 + 4.0 * t, 0.2),
    "sound_speed": (lambda t, rho: 5.0 * rho + t, 0.03),
}


class Page(HTMLParser):
    """Checks that elements nest, and collects tags, attributes, text and drawings."""

    VOID = ("meta", "br")

    def __init__(self, text):
        super().__init__(convert_charrefs=True)
        self.open, self.tags, self.links, self.words = [], [], [], []
        self.feed(text)
        assert self.open == []
        self.figures = [ElementTree.fromstring(part) for part in re.findall(r'<svg role="img".*?</svg>', text, re.S)]

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        self.links += [(tag, key, value) for key, value in attrs if key in ("href", "src", "srcset", "data")]
        if tag not in self.VOID and self.get_starttag_text()[-2] != "/":
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.tags.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        self.words.append(data)

    @property
    def text(self):
        return " ".join(" ".join(self.words).split())

    def figure(self, title):
        return next(figure for figure in self.figures if figure.findtext("title").startswith(title))


def invented(densities=(0.8,), rungs=6, units="reduced", samples=300, scheme="baoab", truncation="corrected"):
    rng = np.random.default_rng(11)
    ladder = np.round(1.0 / np.linspace(1.0 / 0.9, 1.0 / 1.5, rungs), 6)
    states = [(t, rho) for rho in densities for t in ladder]
    grid = [(t, rho) for rho in densities for t in np.linspace(0.9, 1.5, 61)]

    def estimate(t, rho, name, noise, **rest):
        formula, error = PROPERTIES[name]
        return {
            "temperature": t,
            "temperature_unit": unit_label("temperature", units),
            "density": rho,
            "density_unit": unit_label("density", units),
            "particles": 500,
            "property": name,
            "value": formula(t, rho) + noise * error * rng.standard_normal(),
            "standard_error": error,
            "unit": unit_label(name, units),
            "effective_samples": 4000.0,
            "trust": "ok",
            "reason": "",
            **rest,
        }

    own = {"method": "fluctuation", "headline": False}
    pooled = {"method": "reweighted", "headline": True}
    properties = [
        estimate(t, rho, name, 1.0, **kind) for t, rho in states for name in PROPERTIES for kind in (own, pooled)
    ]
    curve = [
        estimate(t, rho, name, 0.0, **pooled)
        for t, rho in grid
        for name in ("heat_capacity", "pressure", "residual_energy")
    ]
    verdict = []
    for row in properties:
        if row["headline"] and row["property"] in ("heat_capacity", "pressure", "residual_energy"):
            truth, error = PROPERTIES[row["property"]][0](row["temperature"], row["density"]), row["standard_error"]
            z = (row["value"] - truth) / np.hypot(error, 0.002)
            verdict.append(
                {key: row[key] for key in ("temperature", "density", "property", "value", "standard_error")}
                | {"reference": "thol-2016", "reference_value": truth, "reference_uncertainty": 0.002, "z": z}
                | {"outcome": "agrees" if abs(z) < 2.0 else "undecided", "tolerance": np.nan, "reason": ""}
            )
    repeats = [(t, rho, repeat) for t, rho in states for repeat in (1, 2)]
    times = np.linspace(0.0, 1000.0, samples)
    r = np.arange(0.51, 3.99, 0.02)
    shape = np.where(r > 0.9, 1.0 + 1.8 * np.exp(-1.2 * (r - 1.1)) * np.cos(6.2 * (r - 1.1)), 0.0)
    spread = np.linspace(-3.5, 3.5, 60)
    return Results(
        title="Isochore of an invented coolant",
        study_toml=STUDY.format(
            scheme=scheme, truncation=truncation, friction="" if scheme == "velocity-verlet" else "friction = 2.0\n"
        ),
        units=units,
        properties=pd.DataFrame(properties),
        curve=pd.DataFrame(curve),
        structure=pd.concat(
            pd.DataFrame(
                {
                    "temperature": t,
                    "density": rho,
                    "species_a": "1",
                    "species_b": "1",
                    "r": r,
                    "r_unit": unit_label("length", units),
                    "g": shape + 0.2 * (1.2 - t) * shape * (shape > 1.5),
                    "standard_error": 0.01,
                    "coordination": 4.0 * np.pi / 3.0 * rho * r**3,
                    "g_forced": shape,
                    "forced_error": 0.002,
                }
            )
            for t, rho in states
        ),
        structure_factor=pd.concat(
            pd.DataFrame(
                {
                    "temperature": t,
                    "temperature_unit": unit_label("temperature", units),
                    "density": rho,
                    "density_unit": unit_label("density", units),
                    "k": r,
                    "k_unit": f"1/{unit_label('length', units)}",
                    "s": 0.05 + 0.1 * t * r**2,
                    "standard_error": 0.01,
                }
            )
            for t, rho in states
        ),
        surface=pd.DataFrame({name: [] for name in COLUMNS["surface"]}),
        held_out=pd.DataFrame({name: [] for name in COLUMNS["held_out"]}),
        verdict=pd.DataFrame(verdict),
        summary=pd.DataFrame({"temperature": ladder[0], "density": densities, "heat_capacity": 2.6, "pressure": 1.2}),
        histograms=pd.concat(
            pd.DataFrame(
                {
                    "temperature": t,
                    "density": rho,
                    "energy": PROPERTIES["residual_energy"][0](t, rho) + 0.04 * t * spread,
                    "probability": np.exp(-0.5 * spread**2) / (0.04 * t * np.sqrt(2.0 * np.pi)),
                }
            )
            for t, rho in states
        ),
        ledger=pd.concat(
            pd.DataFrame(
                {
                    "temperature": t,
                    "density": rho,
                    "repeat": repeat,
                    "time": times,
                    "drift": 2e-4 * rng.standard_normal(samples) + 3e-7 * t * times,
                }
            )
            for t, rho, repeat in repeats
        ),
        overlap=pd.DataFrame(
            [
                {"density": rho, "temperature_a": a, "temperature_b": b, "overlap": 0.27}
                for rho in densities
                for a, b in pairwise(ladder)
            ],
            columns=COLUMNS["overlap"],
        ),
        reference_curve=pd.DataFrame(
            [
                {"density": rho, "temperature": t, "property": name, "value": PROPERTIES[name][0](t, rho)}
                | {"uncertainty": 0.004, "reference": "thol-2016"}
                for t, rho in grid
                for name in ("heat_capacity", "pressure", "residual_energy")
            ]
        ),
        equilibration=pd.DataFrame(
            [
                {"temperature": t, "density": rho, "repeat": repeat, "cut": 120, "samples": 20000}
                | {"effective_samples": 2000.0}
                for t, rho, repeat in repeats
            ]
        ),
        health=pd.DataFrame(
            [
                {"temperature": t, "density": rho, "repeat": pd.NA, "check": name, "statistic": 1.0, "threshold": 3.3}
                | {"passed": True, "touches": "pressure", "meaning": f"What {name} says."}
                for t, rho in states
                for name in CHECKS
                if name != "step-bias"
            ]
        ),
        budget=pd.DataFrame(
            [
                {key: row[key] for key in ("temperature", "density", "property", "value", "unit")}
                | {"statistical": row["standard_error"], "time_step": "not known", "cutoff": 0.0012}
                | {"finite_size": 0.0034, "equilibration": "within statistical"}
                | {"expanded": 0.0256, "coverage_factor": 2.0}
                for row in properties
                if row["headline"]
            ]
        ),
        caveats=("Two repeats are few for the agreement between repeats to mean much.",),
        provenance={"canonry": "canonry 0.1.0", "seed": "1", "machine": "x86-64, 2 cores", "wall time": "4 min 10 s"},
    )


def with_surface(results, refused=lambda t, rho: False, trust="ok"):
    """The results with a surface over their states, of the same formulas."""
    densities, temperatures = (results.properties[name].unique() for name in ("density", "temperature"))
    first = results.properties.iloc[0]
    rows = [
        {**first, "temperature": t, "density": rho, "property": name, "value": formula(t, rho)}
        | {"standard_error": error * (1.0 + t), "method": "surface", "headline": True, "trust": trust}
        | {"reason": "" if trust == "ok" else "liquid and vapour coexist here"}
        for rho in np.linspace(densities.min(), densities.max(), 13)
        for t in 1.0 / np.linspace(1.0 / temperatures.min(), 1.0 / temperatures.max(), 9)
        if not refused(t, rho)
        for name, (formula, error) in PROPERTIES.items()
    ]
    held = {"temperature": 1.0, "density": 0.7, "property": "pressure", "value": 1.5, "combined_error": 0.1}
    return replace(
        results,
        surface=pd.DataFrame(rows, columns=COLUMNS["surface"]),
        held_out=pd.DataFrame([held | {"predicted": 1.5 - 0.1 * z, "z": z} for z in (0.3, -2.6, 1.1)]),
    )


def empty(name):
    return pd.DataFrame({column: [] for column in COLUMNS[name]})


def test_page_is_one_file_without_scripts_or_loads(tmp_path):
    write(invented(densities=(0.7, 0.8)), tmp_path / "report.html")
    source = (tmp_path / "report.html").read_text(encoding="utf-8")
    page = Page(source)
    assert not {"script", "img", "link", "iframe", "object"} & set(page.tags)
    assert all(tag == "a" and value.startswith("#") for tag, _, value in page.links)
    assert all(f'id="{value[1:]}"' in source for _, _, value in page.links)
    assert not re.search(r"https?:|@import|url\(|\son\w+=", source)
    assert len(re.findall(r'id="([^"]*)"', source)) == len(set(re.findall(r'id="([^"]*)"', source)))


def test_every_figure_speaks_and_has_labelled_axes():
    page = Page(html(invented()))
    assert len(page.figures) == 4 + 2 + 6 + 6
    titles = [figure.findtext("title") for figure in page.figures]
    assert len(set(titles)) == len(titles)
    for figure in page.figures:
        assert figure.findtext("desc")
        labels = ["".join(text.itertext()) for text in figure.iter("text") if text.get("class") == "axis-label"]
        assert len(labels) == 2
        assert len([text for text in figure.iter("text") if text.get("class") == "tick"]) >= 4
        assert any(re.search(r", [^T]", label) for label in labels)


def test_gain_of_g_from_forces_is_told_where_it_is_known():
    """Errors of 0.01 counted and 0.002 from forces, once beside ones that say nothing."""
    results = invented()
    assert html(results).count("The variance of counted pairs is 25 times") == 1 + 6
    results.structure.loc[results.structure["r"] < 1.5, "forced_error"] = 0.0
    assert html(results).count("is 25 times") == 1 + 6
    results.structure["forced_error"] = np.nan
    assert "counted pairs" not in html(results)


@pytest.mark.parametrize(
    ("units", "labels"),
    [
        ("reduced", ("Heat capacity cv\u200b, kB\u200b", "1/ε", "ε/σ³", "σ √(m/ε)")),
        ("SI", (", J/(mol K)", "Pressure P, MPa", ", mol/kJ", "Time, ps")),
    ],
)
def test_axes_carry_the_units_of_the_study(units, labels):
    page = Page(html(invented(units=units)))
    text = [label for figure in page.figures for label in map("".join, map(ElementTree.Element.itertext, figure))]
    for label in labels:
        assert any(label in shown for shown in text), label


def points(figure, shape=None):
    found = [mark for mark in figure if mark.get("class", "").startswith("point")]
    return [mark for mark in found if shape is None or shape in mark.get("class").split()]


def test_rungs_and_deviations_are_drawn_once_each():
    page = Page(html(invented(rungs=7)))
    for title in ("Heat capacity over", "Pressure over", "Residual energy over"):
        figure = page.figure(title)
        assert len(points(figure, "disc")) == 7
        assert len([mark for mark in figure if mark.get("class") == "bar measured"]) == 7
        assert len([mark for mark in figure if mark.get("stroke-dasharray")]) == 2, "reference and its legend"
    assert len(points(page.figure("Deviation"))) == 3 * 7


def test_bars_are_two_standard_errors():
    figure = Page(html(invented())).figure("Heat capacity over")
    ticks = [mark for mark in figure if mark.get("class") == "tick" and mark.get("text-anchor") == "end"]
    values, pixels = ([float(get(mark)) for mark in ticks] for get in (lambda m: m.text, lambda m: m.get("y")))
    per_pixel = (values[-1] - values[0]) / (pixels[0] - pixels[-1])
    for bar in (mark for mark in figure if mark.get("class") == "bar measured"):
        _, low, high = (float(number) for number in re.findall(r"[\d.]+", bar.get("d")))
        assert (low - high) * per_pixel == pytest.approx(2 * 2 * 0.012, rel=0.02)


def test_doubtful_rungs_look_different_and_are_named_with_their_reason():
    results = invented()
    rows = results.properties.copy()
    first = (rows["temperature"] == 0.9) & (rows["property"] == "pressure")
    rows.loc[first, ["trust", "reason"]] = ["no", "the series is shorter than 50 correlation times"]
    page = Page(html(replace(results, properties=rows)))
    assert len(points(page.figure("Pressure over"), "cross")) == 1
    assert len(points(page.figure("Pressure over"), "disc")) == 5
    assert "Do not use: pressure at T = 0.9" in page.text.replace(" k B", "")
    assert "the series is shorter than 50 correlation times." in page.text
    assert "1.290(11)‡" in page.text


def test_verdict_and_tables_show_value_error_reference_and_deviation():
    results = invented()
    row = results.verdict[results.verdict["property"] == "heat_capacity"].iloc[0]
    page = Page(html(results))
    assert "✓ Agrees with the reference" in page.text
    assert "Of 18 values, 18 agree." in page.text
    assert f"{row['value']:.3f}(12)" in page.text
    assert f"{row['reference_value']:.4f}(20)" in page.text
    assert f"{row['z']:+.1f}".replace("-", "−") in page.text
    median, largest = results.verdict["z"].abs().median(), results.verdict["z"].abs().max()
    assert f"The median deviation is {median:.1f} combined standard errors" in page.text
    assert f"the largest {largest:.1f}: pressure at T = 1.5" in page.text


@pytest.mark.parametrize(("overall", "word"), [("disagrees", "✗ Disagrees"), ("undecided", "? Undecided")])
def test_overall_row_decides(overall, word):
    results = invented()
    row = pd.DataFrame([{"reference": "thol-2016", "outcome": overall}])
    verdict = pd.concat([results.verdict, row], ignore_index=True)
    page = Page(html(replace(results, verdict=verdict)))
    assert word in page.text
    assert "Of 18 values, 18 agree." in page.text


def test_overall_row_outweighs_single_rows():
    results = invented()
    verdict = results.verdict.copy()
    verdict.loc[3, "outcome"] = "disagrees"
    row = pd.DataFrame([{"reference": "thol-2016", "outcome": "agrees"}])
    assert outcome(replace(results, verdict=pd.concat([verdict, row], ignore_index=True))) == "agrees"


def test_without_overall_row_the_worst_row_decides():
    results = invented()
    verdict = results.verdict.copy()
    assert outcome(results) == "agrees"
    verdict.loc[3, "outcome"] = "undecided"
    assert outcome(replace(results, verdict=verdict)) == "undecided"
    verdict.loc[4, "outcome"] = "disagrees"
    assert outcome(replace(results, verdict=verdict)) == "disagrees"


def test_refused_stretch_breaks_the_curve_and_is_named():
    results = invented()
    curve = results.curve.copy()
    thin = curve["temperature"].between(1.2, 1.28)
    curve.loc[thin, ["value", "standard_error"]] = np.nan
    curve.loc[thin, ["trust", "reason"]] = ["no", "31 effective samples, 50 are needed"]
    cut = replace(results, curve=curve)
    figure = Page(html(cut)).figure("Heat capacity over")
    line = next(mark for mark in figure if mark.get("class") == "line measured")
    assert line.get("d").count("M") == 2
    assert len([mark for mark in figure if mark.get("class") == "span"]) == 2, "the stretch and its legend"
    assert doubts(cut) == [
        "No reweighted value at density 0.8 σ⁻³ between T = 1.2 and 1.28 ε/k_B. "
        "Reason: 31 effective samples, 50 are needed."
    ]


def test_study_whose_whole_curve_is_refused():
    results = invented()
    curve = results.curve.assign(value=np.nan, standard_error=np.nan, trust="no", reason="no overlap")
    page = Page(html(replace(results, curve=curve)))
    assert "No reweighted value at density 0.8 σ -3 . Reason: no overlap." in page.text.replace("−", "-")
    assert not [mark for mark in page.figure("Pressure over") if mark.get("class") == "line measured"]
    assert len(points(page.figure("Pressure over"))) == 6


def test_study_without_reference():
    results = invented()
    page = Page(html(replace(results, verdict=empty("verdict"), reference_curve=empty("reference_curve"))))
    assert "Not compared with a reference" in page.text
    assert "thol-2016" not in paragraph(replace(results, verdict=empty("verdict")))
    assert not [figure for figure in page.figures if figure.findtext("title").startswith("Deviation")]


def test_study_that_has_rung_values_only():
    names = ("curve", "structure", "structure_factor", "verdict", "histograms", "ledger", "overlap", "reference_curve")
    page = Page(html(replace(invented(scheme="velocity-verlet"), **{name: empty(name) for name in names})))
    assert [figure.findtext("title").split(",")[0] for figure in page.figures] == [
        "Heat capacity over temperature",
        "Pressure over temperature",
        "Residual energy over temperature",
    ]
    assert "rungs of constant energy are not reweighted" in page.text


def test_states_without_neighbours_come_as_one_set():
    page = Page(html(invented(densities=(0.6, 0.7, 0.8), rungs=1)))
    assert page.text.count("Single states") == 2, "contents and heading"
    assert page.figures[0].findtext("title") == "Conserved quantity over time, single states"
    assert [figure.findtext("title").split(",")[1] for figure in page.figures[1:]] == [
        f" density {density}" for density in (0.6, 0.7, 0.8)
    ] * 2


def test_unknown_ideal_part_leaves_the_residual_heat_capacity():
    results = invented()
    rows = results.properties[results.properties["property"] != "heat_capacity"]
    page = Page(html(replace(results, properties=rows, verdict=empty("verdict"))))
    assert len(points(page.figure("Residual heat capacity over"))) == 6
    assert "Asked: residual heat capacity and pressure" in page.text


def test_hostile_texts_are_shown_not_obeyed():
    nasty = '</title><script>alert("1")</script>&<b onload=x>'
    results = invented()
    rows = results.properties.assign(reason=nasty, trust="caution")
    page = Page(
        html(
            replace(
                results,
                title=nasty,
                properties=rows,
                verdict=results.verdict.assign(reference=nasty),
                reference_curve=results.reference_curve.assign(reference=nasty),
                caveats=(nasty,),
                provenance={nasty: nasty},
                study_toml=f"# {nasty}\n{results.study_toml}",
                summary=results.summary.assign(note=nasty),
            )
        )
    )
    assert not {"script", "b"} & set(page.tags)
    assert page.text.count('alert("1")') >= 8
    assert page.tags.count("title") == 1 + len(page.figures)


def test_forty_rungs_on_three_isochores_stay_small():
    results = with_surface(invented(densities=(0.6, 0.7, 0.8), rungs=14, samples=20_000))
    source = html(results)
    assert len(source.encode()) < 5e6
    page = Page(source)
    assert len(page.figures) == 3 * (4 + 2 + 14 + 14) + 4
    drawn = [mark.get("d").count(",") for figure in page.figures for mark in figure if mark.get("d")]
    assert max(drawn) <= 2 * 402


def test_ledger_keeps_extremes_and_names_the_farthest_repeat():
    results = invented(samples=20_000)
    rows = results.ledger.reset_index(drop=True)
    rows.loc[7777, "drift"] = 1.0
    ends = rows.groupby(["temperature", "repeat"])["drift"].last()
    temperature, repeat = ends.abs().idxmax()
    figure = Page(html(replace(results, ledger=rows))).figure("Conserved quantity")
    texts = ["".join(text.itertext()) for text in figure.iter("text")]
    assert f"largest change: T = {temperature:g} ε/kB\u200b, repeat {repeat}" in texts
    height = [float(y) for mark in figure if mark.get("d") for y in re.findall(r",(-?[\d.]+)", mark.get("d"))]
    assert min(height) < 0.3 * max(height), "the one high sample sets the scale"


@pytest.mark.parametrize(
    ("scheme", "authors", "absent"),
    [
        ("baoab", "Leimkuhler", "Bussi"),
        ("obabo", "Bussi", "Leimkuhler"),
        ("metropolised", "Horowitz", "Leimkuhler"),
        ("velocity-verlet", "Lebowitz", "Leimkuhler"),
    ],
)
def test_methods_and_citations_follow_the_scheme(scheme, authors, absent):
    results = invented(scheme=scheme)
    text, works = paragraph(results), citations(results)
    assert any(authors in work for work in works)
    assert not any(absent in work for work in works)
    assert any("Thol" in work and "(2016)" in work for work in works)
    assert [int(number) for number in re.findall(r"\[(\d+)\]", text)] == list(range(1, len(works) + 1))
    assert "[baoab]" not in text
    assert ("friction" in text) == (scheme != "velocity-verlet")
    assert ("single precision" in text) == (scheme in ("baoab", "obabo"))


@pytest.mark.parametrize(
    ("truncation", "words"),
    [
        ("corrected", "taken as homogeneous"),
        ("plain", "without correction"),
        ("shifted", "shifted to zero at 3 σ"),
        ("force-shifted", "Energy and force are shifted"),
    ],
)
def test_standing_caveats_are_named(truncation, words):
    text = Page(html(invented(truncation=truncation))).text
    for caveat in (words, "pressure equipment", "licensed practice", "500 particles", "classically", "Two repeats"):
        assert caveat in text


def test_provenance_holds_the_whole_study():
    results = invented()
    text = Page(html(results)).text
    assert " ".join(results.study_toml.split()) in text
    for key, value in results.provenance.items():
        assert f"{key} {value}" in text


def test_table_without_a_column_is_refused():
    with pytest.raises(ValueError, match="table 'overlap' lacks the columns overlap"):
        replace(invented(), overlap=empty("overlap").drop(columns="overlap"))


def doubted(results, *cases):
    """The results with trust and reason of the headlines of a property at one temperature, or at all."""
    rows = results.properties.copy()
    for name, temperature, trust, reason in cases:
        own = (rows["property"] == name) & rows["headline"]
        rows.loc[own & (rows["temperature"] == temperature if temperature else True), ["trust", "reason"]] = [
            trust,
            reason,
        ]
    return replace(results, properties=rows)


def test_doubts_of_one_cause_are_told_once():
    results = invented()
    temperatures = sorted(results.properties["temperature"].unique())
    cases = [
        (name, temperature, "caution", f"only about {40 + 3 * k} effective samples")
        for name in ("heat_capacity", "residual_heat_capacity", "bulk_modulus")
        for k, temperature in enumerate(temperatures)
    ]
    last = ("thermal_pressure", temperatures[-1], "caution", "only about 61 effective samples")
    (told,) = doubts(doubted(results, *cases, last))
    assert told == (
        "With caution: heat capacity and isothermal bulk modulus at 6 states, T = 0.9 to 1.5 ε/k_B; thermal pressure "
        "coefficient at T = 1.5 ε/k_B, density 0.8 σ⁻³. Reason: only about 40 to 61 effective samples."
    )


def test_doubts_of_many_causes_stay_a_handful():
    results = invented()
    temperatures = sorted(results.properties["temperature"].unique())
    cases = [
        ("pressure", temperature, trust, f"cause {k}")
        for k, temperature in enumerate(temperatures)
        for trust in [("no", "caution")[k % 2]]
    ]
    curve = results.curve.copy()
    refused = (curve["temperature"] * 100).round().astype(int) % 4 == 0
    curve.loc[refused, ["value", "trust", "reason"]] = [np.nan, "no", "too few samples"]
    told = doubts(replace(doubted(results, *cases), curve=curve))
    assert [each.split(" ")[0] for each in told] == ["Do", "Do", "With", "With", "No", "No"]
    assert told[-1].endswith("Reason: too few samples. curve.csv lists more such stretches.")
    more = doubts(doubted(results, *cases, *((name, 0.9, "no", name) for name in ("sound_speed", "residual_energy"))))
    assert more[1].endswith(". properties.csv lists 3 more values for other reasons.")
    assert "more values" not in more[0]


def with_verdict(results, where, **cells):
    verdict = results.verdict.copy()
    verdict.loc[where(verdict), list(cells)] = list(cells.values())
    return replace(results, verdict=verdict)


def test_tolerances_and_causes_of_what_is_undecided_are_told():
    results = invented()
    study = f'{results.study_toml}tolerance = {{ pressure = 0.03, heat_capacity = "2 %" }}\n'
    results = with_verdict(replace(results, study_toml=study), lambda v: v["property"] == "pressure", tolerance=0.5)
    wide = {"outcome": "undecided", "reason": "the error bar is too wide"}
    silent = {"outcome": "undecided", "reason": "the state is outside the range"}
    results = with_verdict(results, lambda v: v["property"] == "heat_capacity", **wide)
    results = with_verdict(results, lambda v: (v["property"] == "pressure") & (v["temperature"] == 1.5), **silent)
    text = Page(html(results)).text.replace("σ 3", "σ³").replace("k B", "k_B")
    assert "with a tolerance of 0.5 ε/σ³ for pressure and 2 % for heat capacity; such a value agrees only" in text
    assert "Undecided: heat capacity at 6 states, T = 0.9 to 1.5 ε/k_B . Reason: the error bar is too wide." in text
    assert "Undecided: pressure at T = 1.5 ε/k_B , density" in text
    assert "Reason: the state is outside the range." in text
    assert "Undecided" not in Page(html(invented())).text


def test_values_that_say_the_same_are_counted_once():
    results = invented()
    twin = results.verdict[results.verdict["property"] == "heat_capacity"].assign(property="residual_heat_capacity")
    both = replace(results, verdict=pd.concat([results.verdict, twin], ignore_index=True))
    assert "Of 18 independent values, 18 agree." in Page(html(both)).text
    differing = with_verdict(both, lambda v: v["property"] == "residual_heat_capacity", outcome="disagrees")
    assert "Of 24 values, 18 agree, 6 disagree." in Page(html(differing)).text


def test_residual_heat_capacity_is_not_tabled_beside_the_full_one():
    results = invented()
    page = Page(html(results))
    assert not re.search("Further properties[^|]*c v,res", page.text.split("Comparison")[0])
    assert "c v holds the ideal part of 1.5 k B a particle; c v,res is c v less that." in page.text
    assert "Further properties" in page.text, "the speed of sound"
    rows = results.properties[results.properties["property"] != "sound_speed"]
    assert "Further properties" not in Page(html(replace(results, properties=rows))).text


def test_comparisons_of_further_properties_are_folded_away():
    results = invented()
    further = results.verdict[results.verdict["property"] == "heat_capacity"].assign(property="sound_speed")
    both = replace(results, verdict=pd.concat([results.verdict, further], ignore_index=True))
    before, folded = html(both).split("Comparison of further properties", 1)
    folded = folded.split("</details>", 1)[0]
    assert folded.count("<caption>Speed of sound") == 1
    assert "<caption>Speed of sound" not in before
    assert "<caption>Heat capacity" in before
    assert "<caption>Heat capacity" not in folded
    assert "Comparison of further properties" not in html(results)


def test_compared_values_with_caution_are_marked_and_explained():
    told = "Values marked † count like any other, though with caution"
    results = doubted(invented(), ("pressure", 0.9, "caution", "only about 60 effective samples"))
    page = Page(html(results))
    row = results.verdict[(results.verdict["property"] == "pressure") & (results.verdict["temperature"] == 0.9)]
    assert page.text.count(f"{row['value'].iloc[0]:.3f}(11)†") == 2, "table of values, comparison"
    assert told in page.text
    assert told not in Page(html(invented())).text


def test_temperatures_set_stand_beside_those_measured():
    results = invented(scheme="velocity-verlet")
    states = results.properties[["temperature", "density"]].drop_duplicates()
    assert "T as set" not in Page(html(results)).text
    page = Page(html(replace(results, summary=states.assign(set_temperature=states["temperature"] + 0.123))))
    assert "T as set" in page.text
    for temperature in states["temperature"]:
        assert f"{temperature:g} {temperature + 0.123:.6g} " in page.text


def test_methods_say_how_constant_energy_gives_its_derivatives():
    results = invented(scheme="velocity-verlet")
    assert "Thermal pressure coefficient and isothermal bulk modulus are from exact derivatives" in paragraph(results)
    assert any("Pearson" in work for work in citations(results))
    assert "phase volume" not in paragraph(invented())


def test_states_of_one_density_are_told_together():
    results = invented()
    cases = [("pressure", temperature, "no", "near 1.25 epsilon/k_B") for temperature in (0.9, 1.5)]
    assert doubts(doubted(results, *cases)) == [
        "Do not use: pressure at T = 0.9 and 1.5 ε/k_B, density 0.8 σ⁻³. Reason: near 1.25 ε/k_B."
    ]


TITLES = ("Heat capacity over temperature and", "Pressure over temperature and")


def shades(figure):
    return [mark for mark in figure if mark.get("class", "").startswith("shade") and mark.get("d")]


def test_maps_between_isochores_mark_the_sampled_states():
    page = Page(html(with_surface(invented(densities=(0.6, 0.7, 0.8)))))
    for title in TITLES:
        for figure in (page.figure(title), page.figure(f"Standard error of {title.lower()}")):
            assert len(points(figure, "ring")) == 3 * 6
            assert len(shades(figure)) >= 4
            assert not points(figure, "dot")
        captions = [mark for mark in page.figure(title) if mark.get("class") == "axis-label"]
        assert {"".join(c.itertext()).split(",")[0] for c in captions} >= {"Temperature T", "Density ρ"}


def test_section_between_isochores_says_what_it_rests_on_and_how_it_was_held_against_rungs():
    """Root mean square of 0.3, -2.6 and 1.1: 1.64."""
    results = with_surface(invented(densities=(0.6, 0.7, 0.8)))
    text = Page(html(results)).text
    assert text.count("Between the isochores") == 3, "contents, heading, and its first words"
    assert "the ideal gas and the second virial coefficient are its exact limits" in text
    assert "T from 0.9 to 1.5" in text
    assert "ρ from 0.6 to 0.8" in text
    assert "Up to the lowest density sampled, 0.6" in text
    assert (
        "3 values deviate by 1.64 combined standard errors (root mean square), by 2.6 at most: pressure at T = 1"
        in text
    )
    assert "With caution at" not in text
    doubtful = with_surface(invented(densities=(0.6, 0.7, 0.8)), trust="caution")
    page = Page(html(doubtful))
    assert "With caution at 117 of 117 points of the grid: all properties. Reason: liquid and vapour" in page.text
    assert len(points(page.figure(TITLES[0]), "dot")) == 117
    assert "Between the isochores" not in Page(html(invented(densities=(0.6, 0.7, 0.8)))).text


def test_maps_are_blank_where_the_surface_refuses_or_must_not_be_trusted():
    results = invented(densities=(0.6, 0.7, 0.8))
    cut = with_surface(results, refused=lambda t, rho: t < 1.1)
    whole, part = (
        [
            float(x)
            for mark in shades(Page(html(each)).figure(TITLES[1]))
            for x in re.findall(r"(-?[\d.]+),", mark.get("d"))
        ]
        for each in (with_surface(results), cut)
    )
    assert min(part) > min(whole) + 50
    assert max(part) == max(whole)
    assert not shades(Page(html(with_surface(results, trust="no"))).figure(TITLES[0]))


def waves(results, shift, error=0.2):
    """The results with bulk moduli from long waves, off by a shift in combined errors; 0.2 is that of the others."""
    own = results.properties[
        (results.properties["property"] == "bulk_modulus") & (results.properties["method"] == "fluctuation")
    ]
    moved = own["value"] + shift * np.hypot(error, own["standard_error"])
    more = own.assign(method="structure", value=moved, standard_error=error)
    return replace(results, properties=pd.concat([results.properties, more], ignore_index=True))


def test_long_waves_are_held_against_fluctuations():
    shift = np.array([0.5, -1.0, 0.0, 2.7, 1.0, -0.2])
    results = waves(invented(), shift)
    page = Page(html(results))
    warmest = sorted(results.properties["temperature"].unique())[3]
    assert "agrees within two combined standard errors at 5 of 6 states" in page.text
    assert f"the largest deviation is 2.7, at T = {warmest:g}" in page.text
    figure = page.figure("Structure factor at T = 0.9")
    assert len(points(figure, "ring")) == len(points(figure, "cross")) == 1
    silent = Page(html(waves(invented(), shift, error=np.nan)))
    assert "combined standard errors at" not in silent.text
    assert not points(silent.figure("Structure factor at T = 0.9"), "ring")


@pytest.mark.parametrize("factor", [1.0, 41.9])
def test_limit_of_long_waves_is_that_of_the_bulk_modulus_in_any_unit(factor):
    """rho T/B_T at T 0.9, density 0.8 and B_T = 25 * 0.8^3 + 4 * 0.9 = 16.4: 0.0439; P and Z have noise of 1 %."""
    results = waves(invented(), 0.0)
    scaled = results.properties.copy()
    scaled.loc[scaled["unit"] == "epsilon/sigma^3", ["value", "standard_error"]] *= factor
    figure = Page(html(replace(results, properties=scaled))).figure("Structure factor at T = 0.9")
    ticks = [mark for mark in figure if mark.get("class") == "tick" and mark.get("text-anchor") == "end"]
    values, pixels = ([float(get(mark)) for mark in ticks] for get in (lambda m: m.text, lambda m: m.get("y")))
    per_pixel = (values[-1] - values[0]) / (pixels[0] - pixels[-1])
    (ring,) = points(figure, "ring")
    shown = values[0] + (pixels[0] - 4.0 - float(ring.get("cy"))) * per_pixel
    assert shown == pytest.approx(0.9 * 0.8 / 16.4, abs=0.1 * per_pixel + 0.002)


def inserted(results, trusts):
    """The results with a chemical potential by test insertion at every state, trusted as told."""
    own = results.properties[(results.properties["property"] == "pressure") & results.properties["headline"]]
    more = own.assign(property="residual_chemical_potential", method="insertion", trust=trusts, unit="epsilon")
    change = own.assign(property="residual_helmholtz_change", unit="k_B")
    return replace(results, properties=pd.concat([results.properties, more, change.iloc[1:]], ignore_index=True))


def test_absolute_values_come_in_a_table_of_their_own_with_their_trust():
    results = inserted(invented(), ["ok", "ok", "ok", "caution", "caution", "no"])
    text = Page(html(results)).text
    assert "Free energy and entropy T ε/k B μ res ε Δ(a res /T) k B" in text
    told = "of its 6 values of μ res 3 can be trusted, 2 with caution, 1 cannot."
    assert told in text
    assert "Changes along the ladder count from its coldest rung" in text
    assert "surface between" not in text
    rows = results.properties.copy()
    rows.loc[(rows["method"] == "insertion") & (rows["trust"] == "no"), "headline"] = False
    laid = rows[rows["method"] == "insertion"].tail(1).assign(method="surface", headline=True, trust="ok")
    text = Page(html(replace(results, properties=pd.concat([rows, laid], ignore_index=True)))).text
    assert told in text
    assert "At 1 state the μ res shown is that of the surface between the isochores" in text
    assert "Free energy and entropy" not in Page(html(invented())).text
    assert "test insertion" not in Page(html(invented())).text


def test_methods_name_what_was_used_and_nothing_else():
    results = invented(densities=(0.6, 0.7, 0.8))
    plain = replace(results, structure=results.structure.assign(g_forced=np.nan))
    sources = {
        "Widom": inserted(plain, "ok"),
        "Borgis": results,
        "Jay": waves(plain, 0.0),
        "Rasmussen": with_surface(plain),
        "Cressie": with_surface(plain),
    }
    for author, used in sources.items():
        assert any(author in work for work in citations(used)), author
        assert not any(author in work for work in citations(plain)), author
        numbers = [int(number) for number in re.findall(r"\[(\d+)\]", paragraph(used))]
        assert sorted(numbers) == list(range(1, len(citations(used)) + 1))


def test_reach_of_reweighting_is_told_where_anything_was_reweighted():
    told = "Of 500 pairs of short ladders and direct runs"
    results = invented()
    assert told in Page(html(results)).text
    own = results.properties[results.properties["method"] != "reweighted"].assign(headline=True)
    assert told not in Page(html(replace(results, properties=own, curve=empty("curve")))).text


@pytest.mark.parametrize(
    ("text", "shown"),
    [
        ("at T = 1.2 ε/k_B or 95 %", "at T\u00a0=\u00a01.2\u00a0ε/k<sub>B</sub> or 95\u00a0%"),
        ("P -0.067(55) to (-1), thol-2016, 1e-3", "P −0.067(55) to (−1), thol-2016, 1e-3"),
        ("`canonry run --step-bias` <tells>", "<code>canonry run --step-bias</code> &lt;tells&gt;"),
    ],
)
def test_sentences_keep_quantities_together_and_set_commands(text, shown):
    assert prose(text) == shown


def test_comparisons_come_in_the_order_of_the_tables_and_heat_capacity_once():
    results = invented()
    twin = results.verdict[results.verdict["property"] == "heat_capacity"].assign(property="residual_heat_capacity")
    mixed = pd.concat([twin, results.verdict.iloc[::-1]], ignore_index=True)
    titles = re.findall(r"<caption>(.*?)</caption>", html(replace(results, verdict=mixed)))
    assert titles == ["Heat capacity", "Pressure", "Residual energy"]
    alone = mixed[mixed["property"] != "heat_capacity"]
    assert "<caption>Residual heat capacity" in html(replace(results, verdict=alone))
