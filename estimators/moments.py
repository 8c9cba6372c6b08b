"""Weighted moments of pooled samples at many temperatures at once, over all samples and over blocks of them.

A sample whose energy at the density asked for is E weighs exp(-E/T)/D at temperature T, with D its density in the
mixture that it was drawn from. Whatever is averaged there is a combination of a few
powers of what was recorded, the same ones at every temperature: one pass over the samples, and products of small
matrices, serve any number of temperatures and properties.

Influences of many samples are kept as sums over blocks. Where blocks are short against the autocorrelation time, the
Gamma method sees the same decay in other units; where they are long, next to none: the error bar is the same.
"""

from __future__ import annotations

import math
import os
from collections.abc import Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from estimators.estimate import Chain
from estimators.mixture import Mixture
from sampler.series import Series

__all__ = ["POWERS", "Moments", "Run", "block_starts", "claimed", "energy_name", "moments"]

Floats = npt.NDArray[np.float64]
Indices = npt.NDArray[np.int64]

POWERS = 8  # 1, U, E, W, W + X, U E, W E, W W
BLOCKS = 2**14  # over all chains: an error bar's own error, about 1/sqrt(2 BLOCKS), is no concern then
FEWEST_BLOCKS = 128  # of a chain, however many there are
CHUNK = 2**13  # samples worked on at once: the matrices of a chunk stay in cache
PIECE = 2**18  # multiplications of one matrix product: above it OpenBLAS takes threads
SCANNED = 1024  # samples of a run among which the largest weight is looked for
HEAVIEST = 300.0  # log of a weight over the largest found so: one sample then counts alone, and nothing is supported


