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
from rich.console import Console
from rich.table import Table

from shardfold import demo as demonstration
from shardfold.budget import MIB
from shardfold.decisions import Decision, readmit, withdraw
from shardfold.errors import InputError, JobInvalid, ShardfoldError, Stopped
from shardfold.executor import Executor, SerialExecutor
from shardfold.forecast import forecast
from shardfold.job import Job, load_job
from shardfold.progress import Teller
from shardfold.publish import CAUTION
from shardfold.results import Result, mode_rows, open_result
from shardfold.run import Report, run
from shardfold.site import local_places, open_dossier

F = TypeVar("F", bound=Callable[..., Any])

REFUSED_STATUS = 3
READING = (
    "Accuracy: at most this far from the exact mode of these data (computation). Sampling: how far the exact mode may "
    "be from that of the process, nine times in ten (length of the campaign). A group counts as one space."
)


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
        _print_forecast(found.figures)
    if found.refusal is not None:
        click.echo(f"shardfold: a run would be refused: {found.refusal}", err=True)
        sys.exit(found.refusal.exit_status)


@commands.command("run")
@_of_job
@_common
def run_command(job: Path, overrides: tuple[str, ...], endpoint: str | None, as_json: bool, quiet: bool) -> None:
    """Do what is outstanding, and only that. Safe to repeat, to kill, to start twice."""
    settings = load_job(job, overrides, endpoint)
    with Teller(quiet) as teller:
        report = run(settings, lambda: make_executor(settings), teller)
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
        _print_result(found, quiet)


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
        _print_result(found, quiet)
        _print_closeness(rows)
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


def _print_result(result: Result, quiet: bool) -> None:
    heading, *rows = mode_rows(result)
    table = Table(box=None, pad_edge=False, header_style="bold")
    for title in heading:
        table.add_column(title, justify="left" if title == "verdict" else "right", no_wrap=True)
    for row in rows:
        table.add_row(*row)
    console = Console(highlight=False, soft_wrap=True, width=None if sys.stdout.isatty() else 120)
    with console.capture() as text:
        _write_result(console, table, result, quiet)
    click.echo(text.get(), nl=False)


def _write_result(console: Console, table: Table, result: Result, quiet: bool) -> None:
    q = result.manifest["quality"]
    console.print(
        f"{result.manifest['campaign']}: {q['channels']:,} channels, {q['samples']:,} samples, "
        f"{len(result.manifest['shards']):,} shards, {result.manifest['reads']} read(s); "
        f"removed: {q['removed']}; tolerance {q['tolerance_deg']:g} deg",
        markup=False,
    )
    console.print(table)
    if not quiet:
        for text in (f"Next: {result.next_step}", READING, CAUTION):
            console.print(text, markup=False, soft_wrap=False)


def _print_closeness(rows: Any) -> None:
    click.echo("\nSet against the beam that the demo was made from:")
    click.echo("mode  bending shape     MAC   frequency Hz   built in Hz   ratio (1 : 4 : 9)")
    for row in rows:
        click.echo(
            f"{row.mode:>4}  {row.shape:>13}  {row.mac:.4f}  {row.found_hz:>12.3f}  {row.beam_hz:>12.3f}"
            f"   {row.ratio:.2f} : {row.beam_ratio}"
        )


def _print_forecast(f: dict[str, Any]) -> None:
    reads, memory, work, shards = f["reads"], f["memory"], f["work"], f["shards"]
    again = reads["bytes_further"] + reads["bytes_for_coefficients"]
    lines = {
        "campaign": f"{f['campaign']}: {shards['to_take_in']:,} shards, {f['samples']:,} samples, "
        f"{f['channels']:,} channels; footers read: {shards['footers_read']}",
        "span": " to ".join(f["span"]) if f["span"] else "no times",
        "left": f"{shards['left_for_later']} too young, {len(shards['refused'])} refused, "
        f"{shards['withdrawn']} withdrawn, {shards['not_listed_any_more']} kept though no longer listed",
        "summary": f["summary"],
        "leaf": f"{f['leaf']}; {f['cells']['all']:,} cells, {f['cells']['stored']:,} of them stored",
        "reads": f"{reads['passes']} pass(es): {_mib(reads['bytes_first'])} now, {_mib(again)} again"
        f"{'; more where the tolerance asks for it' if reads['more_if_needed'] else ''}",
        "work": f"{work['flops']:.3g} flops, about {work['seconds_about']:,} s with {work['workers']} worker(s) "
        f"({work['assumed_read_rate']} assumed; start-up apart)",
        "memory": f"{_mib(memory['worker_bytes'])} per worker (limit {_mib(memory['worker_limit_bytes'])}), "
        f"driver {_mib(memory['driver_bytes'])}, object store {_mib(memory['object_store_bytes'])}, "
        f"node {_mib(memory['node_bytes'])}",
        "storage": f"{_mib(f['storage_bytes'])} in the dossier",
        "dossier": f["dossier"],
    }
    for name, text in lines.items():
        click.echo(f"{name:>9}  {text}")
    for key, why in list(shards["refused"].items())[:10]:
        click.echo(f"  refused  {key}: {why}")


def _mib(count: float) -> str:
    return f"{count / MIB:,.0f} MiB" if count >= 10 * MIB else f"{count / MIB:,.2f} MiB"
