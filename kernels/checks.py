"""Door checks: shape, type, finiteness and sign of what enters the kernels.

Every message names the argument, the rule and the value got, and every failure is a ``ValueError``.
Nothing is computed or repaired here, and nothing here may know where a number came from.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

Array = NDArray[Any]


def require_shape(name: str, array: Array, shape: tuple[int, ...]) -> None:
    """Raise ``ValueError`` unless ``array`` has exactly this shape."""
    if array.shape != shape:
        raise ValueError(f"{name}: must have shape {shape}; got {array.shape}")


def require_real(name: str, array: Array) -> None:
    """Raise ``ValueError`` unless the type is boolean, integer or real floating point."""
    if array.dtype.kind not in "buif":
        raise ValueError(f"{name}: must hold real numbers; got dtype {array.dtype}")


def require_finite(name: str, array: Array) -> None:
    """Raise ``ValueError`` that names the first entry that is not finite."""
    good = np.isfinite(array)
    if not good.all():
        place = tuple(int(i) for i in np.argwhere(~good)[0])
        raise ValueError(f"{name}: every entry must be finite; got {array[place]} at {place}")


def require_positive(name: str, array: Array) -> None:
    """Raise ``ValueError`` that names the first entry that is not above zero."""
    good = array > 0
    if not good.all():
        place = tuple(int(i) for i in np.argwhere(~good)[0])
        raise ValueError(f"{name}: every entry must be above zero; got {array[place]} at {place}")


def require_block(name: str, raw: Array, channels: int) -> None:
    """Raise ``ValueError`` unless ``raw`` is a real (channels, samples) block with at least one sample."""
    require_real(name, raw)
    if raw.ndim != 2 or raw.shape[0] != channels or raw.shape[1] < 1:
        raise ValueError(f"{name}: must have shape ({channels}, samples) with samples >= 1; got {raw.shape}")


def require_between(name: str, value: int, least: int, most: int | None = None) -> None:
    """Raise ``ValueError`` unless ``least <= value`` and, where given, ``value <= most``."""
    if value < least or (most is not None and value > most):
        rule = f"at least {least}" if most is None else f"between {least} and {most}"
        raise ValueError(f"{name}: must be {rule}; got {value}")
