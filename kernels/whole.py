"""The summary of whole samples, of a block: the hot path, in two sweeps over cache-sized groups of channels.

The first sweep over a block finds its mean, energy, range, X and ``Theta A``; the second multiplies the centred block,
converted again because that is cheaper than keeping it in float64, with the stack of right factors. The value types and
the rest of the contract (zero, merge, keep the mean) are those of ``comoments.py``, offered here under one door.
Nothing here may know where a block came from, or repair a bad value.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import DTypeLike, NDArray

from .blocks import Preparation
from .checks import require_block, require_finite, require_real, require_shape
from .comoments import Shape, Summary, advance, from_arrays, keep_mean, merge, merge_into, merge_weight, to_arrays, zero

__all__ = [
    "Probe",
    "Shape",
    "Summary",
    "XBlock",
    "chunk_channels",
    "fold_block",
    "from_arrays",
    "keep_mean",
    "merge",
    "merge_into",
    "stored_dtype",
    "to_arrays",
    "zero",
]

Floats = NDArray[np.float64]

CHUNK_BYTES = 4 << 20  # float64 bytes of the channels worked on at once; measured best of 0.5 to 16 MiB


@dataclass(frozen=True, eq=False)
class Probe:
    """The frozen maps from channels to X and to the checks.

    Attributes
    ----------
    rows : real (k, m) or None
        Upsilon; ``None`` stands for the identity.
    check : float64 (q_theta, m)
        Theta.
    """

    rows: NDArray[Any] | None
    check: Floats

    def in_precision(self, dtype: DTypeLike) -> Probe:
        """Return the probe with its rows in the type the block kernel multiplies in.

        Signs and the rows of ``factors.next_probe`` are exact in float32 and float64, so nothing is lost.
        """
        if self.rows is None or self.rows.dtype == np.dtype(dtype):
            return self
        return Probe(rows=np.ascontiguousarray(self.rows, dtype=dtype), check=self.check)


@dataclass(frozen=True, eq=False)
class XBlock:
    """What is stored of a block to become its coefficients.

    Attributes
    ----------
    x : float32 or float64 (k, n)
        Upsilon times the centred block.
    centre : float64 (k,)
        Upsilon times the block's mean: what the centring took from X.
    """

    x: NDArray[Any]
    centre: Floats


def stored_dtype(dtype: DTypeLike) -> np.dtype[Any]:
    """Return the type X is stored in: float32 for inputs of at most 24 significant bits, else float64."""
    given = np.dtype(dtype)
    narrow = given.itemsize <= (4 if given.kind == "f" else 2)
    return np.dtype(np.float32 if narrow else np.float64)


def fold_block(
    summary: Summary,
    raw: NDArray[Any],
    preparation: Preparation,
    probe: Probe,
    sample_checks: Floats,
    background: Floats,
) -> XBlock | None:
    """Add one block of samples to ``summary`` in place and return what is stored of it.

    X is rounded to its stored type before it is multiplied with anything. What is returned depends on the block alone.

    Parameters
    ----------
    summary : Summary
        Changed in place, and only if no error is raised.
    raw : real (m, n), n >= 1
        C order (channel by channel) or F order (sample by sample); both are read without a transpose.
    preparation : Preparation
        Gain, shift and factor of each channel.
    probe : Probe
        Best with its rows in ``stored_dtype(raw.dtype)``, see ``Probe.in_precision``.
    sample_checks, background : float64 (q_xi, n), (p, n)
        Xi and G.

    Returns
    -------
    block : XBlock or None
        ``None`` with the identity probe.

    Raises
    ------
    ValueError
        A shape or type does not fit.
    FloatingPointError
        A value is not finite, or too large to be squared or stored. Call ``blocks.find_first_bad`` for the place.
    """
    shape = summary.shape
    _check_doors(shape, raw, preparation, probe, sample_checks, background)
    with np.errstate(over="ignore", invalid="ignore"):
        facts = _first_sweep(shape, raw, preparation, probe)
        _fill_stack(facts, shape, sample_checks, background)
        step = _add_difference_of_means(facts, summary)
        _refuse_not_finite(facts, step)
    _second_sweep(summary.outer, raw, preparation, facts, step)
    summary.inner += facts.stack @ facts.stack.T
    if shape.identity:  # W and C are the same numbers; keep them the same bits
        summary.inner[shape.x, :], summary.inner[:, shape.x] = summary.outer, summary.outer.T
    summary.energy += facts.energy + step * step
    advance(summary, raw.shape[1], facts.mean, facts.right_mean, *_range(facts, preparation))
    return None if facts.x is None else XBlock(x=facts.x, centre=facts.centre)


@dataclass(eq=False)
class _Facts:
    """What the first sweep learns about a block; in raw units where the name says so."""

    x: NDArray[Any] | None
    centre: Floats
    stack: Floats  # (s, n + 1): the last sample is the difference of means
    mean: Floats
    right_mean: Floats
    energy: Floats
    mean_raw: Floats
    low_raw: Floats
    high_raw: Floats


class _Groups:
    """Cache-sized groups of channels of a block as float64, in the block's own memory order."""

    def __init__(self, raw: NDArray[Any], preparation: Preparation, extra: int = 0) -> None:
        m, n = raw.shape
        self.raw, self.samples = raw, n + extra
        self.sample_major = abs(raw.strides[0]) < abs(raw.strides[1])
        self.width = min(m, chunk_channels(n))
        slope = preparation.slope
        self._slope = None if bool((slope == 1).all()) else slope
        self._buffer = np.empty(self.width * self.samples)

    def __iter__(self) -> Iterator[slice]:
        m = self.raw.shape[0]
        return (slice(first, min(first + self.width, m)) for first in range(0, m, self.width))

    def load(self, rows: slice) -> Floats:
        """Return the raw values of some channels as float64; extra samples at the end are zero."""
        group = _as_block(self._buffer, rows.stop - rows.start, self.samples, self.sample_major)
        n = self.raw.shape[1]
        group[:, :n] = self.raw[rows]
        group[:, n:] = 0
        return group

    def centre(self, group: Floats, rows: slice, mean_raw: Floats) -> None:
        """Turn loaded values into centred prepared ones, the whole contiguous buffer at once: NumPy is quickest so."""
        group -= mean_raw[rows, np.newaxis]
        if self._slope is not None:
            group *= self._slope[rows, np.newaxis]


