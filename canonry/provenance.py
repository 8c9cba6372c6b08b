"""With what, where, when and for how long a study was sampled."""

from __future__ import annotations

import csv
import io
import os
import platform
from collections.abc import Mapping
from datetime import UTC, datetime
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path

from canonry.directory import write
from canonry.study import Study

__all__ = ["SESSIONS", "book", "duration", "provenance", "rate"]

SESSIONS = "sessions.csv"
_COLUMNS = ("started", "seconds", "particle_steps", "canonry", "machine")
_LIBRARIES = ("numpy", "scipy", "numba", "pymbar")


def book(directory: Path, *, started: datetime, seconds: float, particle_steps: int) -> None:
    """Add a stretch of sampling to the directory's sessions."""
    session = {
        "started": started.astimezone(UTC).isoformat(timespec="seconds"),
        "seconds": f"{seconds:.1f}",
        "particle_steps": str(particle_steps),
        "canonry": _version("canonry"),
        "machine": _machine(),
    }
    text = io.StringIO()
    table = csv.DictWriter(text, _COLUMNS, lineterminator="\n")
    table.writeheader()
    table.writerows([*_sessions(directory), session])
    write(directory / SESSIONS, text.getvalue())


def provenance(study: Study, directory: Path) -> dict[str, str]:
    """Label to text, in the order in which a report shows them."""
    return {
        "canonry": f"canonry {_version('canonry')}",
        "python": platform.python_version(),
        **{name: _version(name) for name in _LIBRARIES},
        **(_sampled(study, directory) if study.adopted is None else {"samples": f"adopted, {study.adopted.source}"}),
        "estimated": datetime.now(UTC).strftime("%Y-%m-%d %H:%M UTC"),
    }


def _sampled(study: Study, directory: Path) -> dict[str, str]:
    sessions = _sessions(directory)
    seconds = sum(float(session["seconds"]) for session in sessions)
    return {
        "seed": str(study.sampling.seed),
        "machine": "; ".join(dict.fromkeys(session["machine"] for session in sessions)) or _machine(),
        "sampled": _dates(sessions),
        "wall time of sampling": f"{duration(seconds)} in {len(sessions)} session{'s' if len(sessions) != 1 else ''}",
    }


def rate(directory: Path) -> float:
    """Particle-steps a second of all sampling so far; 0 where none is on record."""
    sessions = _sessions(directory)
    seconds = sum(float(session["seconds"]) for session in sessions)
    return sum(float(session["particle_steps"]) for session in sessions) / seconds if seconds else 0.0


def duration(seconds: float) -> str:
    """A time span for people: '4 min 10 s'."""
    whole = round(seconds)
    hours, minutes = whole // 3600, whole % 3600 // 60
    parts = [f"{hours} h"] if hours else []
    parts += [f"{minutes} min"] if minutes else []
    parts += [f"{whole % 60} s"] if not hours and (whole % 60 or not minutes) else []
    return " ".join(parts)


def _sessions(directory: Path) -> list[Mapping[str, str]]:
    path = directory / SESSIONS
    if not path.exists():
        return []
    with path.open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def _dates(sessions: list[Mapping[str, str]]) -> str:
    days = list(dict.fromkeys(session["started"][:10] for session in sessions))
    return "not recorded" if not days else days[0] if len(days) == 1 else f"{days[0]} to {days[-1]}"


def _version(name: str) -> str:
    try:
        return version(name)
    except PackageNotFoundError:
        return "not installed as a package"


def _machine() -> str:
    return f"{_processor()}, {os.cpu_count() or 1} cores, {platform.system()} {platform.machine()}"


def _processor() -> str:
    """The processor's name where the system tells it."""
    try:
        lines = Path("/proc/cpuinfo").read_text(encoding="utf-8").splitlines()
    except OSError:
        return platform.processor() or "processor unknown"
    names = [line.partition(":")[2].strip() for line in lines if line.startswith("model name")]
    return names[0] if names else platform.processor() or "processor unknown"
