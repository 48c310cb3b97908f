"""Upper bounds of the private bytes that reading holds, from descriptions alone, before the first row group is read.

Each counts one row group being decoded while the next is fetched. Batches that a caller still holds when it asks for
others come on top, as do a store's ranges in flight.
"""

from __future__ import annotations

from shardfold.ids import RowGroup, Shard

# Measured: 2 to 16 MiB while slices are decoded, if pages have about 1 MiB as most writers make them. A writer that
# makes larger pages adds the size of one page (measured: 74 MiB for pages of 64 MiB).
SCRATCH_BYTES = 24 * 2**20
# Measured with pyarrow 26: 0.92 KiB for each column of each row group, 0.8 KiB for each column's name and type. Two
# footers are held at once where one shard ends and the next begins.
_FOOTER_CHUNK_BYTES = 2 * 1024
_FOOTER_COLUMN_BYTES = 2 * 1024
# A name, its place in two tuples, and its entry in the table of places.
_NAME_BYTES = 128


def group_peak_bytes(group: RowGroup) -> int:
    """Return the bound for row groups like this one, footers apart.

    ``stored_bytes`` as fetched, the larger of ``stored_bytes`` (the next, while slices of this one are handed on) and
    ``decoded_bytes`` (its batches, all at once), and `SCRATCH_BYTES` (pages and slices on their way from one to the
    other).
    """
    return group.stored_bytes + max(group.stored_bytes, group.decoded_bytes) + SCRATCH_BYTES


def shard_peak_bytes(shard: Shard, layout: str) -> int:
    """Return the bound for a whole shard: its largest row group, the channels' names, and footers.

    Footers grow with columns and row groups; ``layout`` is the job's ``source.layout``.
    """
    columns = len(shard.channels) + 1 if layout == "wide" else 2
    footers = columns * (_FOOTER_CHUNK_BYTES * len(shard.groups) + _FOOTER_COLUMN_BYTES)
    names = _NAME_BYTES * len(shard.channels)
    return max(map(group_peak_bytes, shard.groups), default=SCRATCH_BYTES) + footers + names
