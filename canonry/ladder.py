"""The rungs of a ladder: as few as overlap as asked over a range of temperatures, placed for the least error there.

Neighbours overlap equally where they are equally far apart in units of the width of their energies, that is in the
integral of sqrt(N c_v,res) d ln T. A range is known worst at its ends, where there are neighbours on one side only: so
the outermost rungs lie beyond it, by BEYOND. Largest standard error of c_v over the range, in units of that of a rung
alone, for a constant c_v,res, and a liquid's energy (autocorrelation times of its first three Hermite polynomials as
3 : 1 : 0.6, measured at density 0.8) or one that forgets all at once, against how far beyond the ends the outermost of
as many rungs lie (`canonry.outlook`; all in widths of the energy; `spacing` is that with no rung beyond):

| rungs | spacing | overlap | liquid: 0 | 0.2  | 0.4  | 0.6  | 0.8  | at once: 0 | 0.2  | 0.4  | 0.6  | 0.8  |
|-------|---------|---------|-----------|------|------|------|------|------------|------|------|------|------|
| 3     | 2.0     | 0.22    | 0.87      | 0.81 | 0.79 | 0.80 | 0.81 | 0.80       | 0.72 | 0.67 | 0.68 | 0.72 |
| 3     | 3.0     | 0.10    | 0.88      | 0.84 | 0.87 | 0.90 | 0.93 | 0.89       | 0.84 | 0.84 | 0.88 | 0.95 |
| 5     | 1.6     | 0.24    | 0.87      | 0.81 | 0.78 | 0.77 | 0.77 | 0.78       | 0.68 | 0.61 | 0.57 | 0.55 |
| 5     | 2.0     | 0.21    | 0.87      | 0.81 | 0.79 | 0.79 | 0.79 | 0.80       | 0.71 | 0.65 | 0.61 | 0.64 |
| 5     | 3.0     | 0.10    | 0.88      | 0.84 | 0.85 | 0.86 | 0.87 | 0.89       | 0.83 | 0.80 | 0.81 | 0.83 |
| 9     | 2.0     | 0.21    | 0.87      | 0.81 | 0.79 | 0.78 | 0.78 | 0.80       | 0.71 | 0.64 | 0.59 | 0.59 |
| 9     | 2.5     | 0.15    | 0.86      | 0.81 | 0.80 | 0.80 | 0.81 | 0.85       | 0.76 | 0.70 | 0.69 | 0.70 |
| 9     | 3.0     | 0.10    | 0.88      | 0.83 | 0.84 | 0.84 | 0.85 | 0.89       | 0.82 | 0.79 | 0.79 | 0.80 |

Overlap grows as neighbours come closer, up to 0.24 in a ladder of more than three rungs: then others share, too.
"""

from __future__ import annotations

import math
from dataclasses import replace
from pathlib import Path

import numpy as np
import numpy.typing as npt

from canonry.border import Border
from canonry.directory import held
from canonry.errors import UserError
from canonry.outlook import predicted_overlap
from canonry.quantities import rounded
from canonry.study import Study
from canonry.temperatures import Ladder
from canonry.trend import Trend, trends
from sampler.fluid import State

__all__ = ["BEYOND", "MOST", "TRIAL", "resolved", "rungs"]

Floats = npt.NDArray[np.float64]

BEYOND = 0.4  # widths of the energy: a fifth of the spacing at overlap 0.2
MOST = 200  # rungs of one density
TRIAL = 10_000_000  # particle-steps of a pilot, about a second, and more where the fluid forgets slowly
_CLOSEST, _FARTHEST = 1.3, 4.0  # widths: closer neighbours share less, as others do too; farther ones hardly share
_POINTS = 2000


def resolved(study: Study, directory: Path, *, workers: int | None = None) -> Study:
    """The study with its rungs, those that the directory has already, else chosen by pilots; writes nothing.

    workers : threads; the rungs do not depend on it
    Other studies are returned as they are. Raises UserError where no ladder does what is asked, and as pilots do.
    """
    ladder = study.ladder
    if ladder is None or ladder.is_chosen:
        return study
    if not study.sampling.bath:
        raise UserError(
            f"sampling.scheme = {study.sampling.scheme}: rungs overlap in a bath only; what is accepted with "
            "state.temperatures.overlap is another scheme, or a list of temperatures without it"
        )
    earlier, chosen = held(study, directory), replace(ladder, is_chosen=True)
    found = dict(earlier.isochores) if earlier is not None and earlier.ladder == chosen else {}
    new = replace(study, states=tuple(state for state in study.states if state.density not in found))
    border, particles = Border.of(study), study.states[0].particles
    if new.states:
        for density, trend in trends(new, particle_steps=TRIAL, workers=workers).items():
            at = border.text("density", density)
            temperatures = _written(rungs(trend, ladder, particles, at=at), border)
            found[density] = tuple(State(temperature, density, particles) for temperature in temperatures)
    states = tuple(state for density in study.isochores for state in found[density])
    return replace(study, states=states, ladder=chosen)


def rungs(trend: Trend, ladder: Ladder, particles: int, *, at: str) -> Floats:
    """Temperatures of the fewest rungs whose neighbours overlap at least as asked, rising.

    at : the density, for a refusal
    Raises UserError where the overlap cannot be reached, or takes more than 200 rungs.
    """
    ends = np.array([ladder.start, ladder.end])
    margin = 2.0 * BEYOND / math.sqrt(particles * float(np.min(trend.heat_capacity(ends))))
    logs = np.linspace(math.log(ladder.start) - margin, math.log(ladder.end) + margin, _POINTS)
    speeds = np.sqrt(particles * trend.heat_capacity(np.exp(logs)))
    widths = np.concatenate([[0.0], np.cumsum(0.5 * (speeds[1:] + speeds[:-1]) * np.diff(logs))])
    first, last = np.interp(np.log(ends), logs, widths) + np.array([-BEYOND, BEYOND])
    fewest = max(math.ceil((last - first) / _FARTHEST), 1) + 1
    best, number = 0.0, fewest
    while number == fewest or (last - first) / (number - 1) > _CLOSEST:
        if number > MOST:
            raise _refusal(
                ladder,
                f"at density {at} that takes more than {MOST} rungs; what is "
                "accepted is a smaller overlap or a narrower range",
            )
        temperatures = np.exp(np.interp(np.linspace(first, last, number), widths, logs))
        energies, heat_capacities = trend.energy(temperatures), trend.heat_capacity(temperatures)
        least = min(predicted_overlap(energies, heat_capacities, temperatures=temperatures, particles=particles))
        if least >= ladder.overlap:
            return np.asarray(temperatures)
        best, number = max(best, least), number + 1
    largest = math.floor(100.0 * best) / 100.0
    raise _refusal(
        ladder,
        f"neighbours share no more than {largest:g} of their samples here (density {at}), as rungs farther off share "
        f"too; what is accepted is at most {largest:g}",
    )


def _refusal(ladder: Ladder, reason: str) -> UserError:
    return UserError(f"state.temperatures.overlap = {ladder.overlap:g}: {reason}")


def _written(temperatures: Floats, border: Border) -> list[float]:
    """Rounded in the units of the study, to four digits where that leaves the spacing as it is."""
    digits = max(4, 2 - math.floor(math.log10(float(np.min(np.diff(np.log(temperatures)))))))
    unit = border.value("temperature", 1.0)
    return [rounded(float(f"{border.value('temperature', each):.{digits}g}") / unit) for each in temperatures.tolist()]
