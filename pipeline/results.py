"""The reading API: a result as tables, modes, coefficients and rebuilt values, with nothing to run.

Only published results are seen: a folder without a manifest does not exist here.
"""

from __future__ import annotations

import json
import math
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt
import pyarrow as pa
import pyarrow.compute as pc

from shardfold import layout
from shardfold.background_columns import rebuilt
from shardfold.errors import InputError, RecordCorrupt
from shardfold.ids import digest_bytes
from shardfold.publish import CAUTION
from shardfold.quantities import rounded_up
from shardfold.store import Store, StoreSettings, connect
from shardfold.tables import mode_names, read_table

Array = npt.NDArray[Any]

LEAST_SHOWN_DEG = 0.001
UNTOLD_DEG = 45.0


@dataclass(frozen=True, eq=False)
class Result:
    """A published result.

    Attributes
    ----------
    location : str
        Its folder.
    manifest : dict
        What went in, what came out, and how.
    """

    store: Store
    folder: str
    location: str
    manifest: dict[str, Any]

    @cached_property
    def modes(self) -> pa.Table:
        """Return one row per channel: channel, unit, scale, weight, positions, ``mode_01`` and so on."""
        return self.table("modes.parquet")

    @cached_property
    def mode_table(self) -> pa.Table:
        """Return one row per mode."""
        return self.table("mode_table.parquet")

    @cached_property
    def channel_summary(self) -> pa.Table:
        """Return one row per channel: samples, range, spread, energy, captured share."""
        return self.table("channel_summary.parquet")

    @cached_property
    def background(self) -> pa.Table:
        """Return one row per channel: removed background terms and their energy."""
        return self.table("background.parquet")

    def table(self, name: str) -> pa.Table:
        """Return one file of the result as an Arrow table, its digest checked.

        Raises
        ------
        RecordCorrupt
            If its bytes are not those the manifest names.
        """
        data = self.store.read(self.folder + name)
        digest, promised = digest_bytes(data), self.manifest["files"].get(name)
        if digest != promised:
            raise RecordCorrupt(
                "a file of the result is not what was published",
                where=f"{self.location}{name}",
                rule=f"digest {promised}",
                got=digest,
                remedy="delete the result's manifest and run again",
            )
        return read_table(data)

    def coefficients(self, start: Any = None, stop: Any = None) -> pa.Table:
        """Return the coefficients ``start <= time < stop``, in order of time.

        Parameters
        ----------
        start, stop : datetime, str or numpy.datetime64, optional
            Half-open span, in UTC where no zone is given; all of them if left out. Not for results without times.
        """
        names = sorted(name for name in self.manifest["files"] if name.startswith("coefficients/"))
        tables = [_between(self.table(name), start, stop) for name in names]
        return pa.concat_tables(tables) if tables else pa.table({})

    def rebuild(self, channels: Sequence[str] | None = None, start: Any = None, stop: Any = None) -> pa.Table:
        """Return the low-rank field of some channels in physical units: background plus modes times coefficients.

        Modes under the rounding floor are left out.

        Raises
        ------
        InputError
            If a channel is not in the result.
        """
        names = self.modes.column("channel").to_pylist()
        chosen = list(channels) if channels is not None else names
        row_of = {name: row for row, name in enumerate(names)}
        missing = [name for name in chosen if name not in row_of]
        if missing:
            raise InputError(
                "a channel is not in the result",
                where="channels",
                rule="names of the column 'channel' of modes.parquet",
                got=", ".join(missing[:3]),
            )
        rows = [row_of[name] for name in chosen]
        held = self.manifest["quality"]["modes"]
        rank = len(self.mode_table)
        series = self.coefficients(start, stop)
        c = np.array([series.column(n).to_numpy() for n in mode_names(rank, "c")[:held]]).reshape(held, len(series))
        u = np.array([self.modes.column(n).to_numpy() for n in mode_names(rank, "mode")[:held]]).T[rows]
        values = u @ c
        values += self._background(rows, series)
        keys = {name: series.column(name) for name in series.column_names if not name.startswith("c_")}
        return pa.table(keys | dict(zip(chosen, values, strict=True)))

    def _background(self, rows: Sequence[int], series: pa.Table) -> Array:
        table = self.background
        columns = {name: table.column(name).to_numpy()[rows] for name in table.column_names if name != "channel"}
        facts = {
            field.name: {key.decode(): value.decode() for key, value in (field.metadata or {}).items()}
            for field in table.schema
        }
        if "time" in series.column_names:
            times = series.column("time").cast(pa.int64()).to_numpy()
        else:
            times = np.zeros(len(series), np.int64)
        return rebuilt(columns, facts, times)

    @property
    def bounds(self) -> pa.Table:
        """Return how far each mode can be relied on: angles in degrees, groups, verdicts, remedies."""
        return self.mode_table.select(
            ["mode", "angle_bound_deg", "mac_at_least", "coefficient_angle_bound_deg", "sampling_angle_deg",
             "north_angle_deg", "group", "verdict", "remedy"]
        )  # fmt: skip

    @property
    def next_step(self) -> str:
        """Return what to do next, in a line."""
        return str(self.manifest["quality"]["next"])

    def __repr__(self) -> str:
        head = f"Result {self.location}: {self.manifest['campaign']}"
        return "\n".join([head, *(" ".join(row) for row in mode_rows(self)), self.next_step, CAUTION])


