"""Where a Parquet shard's channels are, and which types can hold measured values. No bytes are read here."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa

_FLOATS = {"halffloat": "float16", "float": "float32", "double": "float64"}


@dataclass(frozen=True)
class Columns:
    """The channels of one shard.

    Attributes
    ----------
    channels : tuple of str
        Names, in the shard's order, after the patterns of the job.
    leaves : tuple of int
        The leaf column of each channel, or the one leaf that holds them all.
    dtype : dtype
        One type for all values of the shard.
    """

    channels: tuple[str, ...]
    leaves: tuple[int, ...]
    dtype: np.dtype[Any]

    def leaves_of(self, channels: Sequence[str]) -> tuple[int, ...]:
        """Return the leaf columns to fetch for some channels, in their order."""
        if tuple(channels) == self.channels or len(self.leaves) < len(self.channels):
            return self.leaves
        leaf_of = dict(zip(self.channels, self.leaves, strict=True))
        return tuple(leaf_of[channel] for channel in channels)


def numeric_dtype(kind: Any) -> np.dtype[Any] | None:
    """Return the NumPy type of an Arrow type that can hold measured values, or ``None``."""
    if pa.types.is_integer(kind) or pa.types.is_floating(kind):
        return np.dtype(_FLOATS.get(str(kind), str(kind)))
    return None
