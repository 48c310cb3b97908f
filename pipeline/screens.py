"""What commands show on a terminal, as text: the mode table, a forecast, the ledger, the list of results.

Values in, text out; nothing is printed here, and no figure is worked out.
"""

from __future__ import annotations

import sys
from collections import Counter
from collections.abc import Sequence
from typing import Any

from rich.console import Console
from rich.table import Table

from shardfold.budget import MIB
from shardfold.history import ResultRow, ShardRow
from shardfold.publish import CAUTION
from shardfold.results import Result, mode_rows
from shardfold.verify import Verification

READING = (
    "Accuracy: at most this far from the exact mode of these data (computation). Sampling: how far the exact mode may "
    "be from that of the process, nine times in ten (length of the campaign). A group counts as one space."
)
MOST_REFUSED = 10
PLAIN_WIDTH, TABLE_WIDTH = 120, 1000


def result_text(result: Result, quiet: bool) -> str:
    """Return the mode table under a line about the campaign; what to do next and the caution unless ``quiet``."""
    q = result.manifest["quality"]
    heading = (
        f"{result.manifest['campaign']}: {q['channels']:,} channels, {q['samples']:,} samples, "
        f"{len(result.manifest['shards']):,} shards, {result.manifest['reads']} read(s); "
        f"removed: {q['removed']}; tolerance {q['tolerance_deg']:g} deg"
    )
    head, *rows = mode_rows(result)
    notes = () if quiet else (f"Next: {result.next_step}", READING, CAUTION)
    return _rendered(heading, _table(head, rows, left=("verdict",)), notes)


def ledger_text(number: int, rows: Sequence[ShardRow], everything: bool) -> str:
    """Return how many shards are in which state, and those that are not simply in, or all of them."""
    counts = Counter(row.state for row in rows)
    heading = f"ledger {number}: " + (", ".join(f"{n} {state}" for state, n in sorted(counts.items())) or "no shards")
    shown = [row for row in rows if everything or row.state != "in"]
    head = ["shard", "state", "samples", "first", "last", "why", "by", "when"]
    cells = [
        [row.key, row.state, f"{row.rows:,}", row.first or "-", row.last or "-", row.why or "-", row.author or "-",
         row.when or "-"]
        for row in shown
    ]  # fmt: skip
    return _rendered(heading, _table(head, cells, left=("shard", "state", "why", "by")) if cells else None, ())


def verification_text(found: Verification) -> str:
    """Return what was looked at, and every fault."""
    looked = f"{found.commits} commits, {found.cells} cells, {found.sums} sums, {found.results} results"
    if not found.faults:
        return f"sound: {looked}"
    faults = [f"{fault.where}\n  rule: {fault.rule}\n  got: {fault.got}" for fault in found.faults]
    return "\n".join([f"{len(faults)} fault{'' if len(faults) == 1 else 's'} in {looked}", *faults])


def results_text(rows: Sequence[ResultRow]) -> str:
    """Return the published results, one line each."""
    head = ["result", "published", "ledger", "shards", "samples", "modes", "reads", "energy %", "removed", "verdicts"]
    cells = [
        [row.folder.rstrip("/"), row.published[:16], str(row.ledger_number), f"{row.shards:,}", f"{row.samples:,}",
         str(row.modes), str(row.reads), f"{100 * row.captured_fraction:.3f}", row.removed,
         ", ".join(f"{count} {verdict}" for verdict, count in row.verdicts.items())
         + (f" (--set {', '.join(row.overrides)})" if row.overrides else "")]
        for row in rows
    ]  # fmt: skip
    heading = f"{len(rows)} result{'' if len(rows) == 1 else 's'}"
    return _rendered(heading, _table(head, cells, left=("result", "removed", "verdicts")) if cells else None, ())


def closeness_text(rows: Any) -> str:
    """Return how close the demo's modes came to the beam it was made from."""
    lines = [
        "",
        "Set against the beam that the demo was made from:",
        "mode  bending shape     MAC   frequency Hz   built in Hz   ratio (1 : 4 : 9)",
    ]
    for row in rows:
        lines.append(
            f"{row.mode:>4}  {row.shape:>13}  {row.mac:.4f}  {row.found_hz:>12.3f}  {row.beam_hz:>12.3f}"
            f"   {row.ratio:.2f} : {row.beam_ratio}"
        )
    return "\n".join(lines)


def forecast_text(f: dict[str, Any]) -> str:
    """Return a forecast, a line for each thing that matters, and the first refused shards."""
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
    told = [f"{name:>9}  {text}" for name, text in lines.items()]
    told += [f"  refused  {key}: {why}" for key, why in list(shards["refused"].items())[:MOST_REFUSED]]
    return "\n".join(told)


def _table(head: Sequence[str], rows: Sequence[Sequence[str]], left: Sequence[str]) -> Table:
    table = Table(box=None, pad_edge=False, header_style="bold")
    for title in head:
        table.add_column(title, justify="left" if title in left else "right", no_wrap=True)
    for row in rows:
        table.add_row(*row)
    return table


def _rendered(heading: str, table: Table | None, notes: Sequence[str]) -> str:
    """Return all of it: notes in lines of the terminal's width, the table as wide as it is."""
    narrow = Console(highlight=False, width=None if sys.stdout.isatty() else PLAIN_WIDTH)
    wide = Console(highlight=False, soft_wrap=True, width=TABLE_WIDTH)
    with wide.capture() as rows:
        wide.print(heading, markup=False)
        if table is not None:
            wide.print(table)
    with narrow.capture() as lines:
        for note in notes:
            narrow.print(note, markup=False)
    return "\n".join(line.rstrip() for line in (rows.get() + lines.get()).splitlines())


def _mib(count: float) -> str:
    return f"{count / MIB:,.0f} MiB" if count >= 10 * MIB else f"{count / MIB:,.2f} MiB"
