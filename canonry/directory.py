"""The study directory: where it is, whose it is, and files that are written whole or not at all."""

from __future__ import annotations

import os
from dataclasses import asdict
from pathlib import Path

from canonry.adopted import is_adopted
from canonry.errors import UserError
from canonry.study import Study
from canonry.study import load as load_file

__all__ = ["STUDY", "claim", "continues", "held", "load", "locate", "must_sample", "stored", "write"]

STUDY = "study.toml"


def load(path: str | Path) -> Study:
    """The study of a study file or of a study directory. Raises UserError if there is none, or a value is refused."""
    path = Path(path)
    return stored(path) if path.is_dir() else load_file(path)


def locate(path: Path, into: Path | None = None) -> tuple[Study, Path]:
    """A study and its directory, from a study file or from the directory itself.

    into : the directory; by default the name of the study file without its suffix, in the current directory
    What a study file leaves out is as in the study of the samples that are there already, see `canonry.study.load`.
    Raises UserError if there is no such study, or `into` contradicts the directory given.
    """
    if not path.is_dir():
        directory = into or Path(path.stem)
        return load_file(path, earlier=_sampled(directory)), directory
    if into is not None and into.resolve() != path.resolve():
        raise UserError(f"--into {into}: {path} is a study directory itself; what is accepted is its study file")
    return stored(path), path


def stored(directory: Path) -> Study:
    """The study that a directory holds. Raises UserError if it holds none."""
    file = directory / STUDY
    if not file.is_file():
        raise UserError(
            f"{directory}: this is no study directory, there is no {STUDY} in it; what is needed is a study file, or a "
            "directory that `canonry run` has made of one"
        )
    return load_file(file)


def must_sample(study: Study, directory: Path) -> None:
    """Raises UserError if the samples of a study, or those in the directory, were adopted."""
    if study.adopted is not None or is_adopted(directory):
        raise UserError(
            f"{directory}: its samples were adopted, so there is nothing to sample here; what is accepted is `canonry "
            "estimate`, `canonry compare` and `canonry report`"
        )


def claim(study: Study, directory: Path) -> None:
    """Make a directory that of a study: create it, or see that what it holds may stay, and write its study.toml.

    Raises UserError if the directory belongs to another study, holds other things or cannot be written.
    """
    must_sample(study, directory)
    try:
        directory.mkdir(parents=True, exist_ok=True)
        _check_owner(study, directory)
        if not _holds(directory / STUDY, study.to_toml()):
            write(directory / STUDY, study.to_toml())
    except OSError as problem:
        raise UserError(
            f"{directory}: it cannot be used as study directory ({problem.strerror or problem}); what is needed is a "
            "directory that can be written: choose one with --into"
        ) from None


def write(path: Path, text: str) -> None:
    """Write a text file under a temporary name, force it to disk, then rename. Raises OSError as the system does."""
    temporary = path.with_name(f".{path.name}.{os.getpid()}")
    try:
        with temporary.open("w", encoding="utf-8", newline="") as file:
            file.write(text)
            file.flush()
            os.fsync(file.fileno())
        os.replace(temporary, path)
    finally:
        temporary.unlink(missing_ok=True)


def continues(study: Study, directory: Path) -> bool:
    """Whether a directory holds samples that a study can go on from. Raises UserError if its own study is refused."""
    earlier = _sampled(directory)
    return earlier is not None and _identity(earlier) == _identity(study)


def held(study: Study, directory: Path) -> Study | None:
    """The study that a directory holds, sampled or not, if it differs in nothing but what may change; else None."""
    earlier = stored(directory) if (directory / STUDY).is_file() else None
    return earlier if earlier is not None and _identity(earlier) == _identity(study) else None


def _sampled(directory: Path) -> Study | None:
    """The study that the samples of a directory belong to; None where there are none."""
    there = (directory / STUDY).is_file() and any(directory.glob("rungs/*/*/segment-*.h5"))
    return stored(directory) if there else None


def _holds(path: Path, text: str) -> bool:
    return path.exists() and path.read_text(encoding="utf-8") == text


def _check_owner(study: Study, directory: Path) -> None:
    if not (directory / STUDY).exists():
        others = sorted(entry.name for entry in directory.iterdir() if not entry.name.startswith("."))
        if others:
            raise UserError(
                f"{directory}: it holds {others[0]} but no {STUDY}, so it is no study directory; what is accepted is a "
                "new or empty directory: choose one with --into"
            )
        return
    earlier = _sampled(directory)
    if earlier is None:
        return
    found, wanted = _identity(earlier), _identity(study)
    for key, value in wanted.items():
        if found[key] != value:
            raise UserError(
                f"{directory}: it belongs to another study, {key} is {found[key]} there and {value} in this one; what "
                f"is accepted is the same {key}, or another directory with --into. Steps, temperatures, densities, "
                "points, repeats, [until], [compare] and title may change"
            )


def _identity(study: Study) -> dict[str, object]:
    """What all samples of a study share, by key of the study file."""
    scale = {"epsilon": study.epsilon, "sigma": study.sigma, "mass": study.mass}
    fluid = {**asdict(study.fluid), **scale, "ideal_heat_capacity": study.ideal_heat_capacity}
    return {
        **{f"fluid.{name}": value for name, value in fluid.items()},
        "state.particles": study.states[0].particles,
        **{f"sampling.{name}": value for name, value in study.sampling.identity.items()},
    }
