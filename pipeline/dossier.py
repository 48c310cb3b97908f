"""Opening a dossier: its design is created once, or compared with what the job asks.

After this the design and the channel table are what storage says, whatever the job said. No reading of measured
values, no tasks.
"""

from __future__ import annotations

import io
import json
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np

from shardfold import layout
from shardfold.channels import ChannelTable, default_table, read_table, to_arrow, units_conflict
from shardfold.design import FORMAT, Design, compare, resolve
from shardfold.errors import InputError, RecordCorrupt
from shardfold.ids import canonical_json, digest_bytes
from shardfold.inventory import Inventory, choose_channels
from shardfold.job import Job
from shardfold.kernels.addressed import STREAM_PROBE, name_keys, signs
from shardfold.store import Created, Store, StoreSettings, connect
from shardfold.tables import arrow_bytes


@dataclass(frozen=True)
class Dossier:
    """An open dossier: where it is, its design and its channel table."""

    store: Store
    design: Design
    table: ChannelTable


def load(store: Store) -> Dossier | None:
    """Return the stored dossier, or ``None`` where there is none.

    Raises
    ------
    RecordCorrupt
        If the design cannot be read, or the table is not the one it names.
    """
    if store.head(layout.DESIGN) is None:
        return None
    try:
        record = json.loads(bytes(store.read(layout.DESIGN)))
        if record["format"] != FORMAT:
            raise _other_format(record["format"])
        design = Design.from_record(record)
    except (ValueError, KeyError, TypeError) as error:
        raise _corrupt(layout.DESIGN, f"a design of format {FORMAT} ({type(error).__name__}: {error})") from error
    data = bytes(store.read(layout.channels_key(1)))
    if digest_bytes(data) != design.table_digest:
        raise _corrupt(layout.channels_key(1), f"digest {design.table_digest}, got {digest_bytes(data)}")
    return Dossier(store, design, read_table(data, layout.channels_key(1)))


def check_design(stored: Dossier, job: Job, inventory: Inventory, table: ChannelTable | None) -> None:
    """Check that a job asks for the design of the dossier that is there.

    Raises
    ------
    DesignDiffers
        If it does not; says what a new dossier would read.
    """
    compare(stored.design, job, channel_request(job, table), inventory.listed_bytes)


def propose(job: Job, store: Store, inventory: Inventory, table: ChannelTable | None) -> Dossier:
    """Return the dossier that a job would create, writing nothing.

    Parameters
    ----------
    job : Job
        The settings.
    store : Store
        The dossier's place.
    inventory : Inventory
        Decides ``auto`` values and channels.
    table : ChannelTable or None
        The job's channel table, read.

    Raises
    ------
    InputError
        If the channels have two units without a scale.
    """
    names = choose_channels(inventory, job.source.channels, table)
    chosen = table.select(names) if table is not None else default_table(names)
    _check_units(job, chosen)
    if job.design.scale == "none":
        chosen = replace(chosen, scale=np.ones(len(names)))
    design = resolve(job, inventory.shards, channel_request(job, table), len(names))
    return Dossier(store, replace(design, table_digest=digest_bytes(table_bytes(chosen))), chosen)


def create(wanted: Dossier) -> Dossier:
    """Write a new dossier's table, probe and, last, its design; return what is stored then.

    Another writer that was faster wins: its design is returned.
    """
    store, design = wanted.store, wanted.design
    store.check_writable()
    _lay_down(store, layout.channels_key(1), table_bytes(wanted.table))
    if not design.identity:
        rows = signs(design.seed, STREAM_PROBE, name_keys(wanted.table.names), design.width)
        _lay_down(store, layout.probe_key(1), npy_bytes(rows))
    if store.create(layout.DESIGN, canonical_json(design.record())) is not Created.LANDED:
        stored = load(store)
        if stored is not None:
            return stored
    return wanted


def channel_request(job: Job, table: ChannelTable | None) -> str:
    """Return what the job says of channels in words, for comparing without an inventory."""
    asked = job.source.channels
    include = "all" if asked.include is None else json.dumps(asked.include)
    content = "no table" if table is None else f"a table of digest {digest_bytes(table_bytes(table))}"
    return f"include {include}, exclude {json.dumps(asked.exclude)}, {content}"


def load_job_table(job: Job) -> ChannelTable | None:
    """Return the channel table the job names, or ``None``."""
    name = job.source.channels.table
    if name is None:
        return None
    folder, _, key = name.rpartition("/")
    storage = job.source.storage
    data = connect(StoreSettings(folder or "/", storage.endpoint, storage.region, storage.anonymous)).read(key)
    return read_table(bytes(data), name)


def table_bytes(table: ChannelTable) -> bytes:
    """Return a channel table as it is stored."""
    return arrow_bytes(to_arrow(table))


def npy_bytes(rows: np.ndarray[Any, Any]) -> bytes:
    """Return an array as the bytes of a ``.npy`` file."""
    sink = io.BytesIO()
    np.save(sink, rows, allow_pickle=False)
    return sink.getvalue()


def probe_facts(store: Store, design: Design, read: int) -> tuple[int, str] | None:
    """Return rows and digest of the frozen probe of a read, or ``None`` where it is not made yet."""
    if design.identity:
        return design.channels, "identity"
    if store.head(layout.probe_key(read)) is None:
        return None
    data = store.read(layout.probe_key(read))
    return int(np.load(io.BytesIO(data), allow_pickle=False).shape[0]), digest_bytes(data)


def local_folder(location: str) -> Path | None:
    """Return the folder of a local location, or ``None`` for an object store."""
    return None if "://" in location and not location.startswith("file://") else Path(location.removeprefix("file://"))


def _lay_down(store: Store, key: str, data: bytes) -> None:
    """Create an object of a dossier that has no design yet; what a creation that was killed left there is replaced."""
    if store.create(key, data) is not Created.LANDED and bytes(store.read(key)) != data:
        store.put(key, data)


def _check_units(job: Job, table: ChannelTable) -> None:
    pair = units_conflict(table)
    if pair is None or job.design.mixed_units or job.design.scale == "table":
        return
    raise InputError(
        "the channels have more than one unit, so energy would depend on the choice of units",
        where=str(job.source.channels.table),
        rule="one unit, or a scale per channel",
        got=" and ".join(repr(unit) for unit in pair),
        remedy="design.scale: table with a scale column, one dossier per unit, or design.mixed_units: true",
    )


def _other_format(found: object) -> InputError:
    return InputError(
        "the dossier was written by another version of Shardfold",
        where=layout.DESIGN,
        rule=f"format {FORMAT}",
        got=f"format {found}",
        remedy="the version that wrote it, or a new dossier.location, which reads the campaign again",
    )


def _corrupt(key: str, rule: str) -> RecordCorrupt:
    return RecordCorrupt(
        "the dossier is not as it was written",
        where=key,
        rule=rule,
        remedy="restore the object from a copy; a dossier without its design cannot be continued",
    )
