"""Figures: ticks, marks, breaks and escapes."""

import re
from xml.etree import ElementTree

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from canonry.axes import round_ticks
from canonry.figures import Area, Axis, Band, Figure, Line, Map, Note, Points, Span, draw

TEMPERATURE, PRESSURE = Axis("Temperature T", "K"), Axis("Pressure P", "MPa")


def drawn(*marks, x=TEMPERATURE, y=PRESSURE, title="Title"):
    return ElementTree.fromstring(draw(Figure(title, "Description", x, y, marks)))


def kinds(svg, kind):
    return [mark for mark in svg.iter() if kind in mark.get("class", "").split()]


def text(mark):
    return "".join(mark.itertext())


@given(
    low=st.floats(-1e6, 1e6, allow_nan=False),
    size=st.floats(1e-6, 1e6),
    at_most=st.integers(2, 10),
)
def test_ticks_are_round_inside_and_not_too_many(low, size, at_most):
    high = low + size
    ticks = round_ticks(low, high, at_most)
    slack = 1e-8 * max(abs(low), abs(high), size)
    assert 1 <= len(ticks) <= at_most
    assert low - slack <= ticks[0]
    assert ticks[-1] <= high + slack
    if len(ticks) > 1:
        step = ticks[1] - ticks[0]
        assert np.allclose(np.diff(ticks), step, rtol=1e-6, atol=slack)


def test_ticks_known_cases():
    assert round_ticks(0.0, 10.0, 6) == [0.0, 2.0, 4.0, 6.0, 8.0, 10.0]
    assert round_ticks(0.87, 1.53, 6) == pytest.approx([1.0, 1.2, 1.4])
    assert round_ticks(-0.1, 1.1, 5) == pytest.approx([0.0, 0.25, 0.5, 0.75, 1.0])


def test_points_stand_where_their_values_are():
    x, y = np.array([1.0, 2.0, 4.0]), np.array([10.0, 30.0, 20.0])
    svg = drawn(Points(x, y, np.array([1.0, 2.0, 0.0]), "rungs"))
    circles = kinds(svg, "point")
    across, down = (np.array([float(circle.get(key)) for circle in circles]) for key in ("cx", "cy"))
    assert (across[2] - across[0]) / (across[1] - across[0]) == pytest.approx(3.0, abs=0.01)
    assert (down[2] - down[0]) / (down[1] - down[0]) == pytest.approx(0.5, abs=0.01)
    assert down[1] < down[2] < down[0], "upwards is larger"
    assert 50 < across.min() < 80
    assert 400 < across.max() < 430
    assert 40 < down.min() < down.max() < 260
    bars = [[float(v) for v in re.findall(r"-?[\d.]+", bar.get("d"))] for bar in kinds(svg, "bar")]
    assert len(bars) == 2, "no bar without error"
    per_unit = (down[0] - down[1]) / 20.0
    assert bars[1][1] - bars[1][2] == pytest.approx(4.0 * per_unit, abs=0.3)


def test_ticks_stand_where_their_labels_say():
    x = np.linspace(0.0, 5.0, 6)
    svg = drawn(Points(x, x**2))
    at = {float(text(tick)): float(tick.get("x")) for tick in kinds(svg, "tick") if tick.get("text-anchor") == "middle"}
    circles = {k: float(circle.get("cx")) for k, circle in enumerate(kinds(svg, "point"))}
    assert len(at) > 3
    assert all(circles[value] == pytest.approx(pixels, abs=0.2) for value, pixels in at.items())


def test_points_without_value_are_left_out():
    svg = drawn(Points(np.array([1.0, 2.0, 3.0]), np.array([1.0, np.nan, 2.0]), np.array([0.1, 0.1, np.nan])))
    assert len(kinds(svg, "point")) == 2
    assert len(kinds(svg, "bar")) == 1


def test_line_and_band_break_where_there_is_no_value():
    x = np.arange(7.0)
    y = np.array([0.0, 1.0, np.nan, 2.0, 3.0, np.nan, 4.0])
    svg = drawn(Line(x, y), Band(x, y - 1.0, y + 1.0))
    assert kinds(svg, "line")[0].get("d").count("M") == 3
    assert kinds(svg, "band")[0].get("d").count("Z") == 3


