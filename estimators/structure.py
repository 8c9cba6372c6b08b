"""Pair structure of one state from its stored frames: g(r), coordination, and what follows from g alone."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Protocol

import numpy as np
import numpy.typing as npt
from scipy.signal import savgol_coeffs

from estimators.canonical import kinetic_temperature
from estimators.errors import BadSeries
from estimators.estimate import Chain, Estimate, exact, mean
from estimators.force_sampling import Forced, force_sampling
from estimators.frames import with_frames
from estimators.pairs import Bins, pair_counts
from sampler.fluid import Fluid, State
from sampler.series import Series

__all__ = ["Evaluate", "Structure", "pair_structure"]

Floats = npt.NDArray[np.float64]


class Evaluate(Protocol):
    """Forces (N, 3) of one configuration and more, as `sampler.forces.evaluate` gives them."""

    def __call__(self, fluid: Fluid, positions: Floats, /, *, box: float) -> tuple[Floats, Floats]: ...


CHUNK = 1000  # frames that are counted at a time
PARTS = 8  # of a bin in which pairs are counted for energy and pressure: what binning leaves goes as 1/PARTS^2
CONTACT_REACH = 0.1  # sigma, to either side of the cutoff
MINIMUM_REACH = 0.2  # sigma, to either side of the first minimum
CLEAR = 5.0  # standard errors by which a minimum must be curved upwards


@dataclass(frozen=True, eq=False)
class Structure:
    """Pair structure of one state; lengths in sigma, energies in epsilon.

    r : (n,), centres of the bins, up to half the box
    g : (n,), pairs over those of an ideal gas of as many particles (N - 1 neighbours each)
    standard_error : (n,), of g; infinite for fewer than four frames
    coordination : (n,), mean number of neighbours up to the outer edge of the bin
    first_minimum : r of the first minimum of g behind its main peak; None where noise hides it or there is none
    first_shell : mean number of neighbours up to there
    contact : g at the cutoff, from a straight line through g exp(u_dyn/T), which is smooth there, over the bins within
        0.1 sigma on both sides; of those inside alone if the cutoff is half the box
    energy : U/N recomputed from g
    pressure : recomputed from g
    contact, energy and pressure are None where the pair functions of the fluid are not known
    forced : g at r, whatever the width of the bins, from the forces on the particles; None if not asked for or unknown
    """

    r: Floats
    g: Floats
    standard_error: Floats
    coordination: Floats
    first_minimum: Estimate | None
    first_shell: Estimate | None
    contact: Estimate | None
    energy: Estimate | None
    pressure: Estimate | None
    forced: Forced | None = None

    @cached_property
    def gain(self) -> Floats:
        """Variance of g over that of `forced.g`, (n,): frames that counting would need for each; nan where unknown."""
        if self.forced is None:
            return np.full(len(self.r), np.nan)
        known = (self.standard_error > 0.0) & np.isfinite(self.standard_error) & (self.forced.standard_error > 0.0)
        return np.where(known, self.standard_error / np.where(known, self.forced.standard_error, 1.0), np.nan) ** 2

    @property
    def median_gain(self) -> float | None:
        """Over all r where pairs were seen; None where unknown."""
        return float(np.nanmedian(self.gain)) if np.any(np.isfinite(self.gain)) else None


def pair_structure(
    series: Sequence[Series], *, bin_width: float = 0.02, evaluate: Evaluate | None = None
) -> Structure | None:
    """Pair structure from the frames of all repeats of one rung; None if there are no frames.

    bin_width : sigma; changed a little so that the cutoff, where there is one, is the edge of a bin
    evaluate : gives the forces for `Structure.forced`

    For energy and pressure pairs are counted in bins an eighth as wide, in which they are taken to lie as
    r^2 exp(-u/T) does: binning leaves 1e-4 of the pressure at most.
    Raises BadSeries if the series are not repeats of one state or a position is not finite.
    """
    series = with_frames(series)
    if not series:
        return None
    first = series[0]
    _check_bins(first, bin_width)
    bins = Bins.of(first.fluid, first.state, bin_width)
    weights = _route_weights(first, bins.parted(PARTS))
    counted = {each.chain: _counted(each, bins, weights) for each in series}
    counts, sums = ({chain: both[k] for chain, both in counted.items()} for k in (0, 1))
    structure = _Pairs(series, bins, counts, sums).structure()
    return replace(structure, forced=_forced(series, bins, evaluate)) if evaluate else structure


def _forced(series: Sequence[Series], bins: Bins, evaluate: Evaluate) -> Forced | None:
    fluid, box = series[0].fluid, series[0].state.box
    if not fluid.has_pairs or fluid.cutoff > 0.5 * box:
        return None
    return force_sampling(
        series, lambda where: evaluate(fluid, where, box=box)[0], width=bins.width, number=bins.number
    )


def _route_weights(first: Series, parts: Bins) -> Floats:
    """What a pair in each bin adds to the energy and to r u', (n, 2); (n, 0) where that is not known."""
    fluid = first.fluid
    functions = (fluid.pair_energy, fluid.pair_virial) if fluid.has_pairs else ()
    columns = [parts.means(function, fluid.pair_energy, first.state.temperature) for function in functions]
    return np.array(columns).reshape(len(columns), parts.number).T


