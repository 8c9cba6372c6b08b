"""The command line."""

from __future__ import annotations

import json
import os
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Any, TypeVar

import click

if TYPE_CHECKING:
    from canonry.border import Border
    from canonry.results import Results
    from canonry.study import Study

__all__ = ["main"]

Command = TypeVar("Command", bound=Callable[..., Any])
# Vectors here are short: threads of the linear algebra library would only wait for each other.
for _library in ("OPENBLAS", "MKL", "OMP"):
    os.environ.setdefault(f"{_library}_NUM_THREADS", "1")

_EXITS = {"agrees": 0, "disagrees": 3, "undecided": 4}


class _Commands(click.Group):
    """Commands whose refusals are one paragraph and exit code 2."""

    def invoke(self, ctx: click.Context) -> Any:
        try:
            return super().invoke(ctx)
        except KeyboardInterrupt:
            click.echo("Interrupted. Finished segments are kept; the same command goes on from there.", err=True)
            ctx.exit(130)
        except BrokenPipeError:
            raise
        except _refusals() as problem:
            click.echo(f"Error: {_paragraph(problem)}", err=True)
            ctx.exit(2)


def _refusals() -> tuple[type[Exception], ...]:
    """What a user can mend; loaded only when something has gone wrong."""
    from canonry.errors import UserError
    from estimators.errors import EstimatorsError
    from reference.errors import ReferenceRefusal
    from sampler.errors import SamplerError

    return UserError, SamplerError, EstimatorsError, ReferenceRefusal, OSError


def _paragraph(problem: Exception) -> str:
    if isinstance(problem, OSError) and problem.filename is not None and problem.strerror:
        return f"{problem.filename}: {problem.strerror}; what is needed is a file or directory that can be used"
    return " ".join(str(problem).split())


def _path(name: str) -> Callable[[Command], Command]:
    return click.argument(name, type=click.Path(path_type=Path))


_into = click.option(
    "--into", type=click.Path(path_type=Path), help="Study directory; else the study file's name, in the current one."
)
_workers = click.option("--workers", type=click.IntRange(min=1), help="Threads; else one for every core.")
_units = click.option("--units", type=click.Choice(["reduced", "SI"]), help="Units of results; else the study's.")
_json = click.option("--json", "as_json", is_flag=True, help="Print JSON.")


@click.group(cls=_Commands, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="canonry")
def main() -> None:
    """Heat capacity and pressure curves of a model fluid from canonical sampling, with error bars that hold."""


@main.command("new")
@_path("file")
@click.option("--fluid", help="A fluid with published parameters, such as argon.")
def _new(file: Path, fluid: str | None) -> None:
    """Write a commented study file to start from."""
    from canonry.errors import UserError
    from canonry.starter import starter_text

    text = starter_text(fluid)
    try:
        with file.open("x", encoding="utf-8") as stream:
            stream.write(text)
    except FileExistsError:
        raise UserError(f"{file}: it exists and is left as it is; what is accepted is the name of a new file") from None
    click.echo(f"{file} is written. Next: canonry check {file}")


@main.command("check")
@_path("study")
@click.option("--bias", help="Of the energy per particle, to propose a time step for: 0.002, or '0.01 kJ/mol'.")
@_workers
@_json
def _check(study: Path, bias: str | None, workers: int | None, as_json: bool) -> None:
    """Validate a study and show its plan: cost, overlaps, warnings. Samples nothing."""
    from dataclasses import asdict

    from canonry.border import Border
    from canonry.directory import continues, locate, must_sample
    from canonry.plan import plan
    from canonry.proposal import bias_of
    from canonry.sampling import left
    from canonry.terminal import left_text, plan_text

    found, directory = locate(study)
    must_sample(found, directory)
    allowed = None if bias is None else bias_of(bias, found)
    found = _resolved(found, directory, workers)
    _tell_if_compiling()
    planned = plan(found, workers=workers, bias=allowed, directory=directory)
    lacking = left(found, directory) if continues(found, directory) else planned.particle_steps
    if as_json:
        click.echo(json.dumps(asdict(planned) | {"particle_steps_left": lacking}, indent=1))
        return
    click.echo(plan_text(found, planned, Border.of(found)))
    if lacking < planned.particle_steps:
        click.echo(left_text(directory, lacking, planned))


