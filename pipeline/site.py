"""Where a run stands before it reads: stores open, campaign listed, ledger replayed, dossier opened or proposed.

``check`` and ``run`` look from here, so what one forecasts is what the other does. Footers are read, measured values
never.
"""

from __future__ import annotations

import time
import uuid
from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from pathlib import Path

from shardfold import dossier as dossiers
from shardfold import layout, ledger
from shardfold.allocator import lean_memory
from shardfold.channels import ChannelTable
from shardfold.dossier import Dossier
from shardfold.errors import InputError, ShardRefused
from shardfold.events import Found, Listener, Noted
from shardfold.ids import Shard, digest_value
from shardfold.inventory import Inventory, agree, take_inventory
from shardfold.job import Job, load_job
from shardfold.job_settings import TimeStart
from shardfold.ledger import Entry, Ledger
from shardfold.quantities import format_duration
from shardfold.readers import reader_for
from shardfold.readers.batch import some_names
from shardfold.refusals import found_in, still_refused
from shardfold.store import Store, StoreSettings, connect
from shardfold.tasks import Workplace


@dataclass(frozen=True)
class Site:
    """A campaign and its dossier as they stand.

    Attributes
    ----------
    shards : dict of key to Shard
        What shall be in: listed and settled, or in the ledger and no longer listed (``absent``).
    standing : dict of key to Entry
        Refusals of this inventory and of earlier runs that still hold.
    withdrawn : dict of key to Entry
        Shards that were taken out by decision, in the versions that are listed or were last seen.
    under : str
        Digest of the source settings, by which refusals are judged.
    exists : bool
        Whether the dossier was there before.
    """

    job: Job
    campaign: Store
    dossier: Dossier
    ledger: Ledger
    inventory: Inventory
    shards: dict[str, Shard]
    absent: frozenset[str]
    standing: dict[str, Entry]
    withdrawn: dict[str, Entry]
    under: str
    exists: bool
    source_names: tuple[str, ...]

    @property
    def vanished(self) -> list[str]:
        """Return the shards that are in and neither listed nor being replaced just now."""
        return sorted(self.absent - set(self.inventory.unsettled))

    @property
    def workplace(self) -> Workplace:
        """Return what every task needs to know."""
        return Workplace(
            settings(self.job, "source"),
            settings(self.job, "dossier"),
            self.job.source,
            self.dossier.design,
            self.source_names,
        )


def settings(job: Job, which: str) -> StoreSettings:
    """Return the settings of the campaign's (``source``) or the dossier's (``dossier``) store."""
    place = job.source if which == "source" else job.dossier
    return StoreSettings(place.location, place.storage.endpoint, place.storage.region, place.storage.anonymous)


def open_dossier(place: str, endpoint: str | None, *, sound: bool = True) -> Store:
    """Return the store of a dossier that is named by a job file or by its location; ``sound``: its design is read.

    Raises
    ------
    InputError
        If there is no dossier.
    """
    if Path(place).is_file():
        place, settled = str(Path(place)), settings(load_job(Path(place), (), endpoint), "dossier")
    else:
        settled = StoreSettings(place, endpoint)
    store = connect(settled)
    if (dossiers.load(store) if sound else store.head(layout.DESIGN)) is None:
        raise InputError(
            "there is no dossier",
            where=place,
            rule="a job file, or the location of a dossier",
            got="no design.json there",
            remedy="'shardfold run JOB' creates one",
        )
    return store


def look(job: Job, listen: Listener, *, sample: int | None = None) -> Site:
    """Return how campaign and dossier stand; a dossier that does not exist is proposed, nothing is written.

    Parameters
    ----------
    job : Job
        The settings.
    listen : Listener
        Told what was found.
    sample : int, optional
        Read at most so many footers.

    Raises
    ------
    NothingToRead
        If the location does not exist or nothing matches.
    InputError
        If no shard can be read, or the job breaks a rule that only the inventory shows.
    """
    campaign, store = connect(settings(job, "source")), connect(settings(job, "dossier"))
    table = dossiers.load_job_table(job)
    stored = dossiers.load(store)
    state = ledger.load(store) if stored is not None else Ledger()
    names = table.names if table is not None else ()
    reader = reader_for(job.source, names)
    known = {} if stored is None else {k: replace(s, channels=stored.table.names) for k, s in state.known().items()}
    with lean_memory():
        inventory = take_inventory(
            campaign, reader, job.source.match, job.source.settle_ns, time.time(), known=known, limit=sample
        )
    under = digest_value(job.design_record())
    withdrawn = {key: entry for key, entry in state.shards.items() if entry.state == "withdrawn"}
    shards, standing = _sort_out(inventory, state, under)
    if standing and not shards and not any(entry.state != "refused" for entry in state.shards.values()):
        raise _nothing_readable(job, standing)
    if isinstance(job.source.time, TimeStart) and inventory.listed > 1:
        raise _one_start(inventory)
    listen(Found(len(shards), len(inventory.unsettled), len(standing)))
    opened = _open(job, store, inventory, table, stored)
    _check_agreement(shards, standing, opened, under, known)
    absent = _absent(state, inventory, shards, opened.table)
    _tell(listen, inventory, absent)
    replaced = {shard.key for shard in inventory.shards if shard.key in shards} | standing.keys()
    withdrawn = {key: entry for key, entry in withdrawn.items() if key not in replaced}
    return Site(
        job, campaign, opened, state, inventory, shards, frozenset(absent), standing, withdrawn, under,
        stored is not None, names,
    )  # fmt: skip


