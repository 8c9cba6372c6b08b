"""The states that a user asks values for, read from words: temperatures, densities, epsilon and sigma."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TypeVar

from canonry.errors import UserError
from canonry.keys import Reader, parameter, quantity
from canonry.quantities import NotAccepted
from canonry.study import Study
from canonry.units import UNITS
from sampler.fluid import State

__all__ = ["Asked", "Target", "targets"]

T = TypeVar("T")
Asked = str | float

_CHANGE = (0.2, 5.0)  # of epsilon or sigma over that of the study


@dataclass(frozen=True)
class Target:
    """A state of a fluid whose epsilon and sigma are these times those of the study; in the study's reduced units.

    By the law of corresponding states it is the study's own fluid at another temperature and density, with the cutoff
    the same number of sigma.

    density : None where a pressure is given instead, and the density is to be found
    """

    temperature: float
    density: float | None
    epsilon: float = 1.0
    sigma: float = 1.0
    pressure: float | None = None

    def corresponding(self, particles: int) -> State:
        """The state of the study's own fluid; the target must have a density."""
        return State(self.temperature / self.epsilon, (self.density or 0.0) * self.sigma**3, particles)

    def at_density(self, corresponding: float) -> Target:
        """The same at the density that corresponds to one of the study's own fluid."""
        return replace(self, density=corresponding / self.sigma**3)

    def factor(self, quantity: str) -> float:
        """What a value of the study's own fluid at the corresponding state is multiplied by."""
        unit = UNITS[quantity]
        return float(self.epsilon**unit.energy * self.sigma**unit.length)


def targets(
    study: Study,
    *,
    temperatures: Sequence[Asked] = (),
    densities: Sequence[Asked] = (),
    pressure: Asked | None = None,
    epsilon: Asked | None = None,
    sigma: Asked | None = None,
) -> list[Target]:
    """Every temperature asked for at every density, or at the pressure; by default those of the study.

    A number is a reduced value (of epsilon and sigma: a multiple of the study's), a text may carry a unit.
    Raises UserError, which names the option, the value found and what is accepted.
    """
    scale = study.scale
    asked = {
        "temperature": ("-T", temperatures, quantity("temperature", 0.01, 100.0, scale)),
        "density": ("--density", densities, quantity("density", 1e-6, 2.0, scale)),
    }
    found = {
        name: [_read(option, value, reader) for value in values] for name, (option, values, reader) in asked.items()
    }
    own = {name: sorted({getattr(state, name) for state in study.states}) for name in found}
    changes = {
        name: 1.0 if value is None else _read(f"--{name}", value, _change(name, study))
        for name, value in (("epsilon", epsilon), ("sigma", sigma))
    }
    if pressure is not None:
        if densities:
            raise UserError(f"--pressure {pressure}: densities are asked for too; what is accepted is either")
        bar = _read("--pressure", pressure, quantity("pressure", -100.0, 1e4, scale))
        return [Target(each, None, **changes, pressure=bar) for each in found["temperature"] or own["temperature"]]
    return [
        Target(temperature, density, **changes)
        for density in found["density"] or own["density"]
        for temperature in found["temperature"] or own["temperature"]
    ]


def _read(option: str, value: Asked, reader: Reader[T]) -> T:
    try:
        return reader(_number_or_text(value))
    except NotAccepted as problem:
        raise UserError(f"{option} {value}: {problem}") from None


def _number_or_text(value: Asked) -> Asked:
    try:
        return float(value)
    except ValueError:
        return value


def _change(name: str, study: Study) -> Reader[float]:
    """Reads a multiple of the study's epsilon or sigma, or where it has an SI scale a text with a unit."""
    own = getattr(study, name)

    def read(value: object) -> float:
        change = value if isinstance(value, float) else _with_unit(value)
        if not _CHANGE[0] <= change <= _CHANGE[1]:
            raise NotAccepted(
                f"what is needed is {name} from {_CHANGE[0]:g} to {_CHANGE[1]:g} times that of the study, as a number "
                "or, where the study gives its own, with a unit"
            )
        return change

    def _with_unit(value: object) -> float:
        if own is None:
            raise NotAccepted(f"the study gives no fluid.{name}; what is accepted is a multiple of it, such as 1.02")
        return parameter(name, 0.0, float("inf"))(value) / float(own)

    return read
