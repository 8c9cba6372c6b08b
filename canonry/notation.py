"""How properties and units are written for people: names, symbols, subscripts and powers."""

from __future__ import annotations

import re
from html import escape

__all__ = ["as_html", "as_svg", "name_of", "symbol_of", "unit_text"]

_PROPERTIES = {
    "residual_energy": ("u", "residual energy"),
    "residual_heat_capacity": ("c_v,res", "residual heat capacity"),
    "heat_capacity": ("c_v", "heat capacity"),
    "isobaric_heat_capacity": ("c_p", "isobaric heat capacity"),
    "pressure": ("P", "pressure"),
    "compressibility_factor": ("Z", "compressibility factor"),
    "thermal_pressure": ("γ_V", "thermal pressure coefficient"),
    "bulk_modulus": ("B_T", "isothermal bulk modulus"),
    "thermal_expansion": ("α", "thermal expansion"),
    "sound_speed": ("w", "speed of sound"),
    "joule_thomson": ("μ_JT", "Joule-Thomson coefficient"),
    "grueneisen": ("Γ", "Grüneisen parameter"),
    "enthalpy": ("h", "enthalpy"),
    "residual_chemical_potential": ("μ_res", "residual chemical potential"),
    "residual_helmholtz_energy": ("a_res", "residual Helmholtz energy"),
    "residual_entropy": ("s_res", "residual entropy"),
    "residual_helmholtz_change": ("Δ(a_res/T)", "change of residual Helmholtz energy over temperature"),
    "residual_entropy_change": ("Δs_res", "change of residual entropy"),
}
_GREEK = {"epsilon": "ε", "sigma": "σ", "angstrom": "Å"}
_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
_PLAIN = {power: digit for digit, power in zip("−0123456789", _SUPERSCRIPT.values(), strict=True)}
_POWER = re.compile("[⁻⁰¹²³⁴⁵⁶⁷⁸⁹]+")
_INDEX = re.compile(r"(?<![A-Za-z0-9])([A-Za-zγμ])_((?:B|T|V|v|p|JT|dyn|res)(?:,res)?)(?![A-Za-z])")


def symbol_of(name: str) -> str:
    """Symbol of a property, its index after an underscore: 'c_v'; the name itself where there is none."""
    return _PROPERTIES[name][0] if name in _PROPERTIES else name


def name_of(name: str) -> str:
    """A property in words."""
    return _PROPERTIES[name][1] if name in _PROPERTIES else name.replace("_", " ")


def unit_text(unit: str) -> str:
    """A unit label as printed, empty for a plain number: 'epsilon/sigma^3' is 'ε/σ³', 'kg/m3' is 'kg/m³'."""
    text = re.sub("|".join(_GREEK), lambda word: _GREEK[word[0]], unit)
    text = re.sub(r"\(([^()]*)\)\^\(1/2\)", r"√(\1)", text)
    text = re.sub(r"(?:\^|(?<=[a-zσε]))(-?\d+)", lambda power: power[1].translate(_SUPERSCRIPT), text)
    return "" if text == "1" else text


def as_html(text: str) -> str:
    """Text escaped for a page, symbols such as k_B and c_v with their index set low, powers set high."""
    low = _INDEX.sub(r"\1<sub>\2</sub>", escape(text))
    return _POWER.sub(lambda power: f"<sup>{power[0].translate(_PLAIN)}</sup>", low)


def as_svg(text: str) -> str:
    """The same inside an SVG text element."""
    return _INDEX.sub(r'\1<tspan dy="3" font-size="75%">\2</tspan><tspan dy="-3">&#8203;</tspan>', escape(text))
