"""An estimate: a value with the influence of every sample on it, and arithmetic that keeps correlations."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

__all__ = ["Chain", "Estimate", "combine", "mean"]

Floats = npt.NDArray[np.float64]
Chain = tuple[float, float, int, int]  # temperature, density, particles, repeat
