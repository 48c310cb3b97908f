"""The algebra of co-moments: sizes, the summary, zero, merge, keep the mean, to and from arrays.

One structure holds everything: the centred second moments of the channels (left factor ``A``, m rows) against a stack
of right factors ``R = [X; Theta A; Xi; G]`` (s rows), and of the stack with itself. Merging two summaries, adding a
block and keeping the mean are one rule: a difference of means ``d`` between parts of n1 and n2 samples acts like one
more sample of weight ``w = n1 n2 / (n1 + n2)``. No raw value is seen here, and nothing is decided about modes.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from .checks import require_shape

Floats = NDArray[np.float64]
AnySummary = TypeVar("AnySummary", bound=Any)


@dataclass(frozen=True)
class Shape:
    """The sizes that fix a summary: m channels and the rows of the stack of right factors.

    Attributes
    ----------
    m : int
        Channels.
    k : int
        Rows of the probe, so of X; equal to m with the identity probe.
    q_theta, q_xi : int
        Rows of the check probe Theta and of the sample check Xi.
    p : int
        Background functions.
    identity : bool
        Whether the probe is the identity: X is the block itself and is not stored.
    """

    m: int
    k: int
    q_theta: int
    q_xi: int
    p: int
    identity: bool

    def __post_init__(self) -> None:
        if min(self.m, self.k) < 1 or min(self.q_theta, self.q_xi, self.p) < 0:
            raise ValueError(f"shape: m and k must be at least 1, the rest at least 0; got {self}")
        if self.identity and self.k != self.m:
            raise ValueError(f"shape: k must equal m with the identity probe; got {self}")

    @property
    def s(self) -> int:
        """Return the rows of the stack."""
        return self.k + self.q_theta + self.q_xi + self.p

    @property
    def x(self) -> slice:
        """Return where X is in the stack."""
        return slice(0, self.k)

    @property
    def theta(self) -> slice:
        """Return where Theta A is in the stack."""
        return slice(self.k, self.k + self.q_theta)

    @property
    def xi(self) -> slice:
        """Return where Xi is in the stack."""
        return slice(self.theta.stop, self.theta.stop + self.q_xi)

    @property
    def g(self) -> slice:
        """Return where the background G is in the stack."""
        return slice(self.xi.stop, self.s)


@dataclass(eq=False)
class Summary:
    """What is kept of n samples; its size does not depend on n.

    Attributes
    ----------
    shape : Shape
    n : int
        Samples.
    mean, energy : float64 (m,)
        Mean and centred sum of squares of each prepared channel.
    outer : float64 (m, s)
        ``A R^T``, both centred: W, H, F and ``A G^T`` side by side.
    inner : float64 (s, s)
        ``R R^T``, centred: C and all other products of the stack.
    right_mean : float64 (s,)
        Mean of the stack: Upsilon mean (with the rounding of the stored X), Theta mean, xi / n, mean of G.
    low, high : float64 (m,)
        Least and largest value of each channel in channel units (after gain and shift, before the factor).
    gaps : int64 (m,)
        Missing values of each channel.
    """

    shape: Shape
    n: int
    mean: Floats
    energy: Floats
    outer: Floats
    inner: Floats
    right_mean: Floats
    low: Floats
    high: Floats
    gaps: NDArray[np.int64]


def zero(shape: Shape) -> Summary:
    """Return the summary of no samples, the neutral element of ``merge``."""
    m, s = shape.m, shape.s
    return Summary(
        shape=shape,
        n=0,
        mean=np.zeros(m),
        energy=np.zeros(m),
        outer=np.zeros((m, s)),
        inner=np.zeros((s, s)),
        right_mean=np.zeros(s),
        low=np.full(m, np.inf),
        high=np.full(m, -np.inf),
        gaps=np.zeros(m, dtype=np.int64),
    )


def merge_weight(n1: int, n2: int) -> float:
    """Return the weight ``n1 n2 / (n1 + n2)`` of the difference of two means."""
    return n1 * n2 / (n1 + n2)


def advance(a: Summary, n: int, mean: Floats, right_mean: Floats, low: Floats, high: Floats) -> None:
    """Count ``n`` more samples with these means and ranges into ``a``, in place; the moments are the caller's duty."""
    a.n += n
    a.mean += (n / a.n) * (mean - a.mean)
    a.right_mean += (n / a.n) * (right_mean - a.right_mean)
    np.minimum(a.low, low, out=a.low)
    np.maximum(a.high, high, out=a.high)


