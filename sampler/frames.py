"""Stored frames evaluated again: forces, curvature, and energies in a slightly larger and smaller volume."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from sampler.fluid import Fluid, State, Totals
from sampler.forces import evaluate, evaluate_with_laplacian
from sampler.series import FrameSums

__all__ = ["reevaluate", "totals_at"]

Floats = npt.NDArray[np.float64]


def reevaluate(fluid: Fluid, frames: Floats, *, state: State, change: float = 1e-4) -> FrameSums:
    """Sums of frames, (m, particles, 3), of a state. Raises BadRequest if the cutoff is beyond half the smaller box."""
    found = [evaluate_with_laplacian(fluid, frame, box=state.box) for frame in frames]
    forces = np.array([(force**2).sum() for force, _ in found])
    curvatures = np.array([sums[4] for _, sums in found])
    energy, stretched, squeezed = (
        totals_at(fluid, frames, state=state, density=state.density / (1.0 + part * change)).sampled_energy
        for part in (0.0, 1.0, -1.0)
    )
    return FrameSums(forces, curvatures, energy, stretched, squeezed, change)


def totals_at(fluid: Fluid, frames: Floats, *, state: State, density: float) -> Totals:
    """Energies and virials of frames of a state, scaled to the box of another density.

    Raises BadRequest if the cutoff is beyond half that box.
    """
    there = State(state.temperature, density, state.particles)
    edge = there.box / state.box
    sums = np.array([evaluate(fluid, edge * frame, box=there.box)[1] for frame in frames]).reshape(-1, 4)
    return fluid.totals(sums, there)