def _sort_out(inventory: Inventory, state: Ledger, under: str) -> tuple[dict[str, Shard], dict[str, Entry]]:
    """Part the inventory into shards to take in and refusals, those of earlier runs that still hold included.

    A shard that was withdrawn is neither, and in nobody's way.
    """
    shards, standing = {}, {}
    out = {(entry.key, entry.version) for entry in state.shards.values() if entry.state == "withdrawn"}
    listed = {s.key: s.info.version for s in inventory.shards if (s.key, s.info.version) not in out}
    for refusal in inventory.refused:
        standing[refusal.key] = Entry(refusal.key, refusal.version, "refused", under, why=dict(refusal.error_record))
    for shard in (shard for shard in inventory.shards if shard.key in listed):
        before = state.entry(shard.key, shard.info.version)
        if before is not None and before.under == under and still_refused(before, state, listed):
            standing[shard.key] = before
        else:
            shards[shard.key] = shard
    return shards, standing


def _open(
    job: Job, store: Store, inventory: Inventory, table: ChannelTable | None, stored: Dossier | None
) -> Dossier:
    if stored is None and not inventory.shards:
        raise InputError(
            "no shard is old enough to be taken in",
            where="source.settle",
            rule=f"at least {format_duration(job.source.settle_ns)} old",
            got="only younger ones",
            remedy="run again later, or --set 'source.settle=0 s' if nothing is being written",
        )
    if stored is None:
        return dossiers.propose(job, store, inventory, table)
    dossiers.check_design(stored, job, inventory, table)
    return stored


def _check_agreement(
    shards: dict[str, Shard],
    standing: dict[str, Entry],
    opened: Dossier,
    under: str,
    known: dict[tuple[str, str], Shard],
) -> None:
    """Refuse the shards whose channels are not the dossier's."""
    for key, shard in list(shards.items()):
        if (key, shard.info.version) in known:
            continue
        try:
            agree(shard, opened.table.names)
        except ShardRefused as error:
            del shards[key]
            standing[key] = Entry(key, shard.info.version, "refused", under, why=error.as_record())


def _absent(state: Ledger, inventory: Inventory, shards: dict[str, Shard], table: ChannelTable) -> list[str]:
    """Keep the shards that are in but not listed any more; return their keys."""
    listed = {s.key for s in inventory.shards} | {r.key for r in inventory.refused}
    absent = []
    for key, entry in state.shards.items():
        if entry.state in ("in", "readmitted") and key not in listed and entry.shard is not None:
            shards[key] = replace(entry.shard, channels=table.names)
            absent.append(key)
    return absent


def _tell(listen: Listener, inventory: Inventory, absent: list[str]) -> None:
    if inventory.unsettled:
        text = "left for the next run: younger than source.settle, or replaced just now"
        listen(Noted(f"{_some(inventory.unsettled)} {text}"))
    vanished = sorted(set(absent) - set(inventory.unsettled))
    if vanished:
        listen(Noted(f"{_some(vanished)} kept, though not listed any more"))


def _some(keys: Sequence[str]) -> str:
    """Return how many shards these are, and the names of the first few."""
    return f"{len(keys)} shard{'s' if len(keys) > 1 else ''} ({some_names(keys)})"


def _one_start(inventory: Inventory) -> InputError:
    return InputError(
        "more than one shard would start at the same time",
        where="source.time",
        rule="start and step describe a single shard",
        got=f"{inventory.listed} matching shards",
        remedy="source.time: {from_name: REGEX, step: ...}, a time column, or a narrower source.match",
    )


def _nothing_readable(job: Job, standing: dict[str, Entry]) -> InputError:
    key, entry = min(standing.items())
    return InputError(
        "no shard can be read",
        where=job.source.location,
        rule=entry.why.get("rule", "at least one shard that can be read"),
        got=f"{len(standing)} refused; the first is {key}: {found_in(entry)}",
        remedy=entry.why.get("remedy", "mend the shards or the source block of the job"),
    )




def local_places(job: Job, nodes: int, seen_everywhere: Callable[[Path], bool]) -> None:
    """Check that local folders are shared where the workers are on more than one node.

    Parameters
    ----------
    job : Job
        The settings.
    nodes : int
        Machines the workers are on.
    seen_everywhere : callable
        Whether every node finds a file that this node has just written.

    Raises
    ------
    InputError
        If a folder is not said to be shared, or is not seen by a node.
    """
    if nodes < 2:
        return
    for key, place in (("source", job.source), ("dossier", job.dossier)):
        folder = dossiers.local_folder(place.location)
        if folder is None:
            continue
        # The campaign is only ever read, so its folder gets no token.
        proof = _proved if key == "dossier" else lambda place, see: see(place)
        if not place.shared or not proof(folder, seen_everywhere):
            raise InputError(
                "a local folder is not seen by every node of the cluster",
                where=f"{key}.location",
                rule=f"object storage, or a folder that all {nodes} nodes share, said by {key}.shared: true",
                got=f"{place.location}, shared: {str(place.shared).lower()}",
                remedy="use s3://, or run on one machine with --set engine.workers=serial",
            )


def _proved(folder: Path, seen_everywhere: Callable[[Path], bool]) -> bool:
    """Return whether all nodes see a token written into the folder just now."""
    token = folder / f".seen-{uuid.uuid4().hex}"
    folder.mkdir(parents=True, exist_ok=True)
    token.write_bytes(b"")
    try:
        return seen_everywhere(token)
    finally:
        token.unlink()
