"""The command ``shardfold``: arguments in, settings and a call out, answers printed. The only printer.

Answers go to standard output, progress and messages to standard error. Every error ends in one of the exit statuses
that ``errors.py`` lists; a traceback on the screen is a bug and exits 70.
"""

from __future__ import annotations

import json
import os
import signal
import sys
import traceback
from collections.abc import Callable
from dataclasses import asdict
from importlib.metadata import version
from pathlib import Path
from types import FrameType
from typing import Any, TypeVar

import click

from shardfold import demo as demonstration
from shardfold.decisions import Decision, readmit, withdraw
from shardfold.errors import InputError, JobInvalid, RecordCorrupt, ShardfoldError, Stopped
from shardfold.executor import Executor, SerialExecutor
from shardfold.forecast import forecast
from shardfold.history import result_rows, shard_rows
from shardfold.job import Job, load_job
from shardfold.progress import Teller
from shardfold.results import open_result
from shardfold.run import Report, run
from shardfold.screens import closeness_text, forecast_text, ledger_text, result_text, results_text, verification_text
from shardfold.site import local_places, open_dossier
from shardfold.verify import verify

F = TypeVar("F", bound=Callable[..., Any])

REFUSED_STATUS = 3


def _common(function: F) -> F:
    for option in (
        click.option("--json", "as_json", is_flag=True, help="One JSON document on standard output."),
        click.option("--quiet", is_flag=True, help="No progress, no notes; refused shards and errors are told."),
    ):
        function = option(function)
    return function


def _of_job(function: F) -> F:
    for option in (
        click.option("--set", "overrides", multiple=True, metavar="KEY=VALUE", help="Override one key of the job."),
        click.option("--endpoint", default=None, help="S3 endpoint for locations that name none."),
        click.argument("job", type=click.Path(path_type=Path)),
    ):
        function = option(function)
    return function


