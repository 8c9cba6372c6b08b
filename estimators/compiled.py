"""How kernels are compiled: once per machine and version of the sources, kept in the user's cache folder."""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from functools import cache
from pathlib import Path
from typing import Any

import numba
import platformdirs

__all__ = ["cache_folder", "is_cached", "kernel"]


@cache
def cache_folder() -> Path:
    """Folder of compiled kernels; a change to any source file here starts a new one, as callers are cached too."""
    digest = hashlib.sha256(numba.__version__.encode())
    for source in sorted(Path(__file__).parent.rglob("*.py")):
        digest.update(source.read_bytes())
    return Path(platformdirs.user_cache_dir("canonry", appauthor=False)) / f"estimators-{digest.hexdigest()[:12]}"


def is_cached() -> bool:
    """Whether kernels of this version have been compiled on this machine."""
    return any(cache_folder().rglob("*.nbc"))


def kernel(function: Callable[..., Any]) -> Any:
    """Compile, cached on disk, without the interpreter lock; rounding as written, but that products may fuse."""
    elsewhere, numba.config.CACHE_DIR = numba.config.CACHE_DIR, str(cache_folder())
    try:
        return numba.njit(cache=True, nogil=True, error_model="numpy", fastmath={"contract"})(function)
    finally:
        numba.config.CACHE_DIR = elsewhere
