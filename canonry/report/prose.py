"""Sentences as HTML: commands set as such, and lines that do not break within a quantity."""

from __future__ import annotations

import re

from canonry.notation import as_html

__all__ = ["prose"]

_COMMAND = re.compile("`([^`]+)`")
_MINUS = re.compile(r"(?<=[ (])-(?=\d)")
_UNBROKEN = re.compile(r"(?<=[\d)]) (?=%|[εσ]|k_B)|(?<=\b[Tρk]) (?== )|(?<=\b[Tρk]\s=) ")


def prose(text: str) -> str:
    """Text escaped, with symbols and powers as `as_html` sets them."""
    bound = _UNBROKEN.sub("\u00a0", _UNBROKEN.sub("\u00a0", _MINUS.sub("−", text)))
    return _COMMAND.sub(r"<code>\1</code>", as_html(bound))