def _counted(each: Series, bins: Bins, weights: Floats) -> tuple[Floats, Floats]:
    """Pairs in each bin of each frame, (m, n), and their sums of energy and r u', from parts of the bins."""
    counts, sums = [], []
    for frames in np.array_split(each.frames, -(-len(each.frames) // CHUNK)):
        narrow = pair_counts(frames, each.state.box, width=bins.width / PARTS, number=bins.number * PARTS)
        counts.append(narrow.reshape(len(frames), bins.number, PARTS).sum(axis=2, dtype=float))
        sums.append(narrow @ weights)
    return np.concatenate(counts), np.concatenate(sums)


def _check_bins(first: Series, bin_width: float) -> None:
    reach = first.fluid.cutoff if first.fluid.has_pairs else 0.5 * first.state.box
    if not 0.0 < bin_width <= 0.5 * reach:
        raise BadSeries(f"bin_width must be positive and at most half the cutoff, found {bin_width!r}")


@dataclass(frozen=True, eq=False)
class _Pairs:
    """Counted pairs, and sums of u and r u' of those pairs.

    Everything derived is linear in what a frame holds, so it has an influence over frames.
    """

    series: Sequence[Series]
    bins: Bins
    counts: dict[Chain, Floats]
    sums: dict[Chain, Floats]

    @property
    def fluid(self) -> Fluid:
        return self.series[0].fluid

    @property
    def state(self) -> State:
        return self.series[0].state

    @cached_property
    def ideal(self) -> Floats:
        """Pairs per frame that an ideal gas would have, (n,)."""
        particles = self.state.particles
        return 0.5 * particles * (particles - 1) / self.state.volume * self.bins.volumes

    @cached_property
    def g(self) -> Floats:
        return np.asarray(np.concatenate(list(self.counts.values())).mean(axis=0) / self.ideal, dtype=float)

    @cached_property
    def standard_error(self) -> Floats:
        columns = ({chain: counts[:, i] for chain, counts in self.counts.items()} for i in range(self.bins.number))
        return np.array([mean(column).standard_error for column in columns]) / self.ideal

    def linear(self, weights: Floats) -> Estimate:
        """Mean of the weighted sum of a frame's counts."""
        return mean({chain: counts @ weights for chain, counts in self.counts.items()})

    def structure(self) -> Structure:
        minimum, shell = self.first_shell() or (None, None)
        known = self.fluid.has_pairs
        return Structure(
            r=self.bins.centres,
            g=self.g,
            standard_error=self.standard_error,
            coordination=np.cumsum(self.g * self.ideal) * 2.0 / self.state.particles,
            first_minimum=minimum,
            first_shell=shell,
            contact=self.contact() if known else None,
            energy=self.energy() if known else None,
            pressure=self.pressure() if known else None,
        )

    def energy(self) -> Estimate:
        tail, _, _ = self.fluid.tail(self.state.density)
        return mean({chain: each[:, 0] for chain, each in self.sums.items()}) / self.state.particles + tail

    def pressure(self) -> Estimate:
        _, tail, _ = self.fluid.tail(self.state.density)
        first = self.series[0]
        temperature = exact(self.state.temperature) if first.bath else kinetic_temperature(self.series)
        virial = mean({chain: each[:, 1] for chain, each in self.sums.items()}) / (-3.0 * self.state.volume)
        return (temperature + tail) * self.state.density + virial

    def contact(self) -> Estimate:
        """g at the cutoff; the pair energy sampled there is u(r) - u(r_c), zero from the cutoff on."""
        r, parts = self.bins.nodes
        cutoff = self.fluid.cutoff
        edge = float(self.fluid.pair_energy(np.nextafter(cutoff, 0.0)))
        reach = max(round(CONTACT_REACH / self.bins.width), 2)
        near = slice(max(self.bins.inside - reach, 0), self.bins.inside + reach)
        energies = np.where(r < cutoff, self.fluid.pair_energy(r) - edge, 0.0)[near]
        boltzmann = np.sum(parts[near] * np.exp(-energies / self.state.temperature), axis=1)
        line = np.vander(self.bins.centres[near] - cutoff, 2, increasing=True)
        weights = np.zeros(self.bins.number)
        weights[near] = np.linalg.pinv(line)[0] / (boltzmann * self.ideal[near])
        return self.linear(weights)

    def first_shell(self) -> tuple[Estimate, Estimate] | None:
        """First minimum of g behind its main peak, and the neighbours up to there; from a parabola around it."""
        half = max(round(MINIMUM_REACH / self.bins.width), 2)
        smoothing = savgol_coeffs(2 * half + 1, 2)
        smooth = np.convolve(self.g, smoothing, mode="valid")  # from bin `half` on
        peak = int(np.argmax(self.g))
        search = smooth[max(peak - half, 0) : 2 * peak - half]
        lowest = int(np.argmin(search)) if len(search) else 0
        if not 0 < lowest < len(search) - 1:
            return None
        middle = max(peak, half) + lowest
        near = slice(middle - half, middle + half + 1)
        centre = float(self.bins.centres[middle])
        fit = np.zeros((3, self.bins.number))
        fit[:, near] = np.linalg.pinv(np.vander(self.bins.centres[near] - centre, 3, increasing=True))
        fit /= self.ideal
        level, slope, curvature = (self.linear(row) for row in fit)
        if not curvature.value > CLEAR * curvature.standard_error:
            return None
        shift = -0.5 * slope.value / curvature.value
        if abs(shift) > MINIMUM_REACH:
            return None
        by_count = -0.5 * (fit[1] + 2.0 * shift * fit[2]) / curvature.value
        minimum = replace(self.linear(by_count), value=centre + shift)
        within = np.clip((minimum.value - self.bins.edges[:-1]) / self.bins.width, 0.0, 1.0)
        neighbours = within * (2.0 / self.state.particles)
        depth = level.value + shift * (slope.value + shift * curvature.value)
        growth = 4.0 * np.pi * self.state.density * minimum.value**2 * depth
        shell = replace(self.linear(neighbours + growth * by_count), value=self.linear(neighbours).value)
        return minimum, shell
