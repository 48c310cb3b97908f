"""The invariants of a dossier, asserted anew from storage: digests, links, sums against their children, results.

Nothing is written and nothing of the campaign is read. Every fault is collected with the key it was found at, so one
damaged object hides no other; tests call the same functions.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from shardfold import artifacts, layout
from shardfold.blas import one_thread
from shardfold.dossier import Dossier, load, probe_facts
from shardfold.errors import InputError, RecordCorrupt, ShardfoldError
from shardfold.ids import digest_bytes
from shardfold.kernels.whole import Shape
from shardfold.ledger import Ledger
from shardfold.ledger import load as load_ledger
from shardfold.plan import cut, tree
from shardfold.results import Result
from shardfold.store import Store
from shardfold.summaries import to_arrays
from shardfold.tables import mode_names
from shardfold.tasks import AddUp, load_summary, sum_of_children

Array = npt.NDArray[Any]

ORTHOGONAL = 1e-9
SAME_ENERGY = 1e-5  # of a mode's own energy: stored X may be in single precision
SAME_ENERGY_OF_FIRST = 1e-9


@dataclass(frozen=True)
class Fault:
    """One broken promise: where, what was promised, what was found."""

    where: str
    rule: str
    got: str


@dataclass
class Verification:
    """What was looked at, and what was wrong."""

    cells: int = 0
    sums: int = 0
    results: int = 0
    commits: int = 0
    faults: list[Fault] = field(default_factory=list)

    def note(self, error: ShardfoldError) -> None:
        """Take a broken record among the faults."""
        self.faults.append(Fault(error.where, error.rule, error.got or error.what))

    def expect(self, where: str, rule: str, holds: bool, got: Any) -> None:
        """Take a broken rule among the faults."""
        if not holds:
            self.faults.append(Fault(where, rule, str(got)))


@one_thread()
def verify(store: Store) -> Verification:
    """Return what is wrong with a dossier, and how much of it was looked at.

    Raises
    ------
    InputError
        If there is no dossier.
    """
    seen = Verification()
    try:
        dossier = load(store)
        if dossier is None:
            raise InputError("there is no dossier", where="design.json", rule="a dossier's folder", got="nothing")
        ledger = load_ledger(store)
    except RecordCorrupt as error:
        seen.note(error)
        return seen
    seen.commits = ledger.number
    for read in sorted({read for (read, _), state in ledger.leaves.items() if state.cells}):
        facts = probe_facts(store, dossier.design, read)
        if facts is None:
            seen.expect(layout.probe_key(read), "the frozen probe of every read is kept", False, "nothing")
            continue
        shape = dossier.design.shape(facts[0])
        _verify_cells(seen, dossier, ledger, read, shape, facts[1])
        _verify_sums(seen, dossier, ledger, read, shape)
    for info in store.list(layout.RESULTS):
        parsed = layout.parse_manifest(info.key)
        if parsed is not None:
            seen.results += 1
            _verify_result(seen, store, parsed[1])
    return seen


def _leaves(ledger: Ledger, read: int) -> dict[int, tuple[str, ...]]:
    return {leaf: state.cells for (r, leaf), state in sorted(ledger.leaves.items()) if r == read and state.cells}


def _verify_cells(
    seen: Verification, dossier: Dossier, ledger: Ledger, read: int, shape: Shape, probe_digest: str
) -> None:
    """Check every cell that the ledger names, and that its name is the digest of what it was made from."""
    pieces: dict[str, str] = {}
    for leaf, names in _leaves(ledger, read).items():
        rows = 0
        for name in names:
            key = layout.cell_key(read, leaf, name)
            facts = _facts_of_cell(seen, dossier, key, read, leaf)
            if facts is None:
                rows = -1
                break
            rows += facts["n"]
            pieces |= {piece["shard"]: piece["version"] for piece in facts["pieces"]}
        state = ledger.leaves[read, leaf]
        if rows >= 0:
            seen.expect(f"leaf {leaf} of read {read}", f"{state.rows} samples", rows == state.rows, rows)
    entries = [entry for entry in ledger.shards.values() if pieces.get(entry.key) == entry.version]
    shards = [entry.shard for entry in entries if entry.shard is not None]
    if seen.faults or len(shards) < len(pieces):
        return  # a shard was replaced since, and the run that follows it is outstanding
    planned: dict[int, tuple[str, ...]] = {}
    for cell in cut(shards, dossier.design, read, shape, probe_digest).cells:
        planned[cell.leaf] = (*planned.get(cell.leaf, ()), cell.name)
    for leaf, names in _leaves(ledger, read).items():
        where = f"leaf {leaf} of read {read}"
        seen.expect(where, "cells named by the digest of their inputs", planned.get(leaf) == names, ", ".join(names))


def _facts_of_cell(seen: Verification, dossier: Dossier, key: str, read: int, leaf: int) -> dict[str, Any] | None:
    try:
        facts, _ = artifacts.unpack(dossier.store.read(key), "cell", key)
    except ShardfoldError as error:
        seen.note(error)
        return None
    seen.cells += 1
    mine = (facts["read"], facts["leaf"], facts["design"])
    seen.expect(key, f"read {read}, leaf {leaf} of this design", mine == (read, leaf, dossier.design.digest), mine)
    return facts


def _verify_sums(seen: Verification, dossier: Dossier, ledger: Ledger, read: int, shape: Shape) -> None:
    """Check each stored sum of the tree that holds now against its children, bit for bit."""
    leaves, store, design = _leaves(ledger, read), dossier.store, dossier.design
    stored = {parsed[1] for info in store.list(layout.TREE) if (parsed := layout.parse_node(info.key)) is not None}
    for node in (node for level in tree(read, leaves, design.kernel) for node in level):
        if node.name not in stored:
            continue  # it is made when it is needed
        key = layout.node_key(read, node.name)
        try:
            kept = to_arrays(load_summary(store, key, "sum", design, shape))
            made = to_arrays(sum_of_children(store, design, AddUp(read, node, shape)))
        except ShardfoldError as error:
            seen.note(error)
            continue
        seen.sums += 1
        differing = [name for name in kept if kept[name].tobytes() != made[name].tobytes()]
        seen.expect(key, "the sum of its children, bit for bit", not differing, f"another {', '.join(differing)}")


def _verify_result(seen: Verification, store: Store, folder: str) -> None:
    """Check every file's digest, that modes are orthonormal, and that coefficients carry the modes' energy."""
    try:
        manifest = json.loads(bytes(store.read(folder + layout.MANIFEST)))
    except (ValueError, ShardfoldError) as error:
        seen.expect(folder + layout.MANIFEST, "a manifest", False, f"{type(error).__name__}: {error}")
        return
    result = Result(store, folder, folder, manifest)
    whole = True
    for name, digest in manifest["files"].items():
        try:
            found = digest_bytes(store.read(folder + name))
        except ShardfoldError as error:
            seen.note(error)
            whole = False
            continue
        seen.expect(folder + name, f"digest {digest}", found == digest, found)
        whole &= found == digest
    if whole:
        _verify_modes(seen, result)
        _verify_coefficients(seen, result)


def _verify_modes(seen: Verification, result: Result) -> None:
    table, held = result.modes, result.manifest["quality"]["modes"]
    names = mode_names(len(result.mode_table), "mode")[:held]
    factor = np.sqrt(table.column("weight").to_numpy()) / table.column("scale").to_numpy()
    u = np.array([table.column(name).to_numpy() for name in names]).reshape(held, len(factor)) * factor
    away = float(np.abs(u @ u.T - np.eye(held)).max(initial=0.0))
    where = f"{result.folder}modes.parquet"
    seen.expect(where, f"orthonormal modes, to {ORTHOGONAL:g}", away <= ORTHOGONAL, f"{away:.2g} away")


def _verify_coefficients(seen: Verification, result: Result) -> None:
    values = np.array([v or 0.0 for v in result.mode_table.column("singular_value").to_pylist()])
    energy = np.zeros(len(values))
    for table in _parts(result):
        names = mode_names(len(values), "c")
        energy += [float(np.square(np.nan_to_num(table.column(name).to_numpy())).sum()) for name in names]
    first = values.max(initial=0.0) ** 2
    away = np.abs(energy - values**2) - SAME_ENERGY * values**2 - SAME_ENERGY_OF_FIRST * first
    wrong = [int(i) + 1 for i in np.flatnonzero(away > 0)]
    where = f"{result.folder}coefficients/"
    seen.expect(where, "sums of squares that are those of the modes", not wrong, f"others for modes {wrong}")


def _parts(result: Result) -> Iterator[Any]:
    return (result.table(name) for name in sorted(result.manifest["files"]) if name.startswith("coefficients/"))