def merge(a: Summary, b: Summary) -> Summary:
    """Return the summary of the samples of both; neither is changed. See ``merge_into``."""
    total = Summary(**{f.name: getattr(a, f.name) for f in fields(Summary)})
    for name in _names(a):
        setattr(total, name, getattr(a, name).copy())
    merge_into(total, b)
    return total


def merge_into(a: Summary, b: Summary) -> None:
    """Add the samples of ``b`` to ``a`` in place.

    The rule is that of Chan, Golub, LeVeque, Am. Stat. 37 (1983) 242, for all co-moments at once.

    Raises
    ------
    ValueError
        The shapes differ.
    """
    if a.shape != b.shape:
        raise ValueError(f"b: must have the shape of a, {a.shape}; got {b.shape}")
    if b.n == 0:
        a.gaps += b.gaps
        return
    a.outer += b.outer
    a.inner += b.inner
    a.energy += b.energy
    _add_sample(a, merge_weight(a.n, b.n), b.mean - a.mean, b.right_mean - a.right_mean)
    advance(a, b.n, b.mean, b.right_mean, b.low, b.high)
    a.gaps += b.gaps


def keep_mean(summary: Summary) -> Summary:
    """Return the summary with moments about zero instead of the mean: one more merge with w = n, d = mean.

    Meant for ``factors.finish``; do not merge it further.
    """
    kept = merge(summary, zero(summary.shape))
    _add_sample(kept, float(kept.n), kept.mean, kept.right_mean)
    return kept


def to_arrays(summary: Summary) -> dict[str, NDArray[Any]]:
    """Return the content by name, for storage; nothing is copied but ``n``."""
    return content(summary)


def from_arrays(shape: Shape, arrays: Mapping[str, NDArray[Any]]) -> Summary:
    """Return the summary stored as arrays, on its own writable memory.

    Raises
    ------
    ValueError
        An array is missing, or has another shape or type than ``shape`` asks for.
    """
    return filled(zero(shape), arrays)


def content(summary: Any) -> dict[str, NDArray[Any]]:
    """Return the arrays of a summary of any kind by name, and ``n`` among them."""
    return {"n": np.array(summary.n, dtype=np.int64)} | {name: getattr(summary, name) for name in _names(summary)}


def filled(empty: AnySummary, arrays: Mapping[str, NDArray[Any]]) -> AnySummary:
    """Return a summary of no samples, of any kind, with what was stored copied into it; the inverse of ``content``.

    Raises
    ------
    ValueError
        An array is missing, or has another shape or type than that of ``empty``.
    """
    names = _names(empty)
    missing = sorted({"n", *names} - set(arrays))
    if missing:
        raise ValueError(f"arrays: must hold n, {', '.join(names)}; got no {', '.join(missing)}")
    for name in names:
        own = getattr(empty, name)
        require_shape(name, arrays[name], own.shape)
        if arrays[name].dtype != own.dtype:
            raise ValueError(f"{name}: must have dtype {own.dtype}; got {arrays[name].dtype}")
        own[...] = arrays[name]
    empty.n = int(arrays["n"])
    return empty


def _names(summary: Any) -> tuple[str, ...]:
    return tuple(f.name for f in fields(summary) if f.name not in ("shape", "n"))


def _add_sample(a: Summary, w: float, d: Floats, d_right: Floats) -> None:
    a.outer += np.outer(w * d, d_right)
    a.inner += np.outer(w * d_right, d_right)
    a.energy += w * d * d
