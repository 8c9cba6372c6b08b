"""First configurations: a disordered lattice, freed of overlaps, with velocities of the set temperature."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from sampler.errors import BadRequest
from sampler.fluid import Fluid, State
from sampler.forces import evaluate
from sampler.noise import START, Key, draw

__all__ = ["first_positions", "first_velocities"]

Floats = npt.NDArray[np.float64]

_BASES = (
    np.array([[0.0, 0.0, 0.0]]),
    np.array([[0.0, 0.0, 0.0], [0.5, 0.5, 0.5]]),
    np.array([[0.0, 0.0, 0.0], [0.0, 0.5, 0.5], [0.5, 0.0, 0.5], [0.5, 0.5, 0.0]]),
)
_DISORDER = 0.4  # displacement in units of the site spacing: enough that no crystal survives
_LONGEST_MOVE = 0.05  # sigma
_GAIN = 5e-4  # sigma^2/epsilon
_GENTLE = 200.0  # epsilon/sigma: a force that a usual time step follows
_ROUNDS = 2000


def _lattice(n: int) -> Floats:
    """n sites of the cubic lattice (one, two or four sites a cell) that has fewest to spare, unit box, (n, 3)."""
    cells = [int(np.ceil((n / len(basis)) ** (1.0 / 3.0) - 1e-9)) for basis in _BASES]
    m, basis = min(zip(cells, _BASES, strict=True), key=lambda choice: len(choice[1]) * choice[0] ** 3)
    corners = np.stack(np.meshgrid(*[np.arange(m)] * 3, indexing="ij"), axis=-1).reshape(-1, 1, 3)
    sites = ((corners + basis + 0.25) / m).reshape(-1, 3)
    return np.asarray(sites[np.arange(n) * len(sites) // n], dtype=float)


def first_positions(fluid: Fluid, state: State, key: Key) -> Floats:
    """Disordered lattice positions whose largest force is moderate, (particles, 3), sigma.

    Moves along the forces, each particle by a bounded length, until none is larger than 200 epsilon/sigma.
    Raises BadRequest if the particles cannot be freed of overlaps.
    """
    n, box = state.particles, state.box
    spacing = box / n ** (1.0 / 3.0)
    where = _lattice(n) * box + _DISORDER * spacing * draw(key, START, n)
    for _ in range(_ROUNDS):
        forces, _ = evaluate(fluid, where, box=box)
        size = np.sqrt((forces * forces).sum(axis=1))
        if size.max() < _GENTLE:
            return np.asarray(np.mod(where, box), dtype=float)
        where = where + forces * np.minimum(_GAIN, _LONGEST_MOVE / np.maximum(size, 1e-300))[:, None]
    raise BadRequest(
        f"{n} particles at density {state.density:g} sigma^-3 could not be freed of overlaps; take a lower density"
    )


def first_velocities(state: State, key: Key) -> Floats:
    """Maxwell velocities of the set temperature, (particles, 3)."""
    return float(np.sqrt(state.temperature)) * draw(key, START + np.uint64(1), state.particles)
