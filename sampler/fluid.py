"""The fluid that is sampled: pair potential, cutoff and what is done at the cutoff; and its states."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Literal, get_args

import numpy as np
import numpy.typing as npt

from sampler.errors import BadRequest
from sampler.potentials import lennard_jones

__all__ = ["ELSEWHERE", "Fluid", "State", "Totals", "Truncation"]

Floats = npt.NDArray[np.float64]
Truncation = Literal["corrected", "plain", "shifted", "force-shifted"]
ELSEWHERE = "elsewhere"
"""The potential of a fluid that is sampled elsewhere and whose pair functions are not known here."""


@dataclass(frozen=True, order=True)
class State:
    """One point to sample: temperature (epsilon/k_B), number density (sigma^-3), particle count."""

    temperature: float
    density: float
    particles: int

    def __post_init__(self) -> None:
        for name in ("temperature", "density"):
            value = getattr(self, name)
            if not (math.isfinite(value) and value > 0.0):
                raise BadRequest(f"{name} must be a positive number, found {value!r}")
        if self.particles < 2:
            raise BadRequest(f"particles must be at least 2, found {self.particles}")

    @property
    def volume(self) -> float:
        """Volume of the periodic cube, sigma^3."""
        return self.particles / self.density

    @property
    def box(self) -> float:
        """Edge of the periodic cube, sigma."""
        return float(self.volume ** (1.0 / 3.0))


@dataclass(frozen=True)
class Totals:
    """Sums over all pairs of each sample, (n_samples,), epsilon, long-range part included where the fluid has one."""

    energy: Floats
    sampled_energy: Floats
    virial: Floats
    hypervirial: Floats


@dataclass(frozen=True)
class Fluid:
    """Lennard-Jones fluid cut at `cutoff` (sigma).

    corrected : truncated, homogeneous long-range correction for energy, virial and hypervirial
    plain : truncated, nothing added
    shifted : u(r) - u(r_c)
    force-shifted : u(r) - u(r_c) - (r - r_c) u'(r_c)

    Forces of `corrected` and `plain` conserve the shifted energy: that is `sampled_energy` (U_dyn), the one whose
    canonical ensemble is drawn; averages report `energy` (U).

    With potential `elsewhere` there are no pair functions, see `has_pairs`: cutoff and truncation mean nothing, and
    whatever needs them raises BadRequest.
    """

    cutoff: float = 3.0
    truncation: Truncation = "corrected"
    potential: str = lennard_jones.NAME

    def __post_init__(self) -> None:
        if self.potential not in (lennard_jones.NAME, ELSEWHERE):
            raise BadRequest(f"potential must be '{lennard_jones.NAME}' or '{ELSEWHERE}', found {self.potential!r}")
        if self.truncation not in get_args(Truncation):
            raise BadRequest(f"truncation must be one of {', '.join(get_args(Truncation))}, found {self.truncation!r}")
        if not (math.isfinite(self.cutoff) and self.cutoff > 0.0):
            raise BadRequest(f"cutoff must be a positive number, found {self.cutoff!r}")

    @property
    def has_pairs(self) -> bool:
        """Whether the pair functions are known; without them only what was recorded of a fluid is."""
        return self.potential != ELSEWHERE

    def _require_pairs(self) -> None:
        if not self.has_pairs:
            raise BadRequest("the pair functions of a fluid sampled elsewhere are not known here")

    def check_box(self, box: float) -> None:
        """Raises BadRequest if the cutoff is beyond half the edge of a periodic cube (sigma)."""
        self._require_pairs()
        if self.cutoff > 0.5 * box:
            raise BadRequest(
                f"cutoff {self.cutoff:g} sigma is beyond half the box of edge {box:g} sigma; "
                "take a smaller cutoff or more particles"
            )

    @property
    def energy_at_cutoff(self) -> float:
        """u(r_c) of the untruncated potential, epsilon."""
        self._require_pairs()
        return float(lennard_jones.u(self.cutoff))

    @property
    def slope_at_cutoff(self) -> float:
        """u'(r_c) that a force-shifted fluid subtracts, epsilon/sigma; zero for every other truncation."""
        self._require_pairs()
        if self.truncation != "force-shifted":
            return 0.0
        return float(lennard_jones.w(self.cutoff)) / self.cutoff

    @property
    def _shift(self) -> float:
        return self.energy_at_cutoff if self.truncation in ("shifted", "force-shifted") else 0.0

    def pair_energy(self, r: Floats) -> Floats:
        """u(r) as averages report it, zero beyond the cutoff."""
        r = np.asarray(r, dtype=float)
        inside = lennard_jones.u(r) - self._shift - (r - self.cutoff) * self.slope_at_cutoff
        return np.where(r < self.cutoff, inside, 0.0)

    def pair_virial(self, r: Floats) -> Floats:
        """w(r) = r u'(r), zero beyond the cutoff."""
        r = np.asarray(r, dtype=float)
        return np.where(r < self.cutoff, lennard_jones.w(r) - r * self.slope_at_cutoff, 0.0)

    def pair_hypervirial(self, r: Floats) -> Floats:
        """x(r) = r d/dr (r u'(r)), zero beyond the cutoff; the jump of the force there is `surface_hypervirial`."""
        r = np.asarray(r, dtype=float)
        return np.where(r < self.cutoff, lennard_jones.x(r) - r * self.slope_at_cutoff, 0.0)

    @property
    def sampled_weights(self) -> Floats:
        """U_dyn but for a constant is the product of these with the bare sums, (4,)."""
        slope = self.slope_at_cutoff
        return np.array([*lennard_jones.ENERGY, slope * self.cutoff - self.energy_at_cutoff, -slope])

    def totals(self, sums: Floats, state: State) -> Totals:
        """Energies and virials from the bare sums a kernel records.

        sums : (n_samples, 4): S12, S6, number of pairs inside the cutoff, sum of their distances
        """
        powers, pairs, distances = sums[:, :2], sums[:, 2], sums[:, 3]
        if self.truncation == "corrected":
            powers = powers + state.particles * lennard_jones.tail_sums(self.cutoff, state.density)
        slope = self.slope_at_cutoff
        energy = powers @ lennard_jones.ENERGY - pairs * (self._shift - slope * self.cutoff) - slope * distances
        unshifted = self.energy_at_cutoff - self._shift
        return Totals(
            energy=energy,
            sampled_energy=energy - pairs * unshifted,
            virial=powers @ lennard_jones.VIRIAL + slope * distances / 3.0,
            hypervirial=powers @ lennard_jones.HYPERVIRIAL - slope * distances / 9.0,
        )

    def hypervirial(self, energy: Floats, virial: Floats) -> Floats | None:
        """X of samples, (n,), from their U and W: two sums of powers make up all three.

        None where the truncation puts more than these into U or W (`shifted`, `force-shifted`) or nothing is known.
        """
        if not self.has_pairs or self.truncation not in ("corrected", "plain"):
            return None
        weights = np.linalg.solve(np.transpose([lennard_jones.ENERGY, lennard_jones.VIRIAL]), lennard_jones.HYPERVIRIAL)
        return np.asarray(weights[0] * energy + weights[1] * virial, dtype=float)

    def power_sums(self, energy: Floats, sampled_energy: Floats, virial: Floats) -> Floats | None:
        """Sums of powers that U (first) and U_dyn (second) of samples are linear in, (2, 2, n), long-range included.

        None unless `corrected`: only then do both scale with all distances, the cutoff among them, see `rescaled`.
        """
        if not self.has_pairs or self.truncation != "corrected":
            return None
        whole = np.linalg.solve([lennard_jones.ENERGY, lennard_jones.VIRIAL], [energy, virial])
        pairs = (energy - sampled_energy) / self.energy_at_cutoff
        edge = np.array([self.cutoff**-power for power in lennard_jones.EXPONENTS])
        return np.stack([whole, whole - np.multiply.outer(edge, pairs)])

    @staticmethod
    def slopes(compression: float) -> Floats:
        """Of the power sums in the energy once all densities are this many times as high, (2,)."""
        return lennard_jones.ENERGY * _growth(compression)

    @staticmethod
    def rescaled(sums: Floats, compression: float) -> Totals:
        """Energies and virials of samples whose density is made this many times as high by scaling all distances.

        sums : (2, 2, n), as `power_sums` gives them
        The cutoff is scaled along, so that tail and shift are those of a slightly different one.
        """
        whole, sampled = sums * _growth(compression)[:, None]
        return Totals(
            energy=lennard_jones.ENERGY @ whole,
            sampled_energy=lennard_jones.ENERGY @ sampled,
            virial=lennard_jones.VIRIAL @ whole,
            hypervirial=lennard_jones.HYPERVIRIAL @ whole,
        )

    def tail(self, density: float) -> tuple[float, float, float]:
        """Long-range part of U, W and X per particle, epsilon; zeros unless `corrected`."""
        self._require_pairs()
        if self.truncation != "corrected":
            return 0.0, 0.0, 0.0
        sums = lennard_jones.tail_sums(self.cutoff, density)
        parts = (lennard_jones.ENERGY, lennard_jones.VIRIAL, lennard_jones.HYPERVIRIAL)
        energy, virial, hypervirial = (float(sums @ part) for part in parts)
        return energy, virial, hypervirial

    def surface_hypervirial(self, density: float) -> float:
        """Mean of X per particle and per unit of g(r_c) from the jump of the force at the cutoff, epsilon.

        -(2 pi/9) rho r_c^3 w(r_c) for `shifted` and `plain`; zero where the force is continuous or the tail holds it.
        """
        self._require_pairs()
        if self.truncation not in ("shifted", "plain"):
            return 0.0
        edge = float(lennard_jones.w(self.cutoff))
        return -2.0 * math.pi / 9.0 * density * self.cutoff**3 * edge


def _growth(compression: float) -> Floats:
    """What the power sums are multiplied by when all densities are, (2,)."""
    return np.array([compression ** (power / 3.0) for power in lennard_jones.EXPONENTS])