class _XSum:
    """X of a block, added up over groups of channels in its stored type."""

    def __init__(self, k: int, groups: _Groups) -> None:
        n, dtype = groups.raw.shape[1], stored_dtype(groups.raw.dtype)
        self.x = np.zeros((k, n), dtype=dtype)
        self._part = np.empty((k, n), dtype=dtype)
        self._narrow = np.empty(groups.width * n if dtype == np.float32 else 0, dtype=dtype)
        self._sample_major = groups.sample_major

    def add(self, probe_rows: NDArray[Any], group: Floats) -> None:
        """Add the share of some channels, given their columns of the probe."""
        values: NDArray[Any] = group
        if self._narrow.size:
            values = _as_block(self._narrow, len(group), group.shape[1], self._sample_major)
            values[...] = group
        np.matmul(probe_rows.astype(self.x.dtype, copy=False), values, out=self._part)
        self.x += self._part


def chunk_channels(samples: int) -> int:
    """Return how many channels are worked on at once; it depends on nothing but the samples of the block."""
    return max(8, CHUNK_BYTES // (8 * samples))


def _as_block(buffer: NDArray[Any], channels: int, samples: int, sample_major: bool) -> NDArray[Any]:
    """Return the head of a flat buffer as a (channels, samples) view in either memory order."""
    flat = buffer[: channels * samples]
    return flat.reshape(samples, channels).T if sample_major else flat.reshape(channels, samples)


def _first_sweep(shape: Shape, raw: NDArray[Any], preparation: Preparation, probe: Probe) -> _Facts:
    m, n = raw.shape
    groups = _Groups(raw, preparation)
    x = None if probe.rows is None else _XSum(shape.k, groups)
    mean, energy, mean_raw, low_raw, high_raw = np.empty((5, m))
    facts = _Facts(
        x=None if x is None else x.x,
        centre=np.zeros(shape.k),
        stack=np.zeros((shape.s, n + 1)),
        mean=mean,
        right_mean=np.zeros(shape.s),
        energy=energy,
        mean_raw=mean_raw,
        low_raw=low_raw,
        high_raw=high_raw,
    )
    for rows in groups:
        group = groups.load(rows)
        _measure(facts, raw[rows], group, rows)
        mean[rows] = preparation.factor[rows] * (mean_raw[rows] * preparation.gain[rows] + preparation.shift[rows])
        groups.centre(group, rows, mean_raw)
        energy[rows] = _squares_by_channel(group, groups.sample_major)
        facts.stack[shape.theta, :n] += probe.check[:, rows] @ group
        facts.right_mean[shape.theta] += probe.check[:, rows] @ mean[rows]
        if probe.rows is None or x is None:
            facts.stack[rows, :n], facts.right_mean[rows] = group, mean[rows]
        else:
            x.add(probe.rows[:, rows], group)
            facts.centre += probe.rows[:, rows].astype(np.float64) @ mean[rows]
    return facts


def _measure(facts: _Facts, raw: NDArray[Any], group: Floats, rows: slice) -> None:
    # The range is quicker to find on the raw values than on the converted ones, but for half precision.
    values = group if raw.dtype == np.float16 else raw
    facts.low_raw[rows], facts.high_raw[rows] = values.min(axis=1), values.max(axis=1)
    facts.mean_raw[rows] = group.mean(axis=1)


def _squares_by_channel(group: Floats, sample_major: bool) -> Floats:
    squares: Floats = np.einsum("ij,ij->i", group, group) if sample_major else np.vecdot(group, group)
    return squares


def _fill_stack(facts: _Facts, shape: Shape, sample_checks: Floats, background: Floats) -> None:
    n = facts.stack.shape[1] - 1
    if facts.x is not None:
        # Rounding leaves the stored X a mean of its own. Counted as mean, all products are those of the stored X; left
        # alone, a drift between float32 blocks keeps coefficients from being orthogonal beyond 1e-3 (with it: 1e-9).
        rest = facts.x.mean(axis=1, dtype=np.float64)
        np.subtract(facts.x, rest[:, np.newaxis], out=facts.stack[shape.x, :n])
        facts.right_mean[shape.x] = facts.centre + rest
    for place, values in ((shape.xi, sample_checks), (shape.g, background)):
        facts.right_mean[place] = values.mean(axis=1)
        np.subtract(values, facts.right_mean[place, np.newaxis], out=facts.stack[place, :n])


def _add_difference_of_means(facts: _Facts, summary: Summary) -> Floats:
    """Put the step from the summary's means to the block's, which is one more sample, behind the others.

    Returned is its left half, ``sqrt(w) d`` (m,).
    """
    root = np.sqrt(merge_weight(summary.n, facts.stack.shape[1] - 1))
    facts.stack[:, -1] = root * (facts.right_mean - summary.right_mean)
    step: Floats = root * (facts.mean - summary.mean)
    return step


def _refuse_not_finite(facts: _Facts, step: Floats) -> None:
    if not (np.isfinite(facts.low_raw).all() and np.isfinite(facts.high_raw).all()):
        raise FloatingPointError("raw: every value must be finite; got NaN or infinity")
    squares = np.einsum("ij,ij->i", facts.stack, facts.stack)
    if not all(np.isfinite(sizes).all() for sizes in (facts.energy, step * step, squares)):
        raise FloatingPointError("raw: prepared values must be small enough to be squared and stored; got an overflow")


def _second_sweep(outer: Floats, raw: NDArray[Any], preparation: Preparation, facts: _Facts, step: Floats) -> None:
    groups = _Groups(raw, preparation, extra=1)
    product = np.empty((groups.width, facts.stack.shape[0]))
    for rows in groups:
        group = groups.load(rows)
        groups.centre(group, rows, facts.mean_raw)
        group[:, -1] = step[rows]
        part = product[: rows.stop - rows.start]
        np.matmul(group, facts.stack.T, out=part)
        outer[rows] += part


def _range(facts: _Facts, preparation: Preparation) -> tuple[Floats, Floats]:
    ends = preparation.to_channel_units(facts.low_raw), preparation.to_channel_units(facts.high_raw)
    return np.minimum(*ends), np.maximum(*ends)


def _check_doors(
    shape: Shape,
    raw: NDArray[Any],
    preparation: Preparation,
    probe: Probe,
    sample_checks: Floats,
    background: Floats,
) -> None:
    require_block("raw", raw, shape.m)
    n = raw.shape[1]
    require_shape("preparation.gain", preparation.gain, (shape.m,))
    require_shape("probe.check", probe.check, (shape.q_theta, shape.m))
    if (probe.rows is None) != shape.identity:
        raise ValueError(f"probe: must be the identity exactly where the shape says so; got {shape}")
    if probe.rows is not None:
        require_real("probe.rows", probe.rows)
        require_shape("probe.rows", probe.rows, (shape.k, shape.m))
    require_shape("sample_checks", sample_checks, (shape.q_xi, n))
    require_shape("background", background, (shape.p, n))
    require_finite("sample_checks", sample_checks)
    require_finite("background", background)
