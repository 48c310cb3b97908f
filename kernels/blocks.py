"""From a raw block and the channel table to a prepared block, and the search for the first bad value.

The preparation is one affine map per channel, fixed by the channel table and never by the data, so that it does not
depend on which shard came first. No summing here, and no repair of bad values.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .checks import require_block, require_finite, require_positive, require_shape

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Preparation:
    """The map ``prepared = factor * (raw * gain + shift)``, channel by channel.

    Attributes
    ----------
    gain, shift : float64 (m,)
        From raw numbers to channel units.
    factor : float64 (m,)
        ``sqrt(weight) / scale``, from channel units to the units of the matrix that is decomposed.
    """

    gain: Floats
    shift: Floats
    factor: Floats

    @classmethod
    def build(cls, gain: ArrayLike, shift: ArrayLike, scale: ArrayLike, weight: ArrayLike) -> Preparation:
        """Return the preparation of a channel table.

        Parameters
        ----------
        gain, shift, scale, weight : float (m,)
            ``weight`` is a quadrature or mass weight; its square root multiplies the amplitude.

        Raises
        ------
        ValueError
            Lengths differ, a number is not finite, or a scale or weight is not above zero.
        """
        columns = {"gain": gain, "shift": shift, "scale": scale, "weight": weight}
        arrays = {name: np.array(column, dtype=np.float64) for name, column in columns.items()}
        for name, array in arrays.items():
            require_shape(name, array, (arrays["gain"].size,))
            require_finite(name, array)
        require_positive("scale", arrays["scale"])
        require_positive("weight", arrays["weight"])
        factor = np.sqrt(arrays["weight"]) / arrays["scale"]
        return cls(gain=arrays["gain"], shift=arrays["shift"], factor=factor)

    @classmethod
    def unit(cls, channels: int) -> Preparation:
        """Return the preparation that changes nothing."""
        return cls(gain=np.ones(channels), shift=np.zeros(channels), factor=np.ones(channels))

    @property
    def plain(self) -> bool:
        """Return whether prepared values are the raw ones."""
        return bool((self.gain == 1).all() and (self.shift == 0).all() and (self.factor == 1).all())

    @property
    def slope(self) -> Floats:
        """Return the amplitude a raw unit has in the prepared matrix, float64 (m,)."""
        return self.gain * self.factor

    def to_channel_units(self, raw: Floats) -> Floats:
        """Return one raw number per channel, float64 (m,), in channel units."""
        return raw * self.gain + self.shift

    def prepare(self, raw: NDArray[Any]) -> Floats:
        """Return a raw block, real (m, n), as a prepared block, float64 (m, n), in the same memory order."""
        require_block("raw", raw, self.gain.size)
        block = raw.astype(np.float64)
        if not self.plain:
            block *= self.gain[:, np.newaxis]
            block += self.shift[:, np.newaxis]
            block *= self.factor[:, np.newaxis]
        return block


def find_first_bad(raw: NDArray[Any]) -> tuple[int, int, float] | None:
    """Return the first value that is NaN or infinite.

    Parameters
    ----------
    raw : real (m, n)

    Returns
    -------
    place : (channel index, sample index, value) or None
        The earliest sample with a bad value and the first bad channel in it.
    """
    bad = ~np.isfinite(raw)
    samples = bad.any(axis=0)
    if not samples.any():
        return None
    sample = int(samples.argmax())
    channel = int(bad[:, sample].argmax())
    return channel, sample, float(raw[channel, sample])
