"""Residual chemical potential of one state from its stored frames, by test insertion."""

from __future__ import annotations

import hashlib
import math
from collections.abc import Collection, Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from estimators.cavities import STRATA, Cavities, Tally
from estimators.errors import BadSeries
from estimators.estimate import Chain, Estimate, combine, mean
from estimators.frames import with_frames
from estimators.pairs import pair_counts
from sampler.series import Series

__all__ = ["Insertion", "insertion"]

Floats = npt.NDArray[np.float64]
Counts = npt.NDArray[np.int64]

PILOT_FRAMES = 64
PILOT_TRIALS = 16  # in each stratum
FEWEST_FRAMES, COMFORTABLE_FRAMES = 15.0, 40.0  # contributing; below them trust is "no", "caution"
WITHIN = 0.25  # variance of a frame's mean weight that is left to its test particles, over that from frame to frame
FEWEST, MOST = 5 * STRATA, 1000  # test particles a frame


@dataclass(frozen=True, eq=False)
class Insertion:
    """Residual chemical potential, and what it rests on.

    chemical_potential : of a particle of the fluid that averages report, less that of an ideal gas of the same T and
        density, epsilon
    trials : test particles inserted
    contributing : of them, as many as would scatter as much if all weighed the same: (sum w)^2 / sum w^2
    contributing_frames : the same of the mean weights of the frames
    trust, reason : whether value and error bar can be believed
    """

    chemical_potential: Estimate
    trials: int
    contributing: float
    contributing_frames: float
    trust: str
    reason: str


def insertion(series: Sequence[Series], *, trials: int | None = None, seed: int = 1) -> Insertion | None:
    """From the frames of all repeats of one rung with a bath.

    trials : test particles a frame, about; if None as many as leave to them a quarter of the scatter from frame to
        frame, between 100 and 1000, which cost 3 to 6 % of 500 steps
    None without a bath, frames or known pair functions, or where no frame has room for a particle.

    With dU the energy of a test particle anywhere in the cube, -T ln <exp(-dU/T)> is what one particle more costs at
    this volume (B. Widom, J. Chem. Phys. 39, 2808 (1963); from memory). dU is the change of U_dyn, whose ensemble is
    drawn. What averages report has besides the energy D = U - U_dyn, n_pairs u(r_c) with `corrected` and `plain`, and
    the long-range part N tail. To first order the free energy holds their means, N tail and <D>, which grow as N^2 at
    constant volume, so that 2 tail + 2 <D>/N is added. With <D> this takes the mean of g within the cutoff for
    independent of density, and neglects u(r_c)/2 or less, 0.003 at cutoff 3; the covariance of D and exp(-dU/T) would
    tell, with a noise of several times that.

    Finite size: what is found is F(N + 1) - F(N) of a cube without fluctuations of N, which is above that of an
    infinite fluid by (T/2N) (1/S - 1 + rho S'/S) + O(1/N^2), with S = T d rho/dP and S' = dS/d rho (J. I. Siepmann,
    I. R. McDonald, D. Frenkel, J. Phys.: Condens. Matter 4, 679 (1992), from memory; it follows from F of N particles
    being that of the infinite fluid and T/2 ln S). It is not taken off, as one rung does not tell S': at N 500
    it is -0.002 at T 2, rho 0.3, -0.006 at 1.6, 0.5, -0.002 at 1.1, 0.7 and 0.008 at 1, 0.8.

    Trust. The denser the fluid the fewer frames carry the mean, and too few miss the rare ones that would: the value is
    then too high and the error bar too short. Measured at N 108, density 0.6 to 0.95, in 1300 pieces of 80 to 550
    frames: of 95 % intervals 67 % held the mean of the whole run where 3 to 5 frames contributed, 72 % at 5 to 8, 86 %
    at 8 to 12, 94 % at 12 to 30, 95 % at 30 to 50 and 96 % beyond; misses are values too high, nearly all. Hence
    "no" below 15, "caution" below 40; what the error bar itself says against it counts too.
    Raises BadSeries if the series are not repeats of one state or a position is not finite.
    """
    series = with_frames(series)
    if trials is not None and trials < 1:
        raise BadSeries(f"trials must be positive, found {trials}")
    if not series or not series[0].bath or not series[0].fluid.has_pairs:
        return None
    fluid, state = series[0].fluid, series[0].state
    cavities = Cavities(fluid, state)
    shares = _shared_out(_pilot(series, cavities, seed), trials)
    tallies = {each.chain: cavities.insert(each.frames, shares, key=_key(seed, each.chain, "trial")) for each in series}
    weight = mean({chain: tally.mean_weights for chain, tally in tallies.items()})
    if weight.value <= 0.0:
        return None
    unsampled = float(fluid.pair_energy(np.nextafter(fluid.cutoff, 0.0)))  # of a pair at the cutoff; all have it
    rest = mean({each.chain: 2.0 * unsampled / state.particles * _pairs(each) for each in series})
    potential = combine(
        lambda w, d: d - state.temperature * np.log(w),
        weight,
        rest + 2.0 * fluid.tail(state.density)[0],
        method="insertion",
    )
    frames = np.concatenate([tally.mean_weights for tally in tallies.values()])
    contributing_frames = float(np.sum(frames)) ** 2 / max(float(frames @ frames), 1e-300)
    return Insertion(
        chemical_potential=potential,
        trials=int(sum(np.sum((tally.share > 0.0) @ shares) for tally in tallies.values())),
        contributing=_contributing(tallies.values(), shares),
        contributing_frames=contributing_frames,
        **dict(zip(("trust", "reason"), _judged(potential, contributing_frames), strict=True)),
    )