@main.command("run")
@_path("study")
@_into
@_workers
@_units
@click.option("--step-bias", is_flag=True, help="Sample the ends exactly too, to see what the time step shifts.")
@click.option("--second-size", type=int, metavar="N", help="Sample the ends with N particles too.")
@click.option("--constant-energy", is_flag=True, help="Sample the ends without a bath too: c_v by another route.")
def _run(study: Path, into: Path | None, workers: int | None, units: Any, **wanted: Any) -> None:
    """Sample, estimate, compare and report in one go; again: resume, extend, or say that all is there."""
    from canonry.beside import asked
    from canonry.border import Border
    from canonry.directory import locate, must_sample
    from canonry.job import is_finished, report

    found, directory = locate(study, into)
    must_sample(found, directory)
    found = _resolved(found, directory, workers)
    border = Border.of(found, units)
    beside = asked(found, directory, **wanted)
    if is_finished(found, directory, units, beside=beside):
        click.echo(f"{directory} is finished: nothing is missing.\n")
    else:
        _fill(found, directory, workers, border)
        for each in beside:
            _fill(each.study, each.place, workers, border)
        with _working() as watch:
            results = report(directory, units=units, watch=watch)
        _tell_caveats(results)
    _close(directory, "Tables and report.html")
    _tell_precision(found, directory, border)


@main.command("sample")
@_path("study")
@_into
@_workers
def _sample(study: Path, into: Path | None, workers: int | None) -> None:
    """Sample what a study lacks, without estimating anything."""
    from canonry.border import Border
    from canonry.directory import locate, must_sample

    found, directory = locate(study, into)
    must_sample(found, directory)
    found = _resolved(found, directory, workers)
    border = Border.of(found)
    _fill(found, directory, workers, border)
    _tell_precision(found, directory, border)
    click.echo(f"{directory} holds all samples. Next: canonry run {directory}")


@main.command("estimate")
@_path("study")
@_into
@_units
def _estimate(study: Path, into: Path | None, units: Any) -> None:
    """Write the tables from what has been sampled so far."""
    from canonry.directory import locate
    from canonry.job import estimate

    _, directory = locate(study, into)
    with _working() as watch:
        results = estimate(directory, units=units, watch=watch)
    _tell_caveats(results)
    _close(directory, "Tables")
    if (directory / "report.html").exists():
        click.echo(f"The report.html there is older; `canonry report {directory}` writes it anew.")


@main.command("reweight")
@_path("study")
@_into
@click.option("-T", "--temperature", "temperatures", multiple=True, help='Such as 1.05 or "120 K"; may be repeated.')
@click.option("--density", "densities", multiple=True, help='Such as 0.803 or "1.36 g/cm3"; may be repeated.')
@click.option("--pressure", help='In place of a density: such as 0.5 or "20 MPa"; needs several isochores.')
@click.option("--epsilon", help="Of another fluid: times that of the study, or with a unit.")
@click.option("--sigma", help="Of another fluid: times that of the study, or with a unit.")
@_units
@_json
def _reweight(study: Path, into: Path | None, units: Any, as_json: bool, **asked: Any) -> None:
    """Properties at states never sampled, from all rungs together; refused where they have no support."""
    from canonry.border import Border
    from canonry.directory import locate, stored
    from canonry.reweighting import reweight
    from canonry.terminal import reweighted_text

    _, directory = locate(study, into)
    with _working() as watch:
        table = reweight(directory, units=units, watch=watch, **asked)
    if as_json:
        click.echo(table.to_json(orient="records", indent=1))
    else:
        records = [dict(zip(table.columns, row, strict=True)) for row in table.itertuples(index=False)]
        click.echo(reweighted_text(records, Border.of(stored(directory), units)))


@main.command("compare")
@_path("study")
@_into
@click.option("--against", multiple=True, help="Name of a reference, see `canonry reference`; may be repeated.")
@_units
@_json
def _compare(study: Path, into: Path | None, against: tuple[str, ...], units: Any, as_json: bool) -> None:
    """Hold the estimates against references; exit code 0 agrees, 3 disagrees, 4 undecided. Writes nothing."""
    from canonry.border import Border
    from canonry.directory import locate, stored
    from canonry.job import compare
    from canonry.terminal import verdict_text

    _, directory = locate(study, into)
    with _working() as watch:
        table = compare(directory, against=against or None, units=units, watch=watch)
    if as_json:
        click.echo(table.to_json(orient="records", indent=1))
    else:
        records = [dict(zip(table.columns, row, strict=True)) for row in table.itertuples(index=False)]
        click.echo(verdict_text(records, Border.of(stored(directory), units)))
    sys.exit(max((_EXITS[outcome] for outcome in table["outcome"][table["temperature"].isna()]), key=[0, 4, 3].index))


