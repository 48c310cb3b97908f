"""Batches of a cell's shards become full blocks, blocks become one summary and the stored X: a cell as it is made.

Blocks are cut by count from the cell's first sample on, across batches and shards. What a block needs to be judged
(which shard, row and time each sample has) comes beside it. No storage here: batches come in, arrays go out.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt
import xxhash

from shardfold.block_cuts import Block, BlockCutter, channel_major, samples_of_leaf
from shardfold.design import Design
from shardfold.errors import ShardRefused
from shardfold.ids import Shard
from shardfold.kernels.addressed import STREAM_SAMPLE, name_keys, normals, shard_row_keys
from shardfold.kernels.background import functions
from shardfold.kernels.blocks import Preparation, find_first_bad
from shardfold.kernels.whole import Probe, Shape, stored_dtype
from shardfold.readers import Batch
from shardfold.summaries import AnySummary, fold, to_arrays, zero

KEPT_SAMPLES = 2
KEPT_CHANNELS = 16
KEPT_WINDOW = 256

Array = npt.NDArray[Any]


@dataclass
class _PieceTally:
    """What is known of one piece once it is read: samples, span of time, digest of the decoded values."""

    shard: Shard
    rows: int = 0
    first: int | None = None
    last: int | None = None
    hasher: Any = field(default_factory=xxhash.xxh3_128)

    def record(self) -> dict[str, Any]:
        return {
            "shard": self.shard.key,
            "version": self.shard.info.version,
            "rows": self.rows,
            "first": self.first,
            "last": self.last,
            "digest": self.hasher.hexdigest(),
        }


class CellGather:
    """Folds the batches of one cell.

    Parameters
    ----------
    design : Design
        Block length, seed.
    shape : Shape
        Shape of the summary.
    preparation : Preparation
        Channel table as arrays.
    probe : Probe
        The frozen probe of this read.
    channels : tuple of str
        Names, for messages.
    dtype : dtype
        One type that holds the values of all pieces.
    rows : int
        Most samples that will come.
    name : str
        The cell's name; chooses which raw values are kept.
    """

    def __init__(
        self,
        design: Design,
        shape: Shape,
        preparation: Preparation,
        probe: Probe,
        channels: tuple[str, ...],
        dtype: np.dtype[np.generic],
        rows: int,
        name: str,
    ) -> None:
        self._design, self._shape, self._preparation = design, shape, preparation
        self._probe, self._channels = probe, channels
        self._cutter = BlockCutter(shape.m, design.block_samples, dtype)
        self.summary: AnySummary = zero(design, shape)
        # Memory that is never written to is never held, so too many rows cost nothing.
        self._times = np.empty(rows, np.int64)
        self._x = np.empty((0 if shape.identity else rows, shape.k), stored_dtype(dtype))
        self._counts: list[int] = []
        self._centres: list[Array] = []
        self._tallies: list[_PieceTally] = []
        self._keeper = _Keeper(int(name[:16], 16))

    def begin(self, shard: Shard) -> None:
        """Say that the batches which follow are of this shard."""
        self._tallies.append(_PieceTally(shard))

    def take(self, batch: Batch, leaf: int, inside: bool) -> None:
        """Fold the samples of a batch that lie in the leaf.

        Raises
        ------
        ShardRefused
            If a value is not finite.
        """
        times, values = samples_of_leaf(batch, self._design.leaf_ns, leaf, inside)
        if not len(times):
            return
        self._tally(times, values, batch.times is not None)
        for block in self._cutter.add(times, values, len(self._tallies) - 1):
            self._fold(block)

    def finish(self) -> tuple[dict[str, Any], dict[str, Array]]:
        """Return the facts and arrays of the cell's record; the gatherer is spent.

        Raises
        ------
        ShardRefused
            If two samples have one time, or a value is not finite.
        """
        for block in self._cutter.rest():
            self._fold(block)
        times = self._times[: self.summary.n]
        if self._design.timed:
            check_repeats(times, [(t.shard.key, t.shard.info.version, t.rows) for t in self._tallies])
        facts = {"n": self.summary.n, "pieces": [tally.record() for tally in self._tallies]}
        arrays = {**to_arrays(self.summary), "times": times, **self._keeper.kept}
        if not self._shape.identity:
            arrays["x"] = self._x[: self.summary.n]
            arrays["x_counts"] = np.asarray(self._counts, np.int64)
            arrays["x_centres"] = np.asarray(self._centres, np.float64).reshape(len(self._counts), self._shape.k)
        return facts, arrays

    def _tally(self, times: Array, values: Array, timed: bool) -> None:
        tally = self._tallies[-1]
        tally.rows += len(times)
        if timed:
            low, high = int(times.min()), int(times.max())
            tally.first = low if tally.first is None else min(tally.first, low)
            tally.last = high if tally.last is None else max(tally.last, high)
            tally.hasher.update(np.ascontiguousarray(times))
        tally.hasher.update(np.ascontiguousarray(values if channel_major(values) else values.T))

    def _fold(self, block: Block) -> None:
        first, n = self.summary.n, len(block.times)
        checks, background = self._sample_checks(block), functions(self._design.terms, block.times)
        try:
            made = fold(self.summary, block.raw, self._preparation, self._probe, checks, background)
        except FloatingPointError as error:
            raise self._not_finite(block) from error
        if made is not None:
            self._x[first : first + n] = made.x.T
            self._centres.append(made.centre)
        self._keeper.look(block.raw, len(self._counts), first)
        self._times[first : first + n] = block.times
        self._counts.append(n)

    def _sample_checks(self, block: Block) -> Array:
        keys = block.times.view(np.uint64)
        if not self._design.timed:
            keys = np.empty(len(block.times), np.uint64)
            for number in np.unique(block.owners):
                mine = block.owners == number
                keys[mine] = shard_row_keys(self._tallies[number].shard.key, block.times[mine])
        return normals(self._design.seed, STREAM_SAMPLE, keys, self._shape.q_xi)

    def _not_finite(self, block: Block) -> ShardRefused:
        found = find_first_bad(block.raw)
        if found is None:
            what, rule = "values overflow when gain, scale and weight are applied", "finite prepared values"
            return self._refuse(block, 0, what, rule, "overflow")
        channel, sample, value = found
        what = f"channel {self._channels[channel]} is {value} at {self._moment(int(block.times[sample]))}"
        return self._refuse(block, sample, what, "design.gaps: refuse (every value must be finite)", str(value))

    def _refuse(self, block: Block, sample: int, what: str, rule: str, got: str) -> ShardRefused:
        shard = self._tallies[int(block.owners[sample])].shard
        return ShardRefused(
            what,
            shard=shard.key,
            version=shard.info.version,
            rule=rule,
            got=got,
            remedy="mend the shard, or leave the channel out with source.channels.exclude in a new dossier",
        )

    def _moment(self, time: int) -> str:
        return moment(time) if self._design.timed else f"row {time}"


class _Keeper:
    """Keeps a few raw values, of the block whose hash is least, to set against the rebuilt field later."""

    def __init__(self, seed: int) -> None:
        self._seed = seed
        self._least: int | None = None
        self.kept: dict[str, Array] = {}

    def look(self, raw: Array, number: int, first_sample: int) -> None:
        m, n = raw.shape
        draw = name_keys([f"{self._seed}/{number}/{i}" for i in range(2 + KEPT_SAMPLES)])
        if self._least is not None and int(draw[0]) >= self._least:
            return
        self._least = int(draw[0])
        samples = np.unique(draw[2:] % np.uint64(n)).astype(np.int64)
        start = int(draw[1]) % max(1, n - KEPT_WINDOW + 1)
        drawn = name_keys([f"{draw[1]}/{i}" for i in range(KEPT_CHANNELS)])
        channels = np.unique(drawn % np.uint64(m)).astype(np.int64)
        self.kept = {
            "kept_samples": np.ascontiguousarray(raw[:, samples].T),
            "kept_sample_rows": samples + first_sample,
            "kept_window": np.ascontiguousarray(raw[channels, start : start + KEPT_WINDOW]),
            "kept_window_channels": channels,
            "kept_window_start": np.asarray([start + first_sample], np.int64),
        }


def check_repeats(times: Array, owners: list[tuple[str, str, int]]) -> None:
    """Check that no time stands twice.

    Parameters
    ----------
    times : ndarray (n,)
        Integer nanoseconds, pieces one after the other.
    owners : list of (shard key, version, rows)
        Who the samples belong to, in the same order.

    Raises
    ------
    ShardRefused
        For the later of the two shards in key order, naming both and the time.
    """
    order = np.argsort(times, kind="stable")
    same = np.flatnonzero(np.diff(times[order]) == 0)
    if not len(same):
        return
    ends = np.cumsum([rows for _, _, rows in owners])
    first, second = (int(np.searchsorted(ends, order[same[0] + step], side="right")) for step in (0, 1))
    (key_a, _, _), (key_b, version, _) = sorted((owners[first], owners[second]))
    others = f"twice in {key_a}" if key_a == key_b else f"in {key_a} and in {key_b}"
    raise ShardRefused(
        f"the sample time {moment(int(times[order[same[0]]]))} stands {others} ({len(same)} repeated in all)",
        shard=key_b,
        version=version,
        rival=key_a,
        rule="a time is given once in a campaign",
        got=f"{moment(int(times[order[same[0]]]))}",
        remedy="mend the times in the shard" if key_a == key_b else f"mend the times in one of them, or remove {key_b}",
    )


def moment(nanoseconds: int) -> str:
    """Return an instant as ISO 8601 in UTC, with as many decimals of a second as it needs."""
    return str(np.datetime64(nanoseconds, "ns")).rstrip("0").rstrip(".") + "Z"