@pytest.mark.parametrize("n", [400, 401, 50_000])
def test_long_lines_are_thinned_and_keep_their_outline(n):
    x = np.arange(float(n))
    y = np.sin(x / 7.0)
    y[n // 3], y[n // 2] = 9.0, -9.0
    path = kinds(drawn(Line(x, y)), "line")[0].get("d")
    heights = [float(v) for v in re.findall(r",(-?[\d.]+)", path)]
    assert len(heights) <= 402
    full = [
        float(v)
        for v in re.findall(r",(-?[\d.]+)", kinds(drawn(Line(x[: n // 2 + 1], y[: n // 2 + 1])), "line")[0].get("d"))
    ]
    assert (min(heights), max(heights)) == (min(full), max(full))


def test_thinned_line_keeps_its_gap():
    x = np.arange(5000.0)
    y = np.cos(x / 900.0)
    y[2000:2600] = np.nan
    assert kinds(drawn(Line(x, y)), "line")[0].get("d").count("M") == 2


def test_labels_carry_units_powers_and_indices():
    x = np.array([0.0, 1.0])
    svg = drawn(Line(x, 2e-5 * x), y=Axis("Change of U_dyn", "k_B"))
    labels = [text(label).replace("\u200b", "") for label in kinds(svg, "axis-label")]
    assert labels == ["Change of Udyn, 10⁻⁵ kB", "Temperature T, K"]
    plain = drawn(Line(x, x), y=Axis("Compressibility factor Z"))
    assert text(kinds(plain, "axis-label")[0]) == "Compressibility factor Z"


def test_axis_reaches_what_it_must():
    x = np.array([0.0, 1.0])
    svg = drawn(Points(x, 0.1 * x), y=Axis("z", reach=(-4.0, 4.0)))
    ticks = [text(tick) for tick in kinds(svg, "tick") if tick.get("text-anchor") == "end"]
    assert ticks[0].startswith("−")
    assert len(ticks) >= 3


def test_legend_names_each_labelled_mark_once_and_wraps():
    x = np.array([0.0, 1.0])
    names = [f"a rather long name, number {k}" for k in range(5)]
    svg = drawn(*(Line(x, x + k, name, dash="2 2") for k, name in enumerate(names)), Line(x, x - 1.0))
    entries = kinds(svg, "legend")
    assert [text(entry) for entry in entries] == names
    assert len({entry.get("y") for entry in entries}) > 1
    assert all(float(entry.get("x")) + 6.9 * len(text(entry)) <= 440 for entry in entries)


def test_every_kind_of_mark_is_drawn_and_hostile_texts_are_escaped():
    x, nasty = np.array([0.0, 1.0, 2.0]), '<script x="1">&</script>'
    svg = drawn(
        Points(x, x, None, nasty, "ring"),
        Points(x, x, None, nasty, "cross"),
        Area(x, x),
        Span(0.5, 1.0, nasty),
        Note(1.0, 1.0, nasty),
        x=Axis(nasty),
        title=nasty,
    )
    assert svg.findtext("title") == nasty
    assert [text(note) for note in kinds(svg, "note")] == [nasty]
    assert not list(svg.iter("script"))
    assert len(kinds(svg, "ring")) == len(kinds(svg, "cross")) == 4, "three points and a legend"
    assert len(kinds(svg, "span")) == 2


@pytest.mark.parametrize("values", [[], [np.nan, np.nan], [3.0], [0.0], [1e-300], [2.5, 2.5]])
def test_axes_survive_empty_and_flat_data(values):
    y = np.array(values)
    svg = drawn(Line(np.arange(float(len(y))), y), Points(np.arange(float(len(y))), y))
    assert len(kinds(svg, "point")) == np.isfinite(y).sum()
    assert len(kinds(svg, "tick")) >= 4
    assert "nan" not in ElementTree.tostring(svg, encoding="unicode")


HEAT = Axis("c_v", "k_B")


def mapped(values, *marks, steps=8):
    x, y = np.linspace(1.0, 2.0, 9), np.linspace(0.6, 0.8, 5)
    return drawn(Map(x, y, values(x, y[:, None]), HEAT, steps), *marks, y=Axis("Density", "σ⁻³"))


def outline(path):
    """All corners of a path, (n, 2)."""
    return np.array([[float(v) for v in pair] for pair in re.findall(r"(-?[\d.]+),(-?[\d.]+)", path.get("d"))])


def test_map_has_a_line_and_a_tone_for_each_step_of_its_scale():
    svg = mapped(lambda x, rho: 2.0 + x + 0.0 * rho)
    steps = [float(text(tick)) for tick in kinds(svg, "tick") if tick.get("text-anchor") == "start"]
    assert steps == [3.0, 3.2, 3.4, 3.6, 3.8, 4.0]
    shown = [mark for mark in kinds(svg, "shade") if mark.get("d")]
    assert len(shown) == 7, "one below the first line"
    ticks = {float(text(t)): float(t.get("x")) for t in kinds(svg, "tick") if t.get("text-anchor") == "middle"}
    for step, level in list(zip(steps, kinds(svg, "level"), strict=True))[1:-1]:
        assert np.allclose(outline(level)[:, 0], ticks[round(step - 2.0, 9)], atol=0.11), "c_v of 3.2 lies at x = 1.2"
        assert outline(shown[1 + steps.index(step)])[:, 0].min() == pytest.approx(ticks[round(step - 2.0, 9)], abs=0.11)
    labels = {float(text(note)) for note in kinds(svg, "note")}
    assert labels >= set(steps[1:-1])
    captions = [text(label).replace("\u200b", "") for label in kinds(svg, "axis-label")]
    assert captions == ["cv, kB", "Density, σ⁻³", "Temperature T, K"]


def test_map_is_blank_where_there_is_no_value():
    whole, holed = (
        mapped(lambda x, rho, edge=edge: np.where(x + 0.0 * rho > edge, np.nan, x + rho)) for edge in (9.0, 1.5)
    )
    right = [max(outline(mark)[:, 0].max() for mark in kinds(svg, "shade") if mark.get("d")) for svg in (whole, holed)]
    left = min(outline(mark)[:, 0].min() for mark in kinds(whole, "shade") if mark.get("d"))
    assert (right[1] - left) / (right[0] - left) == pytest.approx(0.5, abs=0.01)
    empty = mapped(lambda x, rho: np.nan * (x + rho))
    assert not kinds(empty, "shade")
    assert not kinds(empty, "level")


@pytest.mark.parametrize(("steps", "across", "up", "fewest"), [(12, 5, 1, 4), (30, 5, 1, 8), (12, 14, 12, 0)])
def test_labels_of_lines_are_clear_of_points_and_of_one_another(steps, across, up, fewest):
    """At least 20 pixels between their middles, also where 30 lines are 10 pixels apart or points stand close."""
    x, y = (
        each.ravel()
        for each in np.meshgrid(np.linspace(1.0, 2.0, across), np.linspace(0.6 if up > 1 else 0.7, 0.8, up))
    )
    svg = mapped(
        lambda x, rho: (x - 1.0) * (1.0 + 0.5 * (rho - 0.6)),
        Points(x, y, None, "", "ring"),
        Points(x, y - 0.05, None, "with caution", "dot"),
        steps=steps,
    )
    places = [[float(note.get("x")), float(note.get("y")) - 4.0] for note in kinds(svg, "note")]
    notes = np.array(places).reshape(-1, 2)
    rings = np.array([[float(ring.get("cx")), float(ring.get("cy"))] for ring in kinds(svg, "ring")])
    assert len(notes) >= fewest
    between = np.linalg.norm(notes[:, None] - np.concatenate([notes, rings]), axis=2)
    assert between[between > 0.0].min(initial=np.inf) > 19.8, "rounded to a tenth of a pixel"
    assert {dot.get("r") for dot in kinds(svg, "point") if "dot" in dot.get("class")} == {"1.6"}


@pytest.mark.parametrize("value", [0.0, 2.5, 1e-300])
def test_map_of_one_value_survives(value):
    svg = mapped(lambda x, rho: value + 0.0 * (x + rho))
    assert kinds(svg, "shade")
    assert "nan" not in ElementTree.tostring(svg, encoding="unicode")