def mode_rows(result: Result) -> list[list[str]]:
    """Return the mode table as text cells, heading first; what cannot be said is a dash or said so.

    Bounds are rounded to the safe side.
    """
    rows = [["mode", "share %", "total %", "accuracy deg", "MAC at least", "sampling deg", "group", "verdict", "Hz"]]
    for row in result.mode_table.to_pylist():
        share, total = row["energy_fraction"], row["energy_cumulative"]
        held = share is not None
        rows.append(
            [
                str(row["mode"]),
                f"{100 * share:.3f}" if held else "under floor",
                "-" if total is None else f"{100 * total:.3f}",
                _bound(row["angle_bound_deg"]) if held and row["verdict"] != "at noise" else "-",
                _least(row["mac_at_least"]),
                _sampling(row["sampling_angle_deg"]),
                row["group"] or "-",
                row["verdict"] or "-",
                _figure(row["dominant_hz"]),
            ]
        )
    return rows


def open_result(location: str, endpoint: str | None = None) -> Result:
    """Open a published result.

    Parameters
    ----------
    location : str
        The folder of a result, or ``DOSSIER/latest``: the highest ledger number among the results that are the job's
        own, not made with ``--set modes...``.
    endpoint : str, optional
        URL of the S3 service, where it is not in the environment.

    Raises
    ------
    InputError
        If there is no published result there.
    """
    root, folder = split_location(location)
    store = connect(StoreSettings(root, endpoint))
    folder = folder or _latest(store, location)
    if store.head(folder + layout.MANIFEST) is None:
        raise _no_result(location, f"no {layout.MANIFEST} in {folder}")
    manifest = json.loads(bytes(store.read(folder + layout.MANIFEST)))
    return Result(store, folder, f"{root}/{folder}", manifest)


def split_location(location: str) -> tuple[str, str]:
    """Return the dossier of a result's location, and the result's folder in it, empty for the latest.

    Only the end of the location is looked at: buckets and folders may be called ``results`` as well.
    """
    text = location.rstrip("/")
    root, _, name = text.rpartition(f"/{layout.RESULTS}")
    if root and layout.parse_manifest(f"{layout.RESULTS}{name}/{layout.MANIFEST}") is not None:
        return root, f"{layout.RESULTS}{name}/"
    return text.removesuffix("/latest"), ""


def _latest(store: Store, location: str) -> str:
    found = [
        (parsed[0], info.modified, parsed[1])
        for info in store.list(layout.RESULTS)
        if (parsed := layout.parse_manifest(info.key)) is not None
    ]
    for _, _, folder in sorted(found, reverse=True):
        if not json.loads(bytes(store.read(folder + layout.MANIFEST))).get("set"):
            return folder
    only_set = f"only results made with --set, such as {max(found)[2]}" if found else "no published result"
    raise _no_result(location, only_set)


def _no_result(location: str, got: str) -> InputError:
    return InputError(
        "there is no result",
        where=location,
        rule="a result's folder, or DOSSIER/latest",
        got=got,
        remedy="'shardfold run JOB' publishes one and prints its folder",
    )


def _between(table: pa.Table, start: Any, stop: Any) -> pa.Table:
    if start is None and stop is None:
        return table
    kind = table.schema.field("time").type
    mask = None
    for bound, compare in ((start, pc.greater_equal), (stop, pc.less)):
        if bound is not None:
            part = compare(table.column("time"), pa.scalar(np.datetime64(bound, "ns")).cast(kind))
            mask = part if mask is None else pc.and_(mask, part)
    return table.filter(mask)


def _figure(value: float | None) -> str:
    return "-" if value is None else f"{value:.4g}"


def _bound(degrees: float | None, absent: str = "no bound") -> str:
    """Return an angle rounded up to two digits."""
    if degrees is None:
        return absent
    if degrees < LEAST_SHOWN_DEG:
        return f"<{LEAST_SHOWN_DEG:g}"
    return rounded_up(degrees)


def _sampling(degrees: float | None) -> str:
    """Return a sampling angle; at 45 degrees a mode is told from its neighbours no more."""
    return ">45" if degrees is not None and degrees > UNTOLD_DEG else _bound(degrees, absent="-")


def _least(share: float | None) -> str:
    """Return a least value rounded down to four decimals."""
    return "-" if share is None else f"{math.floor(share * 1e4) / 1e4:.4f}"
