"""What error bars are worth at the moment at which [until] stops at them: correlated normal series.

Run: nice python benchmarks/stopping.py [--series 2000] [--workers 2]
About three minutes on two cores. A series is made longer by `canonry.until.decide` until the standard error of its mean
or variance is within a limit: the typical error of its first 2000 samples (tau 5.5, so 180 independent ones), over the
factor in the second column.
Columns: share of intervals +-1.96 standard errors that hold the truth; mean standard error over the true one; mean
deviation from the truth and mean standard error, both over the limit; mean number of samples; mean number of rounds.
"""

from __future__ import annotations

import argparse
import math
from concurrent.futures import ProcessPoolExecutor
from functools import partial

import numpy as np
import numpy.typing as npt
from scipy.signal import lfilter

from canonry.keys import Table
from canonry.study import Study, study_of
from canonry.until import decide
from estimators.covariance import covariance
from estimators.estimate import Estimate, mean

Floats = npt.NDArray[np.float64]

NORMAL = 1.96
KEY = (1.0, 0.8, 20_000, 0)
MEMORY = 5.0 / 6.0  # of a sample to the next
FIRST, LAST = 2000, 200_000  # samples
FACTORS = (1.0, 1.5, 3.0)
KINDS = ("mean", "variance")


def study(limit: float) -> Study:
    """Asks for a standard error of this size; a step is a sample, a segment 500 of them."""
    return study_of(
        Table(
            "benchmark",
            "",
            {
                "fluid": {"potential": "lennard-jones"},
                "state": {"density": KEY[1], "temperatures": KEY[0], "particles": KEY[2]},
                "sampling": {"steps": FIRST, "record_every": 1, "frame_every": 500},
                "until": {"pressure": limit, "steps_at_most": LAST},
            },
        )
    )


def series(generator: np.random.Generator, samples: int) -> Floats:
    """A stationary normal series of unit variance, (samples,)."""
    noise = generator.normal(size=samples)
    noise[1:] *= math.sqrt(1.0 - MEMORY**2)
    return np.asarray(lfilter([1.0], [1.0, -MEMORY], noise), dtype=float)


def estimate(kind: str, values: Floats) -> Estimate:
    """Mean or variance of a series."""
    return mean({KEY: values}) if kind == "mean" else covariance({KEY: values}, {KEY: values})


def stopped(kind: str, limit: float, seed: int) -> tuple[float, float, int, int]:
    """Value, standard error, samples and rounds when the rule stops."""
    values = series(np.random.default_rng(seed), LAST)
    asked = study(limit)
    (state,) = asked.states
    samples, rounds = FIRST, 0
    while True:
        found = estimate(kind, values[:samples])
        rounds += 1
        (share,) = decide(asked, {state: {"pressure": found}}, {state: samples})
        if not share.more:
            return found.value, found.standard_error, samples, rounds
        samples += share.more


def main() -> None:
    """Print the table."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--series", type=int, default=2000)
    parser.add_argument("--workers", type=int, default=2)
    options = parser.parse_args()
    print("of        limit  coverage  error/true  deviation  error/limit  samples  rounds")
    with ProcessPoolExecutor(options.workers) as workers:
        for kind in KINDS:
            generator = np.random.default_rng(1)
            typical = np.median([estimate(kind, series(generator, FIRST)).standard_error for _ in range(200)])
            for factor in FACTORS:
                limit = float(f"{typical / factor:.6g}")
                found = list(workers.map(partial(stopped, kind, limit), range(options.series), chunksize=20))
                values, errors, samples, rounds = np.array(found).T
                off = values - (0.0 if kind == "mean" else 1.0)
                true = math.sqrt(float(np.mean(off**2)))
                print(
                    f"{kind:9s} 1/{factor:.1f} {np.mean(np.abs(off) < NORMAL * errors):9.3f} "
                    f"{np.mean(errors) / true:11.2f} {np.mean(off) / limit:10.2f} {np.mean(errors) / limit:12.2f} "
                    f"{np.mean(samples):8.0f} {np.mean(rounds):7.1f}",
                    flush=True,
                )


if __name__ == "__main__":
    main()
