"""Health checks on healthy studies and on planted faults: how often they cry wolf, and what they miss.

Run: python benchmarks/health_checks.py [--studies 250] [--seeds 50] [--effort 2e7] [--workers 2]
Healthy studies are ladders of four rungs at several states, `effort` particle-steps a rung; printed are the shares of
readings that fail at the nominal 1 % and of studies with any failure after correction. Faults are planted in one rung
each, with as many seeds; printed is how many each check caught at the level of a study of such rungs. Pressures in
another unit than stated are planted where samples are adopted: a rung of pair functions, alone and with positions, and
two rungs of a fluid without. The full form takes half an hour on two cores.
"""

from __future__ import annotations

import argparse
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import replace
from itertools import pairwise
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np

import canonry
from canonry import health
from canonry.errors import UserError
from canonry.estimation import settled
from canonry.findings import Check
from canonry.units import Scale
from estimators.canonical import rung_properties
from estimators.health.pair_slope import pair_slope
from estimators.structure import pair_structure
from sampler.fluid import Fluid, State
from sampler.forces import evaluate
from sampler.noise import chain_key
from sampler.pairs import pair_function
from sampler.protocol import Protocol
from sampler.rung import advance, assemble, skins
from sampler.schemes import propagate, substeps
from sampler.series import Series
from sampler.start import first_positions, first_velocities
from sampler.store import COLUMNS, Chain, Segment

N = 256
LEVEL = 0.01
FLUID = Fluid(cutoff=3.0)
LADDERS = ((0.8, (1.0, 1.1, 1.21, 1.33)), (0.3, (2.0, 2.2, 2.42, 2.66)), (0.1, (1.6, 1.8, 2.02, 2.27)))
RECORDED = (
    *("energy", "sampled_energy", "virial", "hypervirial", "kinetic", "ledger"),
    *("kinetic_parts", "momentum", "force_square", "laplacian", "bath_temperature"),
)
LIQUID = State(1.0, 0.8, N)
READINGS_OF_A_STUDY = 50  # statistical ones, of four rungs: what the level of a study is shared by


