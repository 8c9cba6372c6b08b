"""How a rung is sampled, and how its steps are cut into segments."""

from __future__ import annotations

import math
from dataclasses import asdict, dataclass
from typing import Literal, get_args

from sampler.errors import BadRequest

__all__ = ["SUBSTEPS", "Precision", "Protocol", "Scheme"]

Scheme = Literal["baoab", "obabo", "metropolised", "velocity-verlet"]
Precision = Literal["mixed", "double"]
SUBSTEPS = {"baoab": "BAOAB", "obabo": "OBABO", "metropolised": "OBABO", "velocity-verlet": "BAB"}
_SEGMENT = 10_000_000  # particle-steps: about a second's work


@dataclass(frozen=True)
class Protocol:
    """How every rung is sampled, in reduced units; counts are steps.

    friction : of the bath; without one in `scheme` it acts during the equilibration only
    equilibration : steps before sampling starts, made up to a whole number of frame intervals
    steps : steps of each repeat after that
    precision : "mixed" takes the forces between samples in float32 under baoab and obabo; all else is float64
    """

    seed: int = 1
    repeats: int = 1
    time_step: float = 0.005
    friction: float = 2.0
    scheme: Scheme = "baoab"
    precision: Precision = "mixed"
    equilibration: int = 20_000
    steps: int = 200_000
    record_every: int = 10
    frame_every: int = 500

    def __post_init__(self) -> None:
        for name, accepted in (("scheme", get_args(Scheme)), ("precision", get_args(Precision))):
            if getattr(self, name) not in accepted:
                raise BadRequest(f"{name} must be one of {', '.join(accepted)}, found {getattr(self, name)!r}")
        for name in ("time_step", "friction"):
            value = getattr(self, name)
            if not (math.isfinite(value) and value > 0.0):
                raise BadRequest(f"{name} must be a positive number, found {value!r}")
        for name in ("repeats", "steps", "record_every", "frame_every"):
            if getattr(self, name) < 1:
                raise BadRequest(f"{name} must be at least 1, found {getattr(self, name)}")
        if self.equilibration < 0:
            raise BadRequest(f"equilibration must not be negative, found {self.equilibration}")
        for name in ("steps", "frame_every"):
            if getattr(self, name) % self.record_every:
                raise BadRequest(f"{name} must be a multiple of record_every ({self.record_every})")

    @property
    def bath(self) -> bool:
        """Whether a thermostat acts while samples are taken."""
        return "O" in SUBSTEPS[self.scheme]

    @property
    def is_mixed(self) -> bool:
        """Whether forces between samples are taken in float32."""
        return self.precision == "mixed" and self.scheme in ("baoab", "obabo")

    @property
    def settling(self) -> int:
        """Steps before sampling starts: the equilibration made up to whole frame intervals."""
        return -(-self.equilibration // self.frame_every) * self.frame_every

    @property
    def identity(self) -> dict[str, object]:
        """What may not change while samples are added."""
        return {name: value for name, value in asdict(self).items() if name not in ("steps", "repeats")}

    def segment_length(self, particles: int) -> int:
        """Steps of every segment but the last of the settling and the last of all."""
        return self.frame_every * max(1, round(_SEGMENT / (particles * self.frame_every)))

    def segments(self, particles: int) -> list[tuple[int, int]]:
        """First and last step of each segment of one repeat; settling and sampling do not share one.

        Segments have one length, which depends on nothing that may grow later; only the last may be shorter.
        """
        length = self.segment_length(particles)
        bounds = []
        for begin, end in ((0, self.settling), (self.settling, self.settling + self.steps)):
            bounds += [(first, min(first + length, end)) for first in range(begin, end, length)]
        return bounds