def _key(seed: int, chain: Chain, use: str) -> int:
    """Of the random numbers for the first frame of a chain, from values alone: 64 bits."""
    temperature, density, particles, repeat = chain
    text = f"{use}|{seed}|{float(temperature).hex()}|{float(density).hex()}|{particles}|{repeat}"
    return int.from_bytes(hashlib.sha256(text.encode()).digest()[:8], "little")


def _pilot(series: Sequence[Series], cavities: Cavities, seed: int) -> Tally:
    """As many test particles in each stratum of frames from all along."""
    frames = np.concatenate([each.frames[:: -(-len(series) * len(each.frames) // PILOT_FRAMES)] for each in series])
    return cavities.insert(frames, np.full(STRATA, PILOT_TRIALS), key=_key(seed, series[0].chain, "pilot"))


def _shared_out(pilot: Tally, trials: int | None) -> Counts:
    """Test particles for each stratum of a frame, such that least scatter is left (J. Neyman 1934)."""
    excess = np.maximum(pilot.square - pilot.weight**2, 0.0) * PILOT_TRIALS / (PILOT_TRIALS - 1)
    within = np.mean(pilot.share**2 * excess, axis=0)
    if trials is None:
        between = float(np.var(pilot.mean_weights)) - float(np.sum(within)) / PILOT_TRIALS
        needed = float(np.sum(np.sqrt(within))) ** 2 / (WITHIN * between) if between > 0.0 else math.inf
        trials = round(min(max(needed, FEWEST), MOST))
    total = max(float(np.sum(np.sqrt(within))), 1e-300)
    shares: Counts = np.maximum(np.rint(trials * np.sqrt(within) / total), 1).astype(np.int64)
    return shares


def _pairs(series: Series) -> Floats:
    """Pairs within the cutoff of each frame, (m,)."""
    return pair_counts(series.frames, series.state.box, width=series.fluid.cutoff, number=1)[:, 0].astype(float)


def _contributing(tallies: Collection[Tally], shares: Counts) -> float:
    whole = math.fsum(float(np.sum(tally.mean_weights)) for tally in tallies)
    squares = math.fsum(float(np.sum(tally.share**2 * tally.square / shares)) for tally in tallies)
    return whole**2 / squares if squares else 0.0


def _judged(potential: Estimate, frames: float) -> tuple[str, str]:
    """Trust in a value that so many frames contribute to, and the reason."""
    few = f"the mean rests on about {frames:.0f} frames with rare, large cavities; sample longer, or at lower density"
    if potential.trust == "no" or frames >= COMFORTABLE_FRAMES:
        return potential.trust, potential.reason
    return ("no" if frames < FEWEST_FRAMES else "caution"), few
