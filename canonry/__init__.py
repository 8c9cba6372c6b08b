"""Assembles: study file, command line, comparison, report."""

from __future__ import annotations

from importlib import import_module
from importlib.util import find_spec
from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from canonry.adoption import adopt
    from canonry.directory import load
    from canonry.job import compare, estimate, run
    from canonry.reweighting import reweight

__all__ = ["adopt", "compare", "estimate", "load", "reweight", "run"]

_HOMES = {
    "adopt": "canonry.adoption",
    "compare": "canonry.job",
    "estimate": "canonry.job",
    "load": "canonry.directory",
    "reweight": "canonry.reweighting",
    "run": "canonry.job",
}


def __getattr__(name: str) -> object:
    """The public functions, loaded when they are first asked for."""
    if name not in _HOMES:
        raise AttributeError(f"module 'canonry' has no attribute {name!r}")
    return getattr(import_module(_HOMES[name]), name)


def _refuse_strangers() -> None:
    """ImportError when a sampler, estimators or reference other than the one beside this package would be imported."""
    home = Path(__file__).resolve().parent.parent
    for name in ("sampler", "estimators", "reference"):
        spec = find_spec(name)
        if spec is None:
            raise ImportError(f"canonry is installed without its package {name}: install it again")
        found = Path(spec.origin or next(iter(spec.submodule_search_locations or [name]))).resolve()
        if found != home / name / "__init__.py":
            raise ImportError(f"{found} stands in the way of canonry's own package {name}: rename it or move it away")


_refuse_strangers()