@click.group(context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(package_name="shardfold")
def commands() -> None:
    """Modes, coefficients and a manifest from a campaign of shards in an object store, each shard read once."""


@commands.command("check")
@_of_job
@_common
def check_command(
    job: Path, overrides: tuple[str, ...], endpoint: str | None, as_json: bool, quiet: bool
) -> None:
    """Say what a run would do; read no measured value."""
    settings = load_job(job, overrides, endpoint)
    with Teller(quiet) as teller:
        found = forecast(settings, _planned_workers(settings), teller)
    if as_json:
        _emit(found.figures | ({} if found.refusal is None else _error_document(found.refusal)))
    else:
        click.echo(forecast_text(found.figures))
    if found.refusal is not None:
        click.echo(f"shardfold: a run would be refused: {found.refusal}", err=True)
        sys.exit(found.refusal.exit_status)


@commands.command("run")
@_of_job
@click.option("--prune", type=click.IntRange(1), default=None, metavar="N", help="Take out exactly N vanished shards.")
@_common
def run_command(
    job: Path, overrides: tuple[str, ...], endpoint: str | None, prune: int | None, as_json: bool, quiet: bool
) -> None:
    """Do what is outstanding, and only that. Safe to repeat, to kill, to start twice."""
    settings = load_job(job, overrides, endpoint)
    with Teller(quiet) as teller:
        report = run(settings, lambda: make_executor(settings), teller, prune)
    if as_json:
        _emit(asdict(report))
    else:
        _print_report(report, settings, quiet)
    if report.newly_refused:
        sys.exit(REFUSED_STATUS)


@commands.command("show")
@click.argument("result")
@click.option("--endpoint", default=None, help="S3 endpoint (or AWS_ENDPOINT_URL).")
@_common
def show_command(result: str, endpoint: str | None, as_json: bool, quiet: bool) -> None:
    """Print the mode table of a RESULT: its folder, or DOSSIER/latest."""
    found = open_result(result, endpoint)
    if as_json:
        _emit({"manifest": found.manifest, "mode_table": found.mode_table.to_pylist()})
    else:
        click.echo(result_text(found, quiet))


@commands.command("ledger")
@click.argument("dossier")
@click.option("--all", "everything", is_flag=True, help="All shards, not only those that are not simply in.")
@click.option("--endpoint", default=None, help="S3 endpoint (or AWS_ENDPOINT_URL).")
@_common
def ledger_command(dossier: str, everything: bool, endpoint: str | None, as_json: bool, quiet: bool) -> None:
    """Say which shards of a DOSSIER (a job file or a location) are in and which are not, and why."""
    number, rows = shard_rows(open_dossier(dossier, endpoint))
    if as_json:
        _emit({"ledger_number": number, "shards": [asdict(row) for row in rows]})
    else:
        click.echo(ledger_text(number, rows, everything))


@commands.command("results")
@click.argument("dossier")
@click.option("--endpoint", default=None, help="S3 endpoint (or AWS_ENDPOINT_URL).")
@_common
def results_command(dossier: str, endpoint: str | None, as_json: bool, quiet: bool) -> None:
    """List the published results of a DOSSIER, oldest first."""
    rows = result_rows(open_dossier(dossier, endpoint))
    if as_json:
        _emit({"results": [asdict(row) for row in rows]})
    else:
        click.echo(results_text(rows))


@commands.command("verify")
@click.argument("dossier")
@click.option("--endpoint", default=None, help="S3 endpoint (or AWS_ENDPOINT_URL).")
@_common
def verify_command(dossier: str, endpoint: str | None, as_json: bool, quiet: bool) -> None:
    """Assert every digest and invariant of a DOSSIER (a job file or a location) anew from storage."""
    found = verify(open_dossier(dossier, endpoint, sound=False))
    if as_json:
        _emit(asdict(found))
    elif found.faults or not quiet:
        click.echo(verification_text(found))
    if found.faults:
        sys.exit(RecordCorrupt.exit_status)


def _deciding(function: F) -> F:
    for option in (
        click.option("--because", required=True, metavar="TEXT", help="The reason; it stays in the ledger."),
        click.option("--endpoint", default=None, help="S3 endpoint (or AWS_ENDPOINT_URL)."),
        click.argument("shards", nargs=-1, required=True),
        click.argument("dossier"),
    ):
        function = option(function)
    return function


@commands.command("withdraw")
@_deciding
@_common
def withdraw_command(
    dossier: str, shards: tuple[str, ...], because: str, endpoint: str | None, as_json: bool, quiet: bool
) -> None:
    """Take SHARDS out of the sums of a DOSSIER (a job file or a location); the next run carries it out."""
    _print_decision(withdraw(open_dossier(dossier, endpoint), shards, because, version("shardfold")), as_json, quiet)


@commands.command("readmit")
@_deciding
@_common
def readmit_command(
    dossier: str, shards: tuple[str, ...], because: str, endpoint: str | None, as_json: bool, quiet: bool
) -> None:
    """Let withdrawn SHARDS back into the sums of a DOSSIER; the next run carries it out."""
    _print_decision(readmit(open_dossier(dossier, endpoint), shards, because, version("shardfold")), as_json, quiet)


@commands.command("demo")
@click.argument("folder", type=click.Path(path_type=Path))
@click.option("--s3", is_flag=True, help="Keep the campaign on a local S3 server (package extra: s3demo).")
@_common
def demo_command(folder: Path, s3: bool, as_json: bool, quiet: bool) -> None:
    """Write the Tarnmoor footbridge campaign into FOLDER, run it, and say how close the modes came."""
    with demonstration.stage(folder, s3) as scene, Teller(quiet) as teller:
        settings = load_job(scene.job, ())
        report = run(settings, lambda: make_executor(settings), teller)
        found = open_result(report.location, scene.endpoint)
        rows = demonstration.closeness(found)
        if as_json:
            _emit({"report": asdict(report), "job": str(scene.job), "closeness": [asdict(row) for row in rows]})
            return
        click.echo(result_text(found, quiet))
        click.echo(closeness_text(rows))
        click.echo(f"\nLook at\n  the job        {scene.job}\n  the result     {report.location}")
        click.echo(f"  once more      shardfold run {scene.job}   (nothing is read twice)")


def make_executor(job: Job) -> Executor:
    """Return the executor that a job asks for.

    Raises
    ------
    InputError
        If local folders would have to be seen by more than one node and are not shared.
    """
    if job.engine.workers == "serial":
        return SerialExecutor()
    # Ray takes a second to import, which serial runs and every other command do without.
    from shardfold.executor_ray import RayExecutor

    workers = None if job.engine.workers == "auto" else int(job.engine.workers)
    executor = RayExecutor(workers, job.engine.address, job.design.blas)
    local_places(job, executor.nodes(), executor.sees_on_every_node)
    return executor


def _planned_workers(job: Job) -> int:
    if job.engine.workers == "serial":
        return 1
    return (os.cpu_count() or 1) if job.engine.workers == "auto" else int(job.engine.workers)


def main(arguments: list[str] | None = None) -> None:
    """Run the command and exit with its status."""
    sys.exit(_status(arguments))


def _status(arguments: list[str] | None) -> int:
    signal.signal(signal.SIGTERM, _stop)
    as_json = "--json" in (sys.argv[1:] if arguments is None else arguments)
    try:
        commands.main(args=arguments, prog_name="shardfold", standalone_mode=False)
    except SystemExit as end:
        return int(end.code or 0)
    except click.exceptions.Exit as end:
        return end.exit_code
    except click.ClickException as error:
        error.show()
        if as_json:
            _emit(_error_document(InputError(error.format_message())))
        return InputError.exit_status
    except (KeyboardInterrupt, click.Abort):
        return _fail(_stopped(signal.SIGINT), as_json)
    except ShardfoldError as error:
        return _fail(error, as_json)
    except Exception as error:
        traceback.print_exc()
        return _fail(ShardfoldError(f"a bug: {type(error).__name__}; the lines above say where"), as_json)
    return 0


def _fail(error: ShardfoldError, as_json: bool) -> int:
    click.echo(f"shardfold: {error}", err=True)
    if as_json:
        _emit(_error_document(error))
    return error.exit_status


def _error_document(error: ShardfoldError) -> dict[str, Any]:
    faults = {"faults": list(error.faults)} if isinstance(error, JobInvalid) else {}
    return {"error": {**error.as_record(), **faults, "exit_status": error.exit_status}}


def _stop(number: int, frame: FrameType | None) -> None:
    raise _stopped(number)


def _stopped(number: int) -> Stopped:
    return Stopped(
        "stopped", signal_number=number, remedy="run the same command again; what is in storage is not read twice"
    )


def _emit(document: Any) -> None:
    click.echo(json.dumps(document, indent=1, ensure_ascii=False, default=str))


def _print_report(report: Report, job: Job, quiet: bool) -> None:
    if report.quality and not quiet:
        q = report.quality
        click.echo(
            f"{q['modes']} modes hold {100 * q['captured_fraction']:.4f} % of the energy of "
            f"{q['samples']:,} samples of {q['channels']:,} channels"
        )
        click.echo(q["next"])
    click.echo(report.location)
    if report.standing_refused:
        click.echo(f"shards refused before and still: {report.standing_refused}", err=True)


def _print_decision(made: Decision, as_json: bool, quiet: bool) -> None:
    if as_json:
        _emit(asdict(made) | {"run_outstanding": bool(made.changed)})
        return
    if quiet:
        return
    for key in made.unchanged:
        click.echo(f"{key}: as it was")
    if made.changed:
        click.echo(f"ledger {made.number}: {', '.join(made.changed)}; a run is outstanding")
