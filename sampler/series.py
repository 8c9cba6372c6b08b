"""What one repeat of a rung recorded: the records that estimates are made from."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from sampler.errors import BadRequest
from sampler.fluid import Fluid, State, Totals

__all__ = ["FrameSums", "Series"]

Floats = npt.NDArray[np.float64]
_COLUMNS = (
    *("energy", "sampled_energy", "virial", "hypervirial", "kinetic", "ledger"),
    *("kinetic_parts", "momentum", "force_square", "laplacian", "rejected"),
    "bath_temperature",
)


@dataclass(frozen=True)
class Series:
    """Samples of one repeat, equally spaced in time, extensive and in reduced units; None for what was not recorded.

    energy : (n,), U, long-range part included
    sampled_energy : (n,), U_dyn, whose canonical ensemble is drawn
    virial : (n,), W = -1/3 sum r u'
    hypervirial : (n,), X = 1/9 sum r d/dr (r u')
    kinetic : (n,), K
    ledger : (n,), kinetic energy that the bath has taken out so far; K + U_dyn + ledger is conserved
    frames : (m, particles, 3), positions inside [0, box), of every frame_stride-th sample; see `frame_samples`
    frame_offset : samples missing of the stride that the first frame ends, less than frame_stride
    kinetic_parts : (n, 3), kinetic energy along x, y and z; momentum : (n, 3), of all particles; None if not recorded
    force_square : (n,), sum over particles of the squared force; laplacian : (n,), of the Laplacian of U, without what
        a jump of the force at the cutoff adds; None if not recorded
    kinetic_lag : share of the kinetic energy that the scheme is known to lack, per unit of the mean Laplacian a degree
        of freedom
    rejected : (n,), share of the steps since the sample before that a Metropolis test undid; None where there is none
    bath_temperature : (n,), T that the bath's random kicks since the sample before had; None without a bath of ours
    interval : time between samples
    freedom : kinetic degrees of freedom where they are not those of our own particles, see `kinetic_freedom`
    bath : whether a thermostat acted; without one the ensemble has constant energy
    """

    fluid: Fluid
    state: State
    repeat: int
    bath: bool
    interval: float
    energy: Floats | None
    sampled_energy: Floats | None
    virial: Floats | None
    hypervirial: Floats | None
    kinetic: Floats | None
    ledger: Floats | None
    frames: Floats
    frame_stride: int
    frame_offset: int = 0
    kinetic_parts: Floats | None = None
    momentum: Floats | None = None
    force_square: Floats | None = None
    laplacian: Floats | None = None
    rejected: Floats | None = None
    bath_temperature: Floats | None = None
    kinetic_lag: float = 0.0
    freedom: int | None = None

    def __len__(self) -> int:
        return next((len(getattr(self, name)) for name in _COLUMNS if self.has(name)), 0)

    def has(self, *names: str) -> bool:
        """Whether all these columns were recorded."""
        return all(getattr(self, name) is not None for name in names)

    def column(self, name: str) -> Floats:
        """A column that was recorded. Raises BadRequest if it was not."""
        values: Floats | None = getattr(self, name)
        if values is None:
            raise BadRequest(f"the series at {self.state}, repeat {self.repeat}, has no column {name}")
        return values

    @property
    def chain(self) -> tuple[float, float, int, int]:
        """What marks this repeat among all: temperature, density, particles, repeat."""
        return self.state.temperature, self.state.density, self.state.particles, self.repeat

    @property
    def times(self) -> Floats:
        """(n,), time of each sample since the stated equilibration ended."""
        return self.interval * np.arange(1.0, len(self) + 1)

    @property
    def kinetic_freedom(self) -> int:
        """Kinetic degrees of freedom: 3N with a bath, 3N - 3 without (the total momentum is zero and stays so)."""
        if self.freedom is not None:
            return self.freedom
        return 3 * self.state.particles - (0 if self.bath else 3)

    @property
    def frame_samples(self) -> npt.NDArray[np.int_]:
        """(m,), index of the sample that each frame belongs to."""
        return self.frame_stride * np.arange(1, len(self.frames) + 1) - 1 - self.frame_offset

    def every(self, stride: int) -> Series:
        """Each stride-th sample, without frames."""
        columns = {name: getattr(self, name) for name in _COLUMNS}
        kept: dict[str, Any] = {
            name: None if values is None else values[stride - 1 :: stride] for name, values in columns.items()
        }
        return replace(self, interval=stride * self.interval, frames=self.frames[:0], frame_offset=0, **kept)

    def at_frames(self) -> Series:
        """The samples that a frame belongs to, with the frames."""
        kept: dict[str, Any] = {
            name: self.column(name)[self.frame_samples] if self.has(name) else None for name in _COLUMNS
        }
        interval = self.frame_stride * self.interval
        return replace(self, interval=interval, frame_stride=1, frame_offset=0, **kept)

    def with_every_frame(self, stride: int) -> Series:
        """The same samples with each stride-th of their frames."""
        return replace(self, frames=self.frames[stride - 1 :: stride], frame_stride=stride * self.frame_stride)

    def moved(self, density: float, totals: Totals) -> Series:
        """The same samples at another density, with the energies and virials that they have there and nothing else."""
        kept: dict[str, Any] = dict.fromkeys(_COLUMNS)
        kept |= {name: getattr(totals, name) for name in ("energy", "sampled_energy", "virial", "hypervirial")}
        return replace(self, state=replace(self.state, density=density), frames=self.frames[:0], **kept)

    def after(self, n_samples: int) -> Series:
        """The series without its first n_samples and their frames."""
        n_frames, offset = divmod(self.frame_offset + n_samples, self.frame_stride)
        columns = {name: getattr(self, name) for name in _COLUMNS}
        kept: dict[str, Any] = {
            name: None if values is None else values[n_samples:] for name, values in columns.items()
        }
        return replace(self, frames=self.frames[n_frames:], frame_offset=offset, **kept)


@dataclass(frozen=True)
class FrameSums:
    """Of each frame, (m,), extensive and in reduced units.

    force_square : sum over particles of the squared force
    laplacian : sum over particles of the Laplacian of U, without what the jump of the force at the cutoff adds
    energy, stretched, squeezed : U_dyn, long-range part included, in the volume of the frame and in 1 + change and
        1 - change of it, at the same scaled positions and with the cutoff as it is
    """

    force_square: Floats
    laplacian: Floats
    energy: Floats
    stretched: Floats
    squeezed: Floats
    change: float