@dataclass(frozen=True)
class Run:
    """One repeat inside a group, seen at one density.

    rung : index of its rung in the group
    chain : what was sampled
    series : energies and virials at the density at which it is seen
    features : (d, n), of the samples as they were drawn
    energies : (n,), E: dynamical, less one constant for the whole group
    centres : U, W and W + X less these constants enter the powers, so that no digits are lost
    starts : (B,), first samples of its blocks
    """

    rung: int
    chain: Chain
    series: Series
    features: Floats
    energies: Floats
    centres: tuple[float, float, float]
    starts: Indices

    @property
    def lengths(self) -> Indices:
        """(B,), samples of each block."""
        return np.diff(self.starts, append=len(self.energies))

    def powers(self, samples: Indices) -> Floats:
        """(POWERS, n) of some samples; zeros stand for a column that was not recorded."""
        energy = self._recorded(energy_name(self.series), samples) - self.centres[0]
        virial = self._recorded("virial", samples)
        stiffness = virial + self._recorded("hypervirial", samples) - self.centres[2]
        virial = virial - self.centres[1]
        sampled = self.energies[samples]
        rows = (energy, sampled, virial, stiffness, energy * sampled, virial * sampled, virial * virial)
        return np.stack([np.ones(len(samples)), *rows])

    def _recorded(self, name: str, samples: Indices) -> Floats:
        return self.series.column(name)[samples] if self.series.has(name) else np.zeros(len(samples))

    def chunks(self) -> Iterator[tuple[slice, Indices, npt.NDArray[np.bool_]]]:
        """Some blocks at a time: which, their samples (b, L), and where a block that is shorter than L has ended."""
        longest = int(np.max(self.lengths))
        blocks = max(CHUNK // longest, 1)
        ends = self.starts + self.lengths
        for first in range(0, len(self.starts), blocks):
            part = slice(first, first + blocks)
            samples = self.starts[part, None] + np.arange(longest)
            ended = samples >= ends[part, None]
            yield part, np.where(ended, 0, samples), ended


def energy_name(series: Series) -> str:
    """The column that stands for U: U_dyn where there is no other energy."""
    return "energy" if series.has("energy") else "sampled_energy"


def block_starts(samples: int, pooled: int) -> Indices:
    """First samples of the blocks of a run, (B,), as equal as they can be, where `pooled` samples are in the group."""
    length = -(-pooled // BLOCKS)
    blocks = max(samples // length, min(samples, FEWEST_BLOCKS))
    return np.arange(blocks) * samples // blocks


@dataclass(frozen=True)
class Moments:
    """At G temperatures, from the runs of a group of K rungs; weights have sum 1 at each temperature.

    means : (G, POWERS)
    claimed : (G, POWERS, K), sum of w x p_k: what every rung claims of them
    blocks : of each run (G, POWERS, B)
    kish : (G,), 1 / sum g w^2, with the inefficiency g of each sample's rung
    """

    means: Floats
    claimed: Floats
    blocks: list[Floats]
    kish: Floats


def moments(mixture: Mixture, runs: Sequence[Run], temperatures: Floats, inefficiencies: Sequence[float]) -> Moments:
    """All moments at the temperatures (G,).

    inefficiencies : (K,), of the energy at each rung
    """
    beta = 1.0 / temperatures
    tops = np.max([_top(mixture, run, beta) for run in runs], axis=0)
    with ThreadPoolExecutor(os.cpu_count()) as threads:
        sums = list(threads.map(lambda run: _sums(mixture, run, beta, tops), runs))
    blocks = [each for each, _, _ in sums]
    coupled = sum(each for _, each, _ in sums)
    squares = sum(inefficiencies[run.rung] * each for run, (_, _, each) in zip(runs, sums, strict=True))
    totals = sum(np.sum(each, axis=2) for each in blocks)
    scale = 1.0 / totals[:, :1]
    for each in blocks:
        each *= scale[:, :, None]
    return Moments(totals * scale, coupled * scale[:, :, None], blocks, 1.0 / (squares * scale[:, 0] ** 2))


def _sums(mixture: Mixture, run: Run, beta: Floats, tops: Floats) -> tuple[Floats, Floats, Floats]:
    """Of a run, with weights exp(-beta E - tops)/D: of its blocks, of what the rungs claim, and of squares, (G,)."""
    shape = (len(beta), POWERS)
    blocks, coupled = np.empty((*shape, len(run.starts))), np.zeros((*shape, len(mixture.counts)))
    squares = np.zeros(len(beta))
    for part, samples, ended in run.chunks():
        shares, log_density = mixture.claims(run.features[:, samples.ravel()])
        log_density[ended.ravel()] = math.inf
        weights = np.multiply.outer(-beta, run.energies[samples.ravel()])
        weights -= log_density
        weights -= tops[:, None]
        np.minimum(weights, HEAVIEST, out=weights)
        np.exp(weights, out=weights)
        powers = run.powers(samples.ravel())
        by_block = weights.reshape(-1, *samples.shape).transpose(1, 0, 2)
        blocks[:, :, part] = (by_block @ powers.reshape(-1, *samples.shape).transpose(1, 2, 0)).transpose(1, 2, 0)
        shared = powers[:, None, :] * shares
        coupled += _product(weights, shared.reshape(-1, samples.size)).reshape(coupled.shape)
        squares += np.einsum("gn,gn->g", weights, weights)
    return blocks, coupled, squares


def _product(first: Floats, second: Floats) -> Floats:
    """first @ second.T, (m, n) and (k, n), in pieces too small to be spread over threads of the linear algebra library.

    On a busy machine these would wait for each other many times longer than they work.
    """
    length = max(PIECE // (len(first) * len(second)), 1)
    whole = first.shape[1] // length * length
    a, b = (each[:, :whole].reshape(len(each), -1, length) for each in (first, second))
    pieces = a.transpose(1, 0, 2) @ b.transpose(1, 2, 0)
    return np.asarray(np.sum(pieces, axis=0) + first[:, whole:] @ second[:, whole:].T, dtype=float)


def claimed(mixture: Mixture, run: Run) -> Floats:
    """What every rung claims of each block of a run, (K, B)."""
    sums = np.empty((len(mixture.counts), len(run.starts)))
    for part, samples, ended in run.chunks():
        shares, _ = mixture.claims(run.features[:, samples.ravel()])
        sums[:, part] = np.sum(np.where(ended, 0.0, shares.reshape(-1, *samples.shape)), axis=2)
    return sums


def _top(mixture: Mixture, run: Run, beta: Floats) -> Floats:
    """About the largest log weight of a run at each beta, (G,), from samples over the whole run."""
    samples = slice(None, None, max(len(run.energies) // SCANNED, 1))
    _, log_density = mixture.claims(run.features[:, samples])
    return np.asarray(np.max(-np.multiply.outer(beta, run.energies[samples]) - log_density, axis=1), dtype=float)
