"""The references there are, by name."""

from __future__ import annotations

import difflib

from reference.equation_of_state import Reference
from reference.equations import kolafa_nezbeda_1994, thol_2015, thol_2016
from reference.errors import UnknownReference

__all__ = ["find", "names"]

_REFERENCES = {r.name: r for r in (thol_2016.REFERENCE, thol_2015.REFERENCE, kolafa_nezbeda_1994.REFERENCE)}


def names() -> list[str]:
    """Names that `find` knows."""
    return list(_REFERENCES)


def find(name: str) -> Reference:
    """The reference of that name; raises UnknownReference, naming the nearest, when there is none."""
    if name in _REFERENCES:
        return _REFERENCES[name]
    near = difflib.get_close_matches(name, _REFERENCES, n=1, cutoff=0.4)
    hint = f"; did you mean '{near[0]}'?" if near else "."
    raise UnknownReference(f"no reference is called {name!r}{hint} There are: {', '.join(_REFERENCES)}")
