"""Values with errors as people read them, and how units and symbols are set."""

import math
import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from canonry.notation import as_html, name_of, symbol_of, unit_text
from canonry.numbers import plain, with_error
from canonry.units import PROPERTIES


@pytest.mark.parametrize(
    ("value", "error", "text"),
    [
        (1.23451, 0.00672, "1.2345(67)"),
        (-6.12345, 0.0996, "-6.12(10)"),
        (0.999996, 0.00001, "0.999996(10)"),
        (12.31, 4.52, "12.3(4.5)"),
        (1.0, 9.97, "1(10)"),
        (1234.6, 23.0, "1235(23)"),
        (1236.0, 234.0, "1240(230)"),
        (0.02, 3.0, "0.0(3.0)"),
        (1.2345e-7, 5.6e-9, "1.235(56)e-07"),
        (2.5e8, 1.2e6, "2.500(12)e+08"),
        (1.5, 0.0, "1.5"),
        (1.2345, math.nan, "1.23(?)"),
        (math.nan, 0.1, "-"),
        (math.inf, 0.1, "-"),
    ],
)
def test_known_numbers(value, error, text):
    assert with_error(value, error) == text


@given(value=st.floats(-1e9, 1e9), error=st.floats(1e-9, 1e6))
def test_text_reads_back_within_rounding(value, error):
    match = re.fullmatch(r"(-?[\d.]+)\(([\d.]+)\)(?:e([+-]\d+))?", with_error(value, error))
    power = 10.0 ** int(match[3] or 0)
    decimals = len(match[1].partition(".")[2])
    unit = 1.0 if "." in match[2] else 10.0**-decimals
    assert float(match[2]) * unit * power == pytest.approx(error, rel=0.051)
    assert float(match[1]) * power == pytest.approx(value, abs=0.051 * error + 1e-12 * abs(value))
    assert len(match[2].replace(".", "").rstrip("0").lstrip("0")) <= 2


def test_plain_values():
    assert [plain(0.8), plain(1.0), plain(1.25e-7), plain(1.23456789, 3), plain(math.nan)] == [
        "0.8",
        "1",
        "1.25e-07",
        "1.23",
        "-",
    ]


@pytest.mark.parametrize(
    ("unit", "text"),
    [
        ("epsilon/sigma^3", "ε/σ³"),
        ("sigma^-3", "σ⁻³"),
        ("kg/m3", "kg/m³"),
        ("sigma (m/epsilon)^(1/2)", "σ √(m/ε)"),
        ("J/(mol K)", "J/(mol K)"),
        ("10.2 angstrom", "10.2 Å"),
        ("1/K", "1/K"),
        ("1", ""),
    ],
)
def test_units_as_printed(unit, text):
    assert unit_text(unit) == text


def test_symbols_are_set_low_and_powers_high_and_file_names_left_alone():
    assert as_html("c_v in k_B/σ³ & γ_V") == "c<sub>v</sub> in k<sub>B</sub>/σ<sup>3</sup> &amp; γ<sub>V</sub>"
    assert as_html("my_values_T.csv c_value") == "my_values_T.csv c_value"


def test_every_property_has_a_name_and_a_symbol_of_its_own():
    assert all(name_of(name) and symbol_of(name) != name for name in PROPERTIES)
    assert len({symbol_of(name) for name in PROPERTIES}) == len(PROPERTIES)
