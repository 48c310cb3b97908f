"""The two summaries behind one door: co-moments with a probe, or a triangular factor of all channels.

A design says which one its dossier keeps; everyone else asks here and need not know. No mathematics of its own.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, TypeAlias

import numpy.typing as npt

from shardfold.design import Design
from shardfold.kernels import background, cost, exact, factors, leaves, whole
from shardfold.kernels.background import Removal
from shardfold.kernels.blocks import Preparation
from shardfold.kernels.exact import Triangle
from shardfold.kernels.factors import Factors
from shardfold.kernels.leaves import LeafTerms
from shardfold.kernels.whole import Probe, Shape, Summary, XBlock

Array = npt.NDArray[Any]


@dataclass(frozen=True, eq=False)
class ModeMap:
    """How the products of a part's stack become those of the modes; small, whatever the number of channels.

    Attributes
    ----------
    shape : Shape
    removal : Removal
        Of the whole, without its channels.
    rows : ndarray (k', k)
        Row map of all modes.
    checks : ndarray (q, k')
        Theta times the modes.
    count : int
        Leading modes that are looked at.
    """

    shape: Shape
    removal: Removal
    rows: Array
    checks: Array
    count: int


AnySummary: TypeAlias = Summary | Triangle

WHOLE_ARRAYS = ("n", "mean", "energy", "outer", "inner", "right_mean", "low", "high", "gaps")
EXACT_ARRAYS = ("n", "mean", "energy", "right_mean", "triangle", "low", "high", "gaps")


def arrays_of(design: Design) -> tuple[str, ...]:
    """Return the names of the arrays of a stored summary."""
    return EXACT_ARRAYS if design.exact else WHOLE_ARRAYS


def right_arrays_of(design: Design) -> tuple[str, ...]:
    """Return the arrays of a stored summary that the products of its stack need."""
    return EXACT_ARRAYS if design.exact else ("n", "inner", "right_mean")


def zero(design: Design, shape: Shape) -> AnySummary:
    """Return the summary of no samples."""
    return exact.zero(shape) if design.exact else whole.zero(shape)


def fold(
    summary: AnySummary, raw: Array, preparation: Preparation, probe: Probe, checks: Array, known: Array
) -> XBlock | None:
    """Add a block in place and return what is stored of it beside the summary, if anything.

    Parameters
    ----------
    summary : Summary or Triangle
    raw : real (m, n)
    preparation, probe
        Channel table as arrays, and the frozen probe.
    checks, known : float64 (q, n), (p, n)
        Sample checks, and the functions of time.
    """
    if isinstance(summary, Triangle):
        exact.fold_block(summary, raw, preparation, known)
        return None
    return whole.fold_block(summary, raw, preparation, probe, checks, known)


def merge_into(a: AnySummary, b: AnySummary) -> None:
    """Add the samples of ``b`` to ``a`` in place; both are of one dossier."""
    if isinstance(a, Triangle):
        assert isinstance(b, Triangle)
        exact.merge_into(a, b)
    else:
        assert isinstance(b, Summary)
        whole.merge_into(a, b)


def to_arrays(summary: AnySummary) -> dict[str, Array]:
    """Return the content by name, for storage."""
    return exact.to_arrays(summary) if isinstance(summary, Triangle) else whole.to_arrays(summary)


def from_arrays(design: Design, shape: Shape, arrays: Mapping[str, Array]) -> AnySummary:
    """Return the summary stored as arrays, on its own writable memory."""
    return exact.from_arrays(shape, arrays) if design.exact else whole.from_arrays(shape, arrays)


def finish(summary: AnySummary, *, keep_mean: bool, rows: Sequence[int]) -> tuple[Summary | None, Factors]:
    """Return the modes of a sum and, where they can be judged by residuals, the summary they were made from.

    Parameters
    ----------
    summary : Summary or Triangle
        As added up.
    keep_mean, rows
        What stays in, and which functions are taken off.
    """
    if isinstance(summary, Triangle):
        return None, exact.finish(summary, keep_mean=keep_mean, rows=rows)
    reduced, removal = background.reduce(summary, keep_mean=keep_mean, rows=rows)
    made = factors.finish_reduced(summary, reduced, removal)
    return (None if summary.shape.identity else reduced), made


def terms_of(design: Design, arrays: Mapping[str, Array], mapping: ModeMap) -> LeafTerms:
    """Return the leaf terms of a stored part.

    Parameters
    ----------
    design : Design
        What kind of summary.
    arrays : mapping
        Those that ``right_arrays_of`` names.
    mapping : ModeMap
        Of the whole.
    """
    n, removal = int(arrays["n"]), mapping.removal
    if design.exact:
        root = exact.root_of(exact.from_arrays(mapping.shape, arrays), removal)
        return leaves.terms_of_root(n, root, mapping.rows, mapping.count)
    inner = background.apply(n, arrays["right_mean"], arrays["inner"], removal)
    return leaves.leaf_terms(n, inner, mapping.shape, mapping.rows, mapping.checks, mapping.count)


def term_energies(summary: AnySummary, groups: Sequence[Sequence[int]], *, keep_mean: bool) -> Array:
    """Return the energy that each further term of the background takes from each channel (g, m)."""
    products = exact.moments(summary) if isinstance(summary, Triangle) else summary
    return background.term_energies(products, groups, keep_mean=keep_mean)


def bytes_of(design: Design, shape: Shape) -> int:
    """Return the bytes of a summary."""
    return exact.summary_bytes(shape) if design.exact else cost.summary_bytes(shape)


def fold_bytes(design: Design, shape: Shape, samples: int, itemsize: int) -> int:
    """Return the peak bytes of folding a block."""
    return exact.fold_bytes(shape, samples) if design.exact else cost.fold_bytes(shape, samples, itemsize)


def finish_bytes(design: Design, shape: Shape) -> int:
    """Return the peak bytes of finishing a sum."""
    if design.exact:
        return exact.finish_bytes(shape) + bytes_of(design, shape)
    return cost.finish_bytes(shape)


def fold_flops(design: Design, shape: Shape, samples: float) -> float:
    """Return the floating point operations of folding some samples."""
    return exact.fold_flops(shape, int(samples)) if design.exact else cost.fold_flops(shape, int(samples))
