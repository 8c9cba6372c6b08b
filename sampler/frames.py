"""Stored frames evaluated again: forces, curvature, and energies in a slightly larger and smaller volume."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from sampler.fluid import Fluid, State
from sampler.forces import evaluate, evaluate_with_laplacian
from sampler.series import FrameSums

__all__ = ["reevaluate"]

Floats = npt.NDArray[np.float64]


def reevaluate(fluid: Fluid, frames: Floats, *, state: State, change: float = 1e-4) -> FrameSums:
    """Sums of frames, (m, particles, 3), of a state. Raises BadRequest if the cutoff is beyond half the smaller box."""
    found = [evaluate_with_laplacian(fluid, frame, box=state.box) for frame in frames]
    forces = np.array([(force**2).sum() for force, _ in found])
    curvatures = np.array([sums[4] for _, sums in found])
    energy, stretched, squeezed = (_energies(fluid, frames, state, 1.0 + part * change) for part in (0.0, 1.0, -1.0))
    return FrameSums(forces, curvatures, energy, stretched, squeezed, change)


def _energies(fluid: Fluid, frames: Floats, state: State, volume: float) -> Floats:
    """U_dyn of frames, (m,), whose volume is changed by a factor."""
    edge = volume ** (1.0 / 3.0)
    there = State(state.temperature, state.density / volume, state.particles)
    sums = np.array([evaluate(fluid, edge * frame, box=edge * state.box)[1] for frame in frames]).reshape(-1, 4)
    return fluid.totals(sums, there).sampled_energy