@main.command("report")
@_path("study")
@_into
@_units
def _report(study: Path, into: Path | None, units: Any) -> None:
    """Write tables and report.html from what has been sampled so far."""
    from canonry.directory import locate
    from canonry.job import report

    _, directory = locate(study, into)
    with _working() as watch:
        report(directory, units=units, watch=watch)
    click.echo(f"{directory / 'report.html'} is written.")


@main.command("adopt")
@_path("spec")
@click.option("--into", type=click.Path(path_type=Path), required=True, help="A new or empty directory.")
def _adopt(spec: Path, into: Path) -> None:
    """Bring in samples that were taken elsewhere, as SPEC describes them. Then: canonry report DIR."""
    from canonry.adoption import adopt, adoption_text

    with _working() as watch:
        adoption = adopt(spec, into=into, watch=watch)
    click.echo(adoption_text(adoption))


@main.command("reference")
@click.argument("name", required=False)
@click.option("-T", "--temperature", "temperatures", type=float, multiple=True, help="epsilon/k_B; may be repeated.")
@click.option("--density", "densities", type=float, multiple=True, help="sigma^-3; may be repeated.")
@_json
def _reference(name: str | None, temperatures: tuple[float, ...], densities: tuple[float, ...], as_json: bool) -> None:
    """Show which references exist, or the values of one at given states, in reduced units."""
    from canonry.known import as_text, described, names, values, values_text

    if name is None:
        if temperatures or densities:
            raise click.UsageError("values at a state need the NAME of a reference")
        records = [described(each) for each in names()]
        click.echo(json.dumps(records, indent=1) if as_json else "\n\n".join(map(as_text, records)))
    elif not (temperatures or densities):
        record = described(name)
        click.echo(json.dumps(record, indent=1) if as_json else as_text(record))
    elif not (temperatures and densities):
        raise click.UsageError("values at a state need both -T and --density")
    else:
        rows = values(name, temperatures=temperatures, densities=densities)
        click.echo(json.dumps(rows, indent=1) if as_json else values_text(rows))


def _resolved(study: Study, directory: Path, workers: int | None) -> Study:
    """With the rungs of its ladder, chosen by a pilot where none are yet."""
    from canonry.ladder import resolved

    if study.ladder is not None and not study.ladder.is_chosen:
        _tell_if_compiling()
    return resolved(study, directory, workers=workers)


def _fill(study: Study, directory: Path, workers: int | None, border: Border) -> None:
    from canonry.attainment import announced
    from canonry.directory import claim
    from canonry.plan import plan
    from canonry.progress import display
    from canonry.sampling import sample
    from canonry.terminal import left_text, plan_text, wrapped
    from canonry.until import rounds

    claim(study, directory)
    for each in rounds(study, directory):
        todo = each.todo
        for path in todo.aside:
            click.echo(f"A damaged segment is put aside as {path} and sampled again.", err=True)
        if not todo.particle_steps:
            continue
        _tell_if_compiling()
        if each.number == 0:
            planned = plan(study, workers=workers)
            click.echo(f"{plan_text(study, planned, border)}\n", err=True)
            if todo.particle_steps < planned.particle_steps:
                click.echo(left_text(directory, todo.particle_steps, planned), err=True)
        else:
            click.echo(wrapped(announced(each.number, each.shares, todo.particle_steps, border)), err=True)
        with display(study, todo, border, round_number=each.number) as watch:
            sample(study, directory, workers=workers, watch=watch, todo=todo)


def _tell_if_compiling() -> None:
    from sampler.compiled import is_cached

    if not is_cached():
        click.echo("Compiling for this machine, once: about half a minute.", err=True)


@contextmanager
def _working() -> Iterator[Any]:
    """Says what is worked on, on a terminal only."""
    if not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console

    with Console(stderr=True).status("reading the samples") as status:
        yield status.update


def _tell_caveats(results: Results) -> None:
    from canonry.terminal import wrapped

    for caveat in results.caveats:
        click.echo(wrapped(f"Caveat: {caveat}"), err=True)


def _tell_precision(study: Study, directory: Path, border: Border) -> None:
    """Whether what [until] asks for is met, where it asks for anything."""
    if study.until is None:
        return
    from canonry.attainment import outcome
    from canonry.terminal import wrapped

    click.echo(wrapped(outcome(study, directory, border)))


def _close(directory: Path, written: str) -> None:
    from canonry.terminal import closing_text

    click.echo(closing_text(directory))
    click.echo(f"\n{written} are in {directory}.")