def repeats(
    state: State,
    seed: int,
    effort: float,
    *,
    number: int = 2,
    fluid: Fluid = FLUID,
    bath: Sequence[float] = (1.0,),
    lattice: bool = False,
    **changes: object,
) -> list[Series]:
    """Repeats of a rung, sampled as a study samples them.

    bath : temperatures of the bath over that of the state, one after another in equal parts of the run
    lattice : start from a crystal
    """
    steps = round(effort / number / state.particles / 500) * 500
    protocol = Protocol(seed=seed, repeats=number, equilibration=3000, steps=steps, **changes)  # type: ignore[arg-type]
    found = []
    for repeat in range(number):
        parts: list[Series] = []
        before: Segment | None = crystal(state, seed) if lattice else None
        for index, factor in enumerate(bath):
            hot = replace(state, temperature=factor * state.temperature)
            part = replace(protocol, steps=steps // len(bath) // 500 * 500, equilibration=0 if index else 3000)
            segments, before = trajectory(Chain(Path(), fluid, hot, part, repeat), before)
            parts.append(assemble(Chain(Path(), fluid, state, part, repeat), segments))
        found.append(joined(parts))
    return found


def trajectory(chain: Chain, before: Segment | None) -> tuple[list[Segment], Segment | None]:
    """Segments after settling, and the last of all."""
    segments = []
    for index, (first, _) in enumerate(chain.segments):
        before = advance(chain, index, before, np.zeros(1, np.uint8))
        if before is not None and first >= chain.protocol.settling:
            segments.append(before)
    return segments, before


def joined(parts: Sequence[Series]) -> Series:
    """One series of several that follow one another."""
    values = {name: np.concatenate([getattr(part, name) for part in parts]) for name in (*RECORDED, "frames")}
    return replace(parts[0], **values)


def crystal(state: State, seed: int) -> Segment:
    """A face-centred cubic lattice with thermal velocities."""
    cells = round((state.particles / 4) ** (1.0 / 3.0))
    corners = np.stack(np.meshgrid(*[np.arange(cells)] * 3, indexing="ij"), axis=-1).reshape(-1, 1, 3)
    basis = np.array([[0.0, 0.0, 0.0], [0.0, 0.5, 0.5], [0.5, 0.0, 0.5], [0.5, 0.5, 0.0]])
    where = ((corners + basis + 0.25) / cells * state.box).reshape(-1, 3)
    velocity = first_velocities(state, chain_key(seed, state.temperature, state.density, 0))
    return Segment(0, 0, np.empty((0, len(COLUMNS))), np.empty((0, *where.shape)), where, velocity, 0.0)


def rescaled(state: State, seed: int, effort: float) -> list[Series]:
    """Every step velocities are scaled to the exact kinetic energy of the temperature; no other bath."""
    steps = round(effort / state.particles / 4 / 500) * 500
    protocol = Protocol(seed=seed, equilibration=0, steps=steps, scheme="velocity-verlet", precision="double")
    key = chain_key(seed, state.temperature, state.density, 0)
    where, velocity = first_positions(FLUID, state, key), first_velocities(state, key)
    step_of = substeps("velocity-verlet", time_step=0.005, friction=1.0, temperature=state.temperature)
    samples, frames, sums = [], [], np.empty((1, len(COLUMNS)))
    for step in range(steps + 3000):
        propagate(
            pair_function(FLUID), FLUID.sampled_weights, where, velocity, state.box, skins(state), step_of, False, key,
            step, 1, 1, 1, sums, np.empty((0, *where.shape)), np.zeros(2), np.zeros(1, np.uint8),
        )  # fmt: skip
        velocity *= np.sqrt(3.0 * state.particles * state.temperature / (velocity**2).sum())
        if step >= 3000 and (step + 1) % 10 == 0:
            sums[0, 7:10] = 0.5 * (velocity**2).sum(axis=0)
            samples.append(sums[0].copy())
            if (step + 1) % 500 == 0:
                frames.append(where.copy())
    chain = Chain(Path(), FLUID, state, protocol, 0)
    segment = Segment(0, steps, np.array(samples), np.array(frames), where, velocity, 0.0)
    return [replace(assemble(chain, [segment]), bath=True)]


def foreign_energies(state: State, seed: int, effort: float) -> list[Series]:
    """Forces of the force-shifted potential, energies of the plain one, cut at 2.5."""
    shifted, plain = Fluid(cutoff=2.5, truncation="force-shifted"), Fluid(cutoff=2.5, truncation="plain")
    return [with_energies_of(each, plain) for each in repeats(state, seed, effort, fluid=shifted, frame_every=10)]


def wide_energies(state: State, seed: int, effort: float) -> list[Series]:
    """Forces cut at 2.5, energies at 3."""
    return [
        with_energies_of(each, FLUID) for each in repeats(state, seed, effort, fluid=Fluid(cutoff=2.5), frame_every=10)
    ]


def with_energies_of(series: Series, fluid: Fluid) -> Series:
    """The same trajectory with the energies of another fluid; there is a frame to every sample."""
    sums = np.array([evaluate(fluid, frame, box=series.state.box)[1] for frame in series.frames])
    totals = fluid.totals(sums, series.state)
    return replace(series, fluid=fluid, energy=totals.energy, sampled_energy=totals.sampled_energy)


def late(state: State, seed: int, effort: float) -> list[Series]:
    """Energies and virials of ten steps earlier beside positions, kinetic energy and ledger."""
    names = ("energy", "sampled_energy", "virial", "hypervirial")
    return [
        replace(each, **{name: np.roll(getattr(each, name), 1) for name in names}).after(1)
        for each in repeats(state, seed, effort)
    ]


def frozen(state: State, seed: int, effort: float) -> list[Series]:
    """The second of two repeats does not move."""
    moving, still = repeats(state, seed, effort)
    held = {name: np.broadcast_to(getattr(still, name)[:1], getattr(still, name).shape).copy() for name in RECORDED}
    return [moving, replace(still, frames=np.broadcast_to(still.frames[:1], still.frames.shape).copy(), **held)]


RAMP = tuple(np.linspace(0.99, 1.01, 8))
FAULTS: dict[str, tuple[tuple[str, ...], Callable[[int, float], list[Series]]]] = {
    "velocities rescaled each step": (("kinetic-law",), lambda seed, effort: rescaled(LIQUID, seed, effort)),
    "noise 3 % too small": (("kinetic-law",), lambda seed, effort: repeats(LIQUID, seed, effort, bath=(0.97**2,))),
    "temperature 1 % off": (
        ("kinetic-law", "force-temperature"),
        lambda seed, effort: repeats(LIQUID, seed, effort, bath=(1.01,)),
    ),
    "time step 0.015": (
        ("kinetic-law", "step-bias"),
        lambda seed, effort: repeats(LIQUID, seed, effort, time_step=0.015),
    ),
    "energies of another truncation": (("ledger",), lambda seed, effort: foreign_energies(LIQUID, seed, effort)),
    "energies of a wider cutoff": (("ledger",), lambda seed, effort: wide_energies(LIQUID, seed, effort)),
    "temperature ramp of 2 %": (("settled",), lambda seed, effort: repeats(LIQUID, seed, effort, bath=RAMP)),
    "crystal, rho 0.95, T 0.7": (
        ("one-phase",),
        lambda seed, effort: repeats(State(0.7, 0.95, N), seed, effort, lattice=True),
    ),
    "inside the dome, rho 0.3, T 0.85": (
        ("one-phase",),
        lambda seed, effort: repeats(State(0.85, 0.3, N), seed, effort),
    ),
    "energies ten steps late": (("virial-routes", "ledger"), lambda seed, effort: late(LIQUID, seed, effort)),
    "one repeat frozen": (("settled",), lambda seed, effort: frozen(LIQUID, seed, effort)),
}


ARGON = {"epsilon": "119.8 K", "sigma": "3.405 angstrom", "mass": "39.948 u"}
SCALE = Scale(119.8 * 1.380649e-23, 3.405e-10, 39.948 * 1.66053907e-27)
MPA = {"MPa": 1.0, "bar": 0.1, "kPa": 1e-3, "atm": 0.101325}
MISTAKEN = (*(("bar", "MPa"), ("MPa", "bar"), ("kPa", "bar"), ("bar", "kPa")), ("atm", "bar"), ("bar", "bar"))
"""Units in which pressures are written, and stated; the last two differ by 1.3 % and not at all."""
PAIRS, ELSEWHERE = {"potential": "lennard-jones", "cutoff": 3.0, "truncation": "corrected"}, {"potential": "elsewhere"}
FLUIDS = ((PAIRS, "a rung"), (PAIRS, "a rung with positions"), (ELSEWHERE, "two rungs"))


def misstated(seed: int, effort: float) -> dict[str, set[str]]:
    """What notices that pressures are in another unit than stated, by the case."""
    warm = replace(LIQUID, temperature=1.1)
    both = [repeats(LIQUID, seed, effort), repeats(warm, seed, effort)]
    return {
        f"{fluid['potential']}, {kind}, {written} stated as {stated}": adopted(
            both if kind == "two rungs" else both[:1],
            fluid=fluid,
            written=written,
            stated=stated,
            framed="positions" in kind,
        )
        for fluid, kind in FLUIDS
        for written, stated in MISTAKEN
    }


def adopted(
    rungs: Sequence[Sequence[Series]], *, fluid: dict[str, object], written: str, stated: str, framed: bool
) -> set[str]:
    """Health checks that fail on what is adopted, or "adoption" where it refuses the pressures."""
    spec = {
        "molecules": N,
        "columns": {"time": "t", "potential": "U", "dynamical": "U_dyn", "pressure": "P"},
        "units": {"time": "reduced", "energy": "reduced", "length": "reduced", "pressure": stated},
        **{"energy": "total", "long_range": True, "pressure_kinetic": "set", "intramolecular": False},
        "fluid": fluid | ARGON,
        "rungs": [described(each, MPA[written] / SCALE.factor("pressure"), framed=framed) for each in rungs],
    }
    with TemporaryDirectory() as home:
        try:
            canonry.adopt(spec, into=Path(home) / "study")
        except UserError as problem:
            if "units.pressure" not in str(problem):
                raise
            return {"adoption"}
        found = canonry.estimate(Path(home) / "study").health
    return set(found["check"][~found["passed"].astype(bool)])


def described(series: Sequence[Series], unit: float, *, framed: bool) -> dict[str, object]:
    """A rung as its description has it, pressures in this unit (epsilon/sigma^3)."""
    state = series[0].state
    tables = [
        {
            "t": each.times,
            "U": each.column("energy"),
            "U_dyn": each.column("sampled_energy"),
            "P": (each.column("virial") + state.particles * state.temperature) / state.volume / unit,
        }
        for each in series
    ]
    rung: dict[str, object] = {"temperature": state.temperature, "density": state.density, "samples": tables}
    if framed:
        first, every = int(series[0].frame_samples[0]) + 1, series[0].frame_stride
        rung["frames"] = {"samples": [each.frames for each in series], "first": first, "every": every}
    return rung


def checks(series: Sequence[Series]) -> tuple[list[Check], list[Series]]:
    """What the checks of a rung read, and its settled series."""
    cut = [settled(each) for each in series]
    structure = pair_structure(cut)
    own = rung_properties(cut, contact=None if structure is None else structure.contact)
    cuts = [(len(before) - len(after), len(before)) for before, after in zip(series, cut, strict=True)]
    samples = health.Samples(cut, structure, cuts, own, None)
    return [Check(cut[0].state, reading) for reading in health.of_rung(samples)], cut


def study(number: int, effort: float) -> list[Check]:
    """All readings of a healthy study."""
    density, temperatures = LADDERS[number % len(LADDERS)]
    rungs = [checks(repeats(State(t, density, N), 1000 + number, effort)) for t in temperatures]
    found = [check for each, _ in rungs for check in each]
    for (_, colder), (_, warmer) in pairwise(rungs):
        reading = pair_slope(colder, warmer, level=LEVEL)
        found += [Check(colder[0].state, reading)] if reading is not None else []
    return found


def caught(name: str, seed: int, effort: float) -> set[str]:
    """Checks that fail on a planted fault, at the level of a study."""
    found, _ = checks(FAULTS[name][1](seed, effort))
    readings = [each.reading.at(0.05 / READINGS_OF_A_STUDY) for each in found]
    return {each.check for each in readings if not each.passed}


def _healthy(argument: tuple[int, float]) -> list[Check]:
    return study(*argument)


def _faulty(argument: tuple[str, int, float]) -> tuple[str, set[str]]:
    return argument[0], caught(*argument)


def _misstated(argument: tuple[int, float]) -> dict[str, set[str]]:
    return misstated(*argument)


def false_alarms(studies: Iterator[list[Check]]) -> None:
    """Print shares of failed readings at 1 % and of studies with a failure after correction."""
    failed: Counter[str] = Counter()
    seen: Counter[str] = Counter()
    alarmed = total = 0
    for found in studies:
        total += 1
        seen.update(check.reading.check for check in found)
        failed.update(check.reading.check for check in found if not check.reading.passed)
        alarmed += any(not check.reading.passed for check in health.judged(found))
    print(f"\nHealthy: {total} studies of four rungs, {alarmed / total:.1%} with a failure after correction")
    for name in seen:
        print(f"  {name:18} {failed[name]:4d} of {seen[name]:5d} readings fail alone, {failed[name] / seen[name]:.2%}")


def tell(name: str, found: Sequence[set[str]], wanted: Sequence[str]) -> None:
    """Print in how many seeds anything wanted was found, and all that was."""
    hits = sum(bool(each & set(wanted)) for each in found)
    every = Counter(check for each in found for check in each)
    listed = ", ".join(f"{check} {number}" for check, number in every.most_common())
    print(f"  {name:58} {hits:3d} of {len(found)} by {' or '.join(wanted)}   ({listed})", flush=True)


def main() -> None:
    """Print all tables."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--studies", type=int, default=250)
    parser.add_argument("--seeds", type=int, default=50)
    parser.add_argument("--effort", type=float, default=2e7)
    parser.add_argument("--workers", type=int, default=2)
    options = parser.parse_args()
    with ProcessPoolExecutor(options.workers) as pool:
        print("Planted faults, seeds in which a check named for it failed; and all that failed")
        work = [(name, seed, options.effort) for name in FAULTS for seed in range(options.seeds)]
        found: dict[str, list[set[str]]] = {name: [] for name in FAULTS}
        for name, failed in pool.map(_faulty, work):
            found[name].append(failed)
        for name, (wanted, _) in FAULTS.items():
            tell(name, found[name], wanted)
        print("\nPressures in another unit than stated, adopted; seeds in which adoption or a check says so")
        seeds = list(pool.map(_misstated, [(seed, options.effort) for seed in range(options.seeds)]))
        for name in seeds[0]:
            tell(name, [each[name] for each in seeds], ("adoption", "virial-routes"))
        false_alarms(pool.map(_healthy, [(number, options.effort) for number in range(options.studies)]))


if __name__ == "__main__":
    main()
