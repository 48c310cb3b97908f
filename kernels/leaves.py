"""The terms of a leaf: products of the coefficient series within it, from the stored products of its stack alone.

They are made where the sums are stored and are small; what they tell is worked out in ``sampling``. This module needs
nothing but arrays, so that whoever makes terms carries no more.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .checks import require_between, require_shape
from .comoments import Shape

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class LeafTerms:
    """What a leaf says about the scatter of the leading modes; terms of neighbouring leaves are simply added.

    Attributes
    ----------
    n : int
        Samples.
    inside : float64 (r', k')
        Rows i < r' of ``T_b = c_b c_b^T``: products of the leaf's coefficient series.
    outside : float64 (c, r')
        Sketch of ``d_b = (I - U U^T) A_b c_b^T``: with Gaussian rows, ``|d_i|^2`` is about the mean square of column i.
    """

    n: int
    inside: Floats
    outside: Floats


def leaf_terms(n: int, inner: Floats, shape: Shape, rows: Floats, checks: Floats, count: int) -> LeafTerms:
    """Return the terms of one leaf for the leading modes, from the products of its stack alone.

    What lies outside the modes is seen through the check probe Theta: its products with X stand in the stack, so
    nothing as long as the channels is needed.

    Parameters
    ----------
    n : int
        Samples of the leaf.
    inner : float64 (s, s)
        Products of its stack about the mean and background of the whole campaign, ``background.apply``.
    shape : Shape
    rows : float64 (k', k)
        Row map of all modes of the whole campaign; all of them matter, whatever ``count`` is.
    checks : float64 (q, k')
        Theta times the modes; q may be 0 if there is nothing outside.
    count : int
        Leading modes wanted, r'.
    """
    require_between("count", count, 0, rows.shape[0])
    require_shape("inner", inner, (shape.s, shape.s))
    require_shape("rows", rows, (rows.shape[0], shape.k))
    require_shape("checks", checks, (shape.q_theta, rows.shape[0]))
    lead = rows[:count].T
    inside: Floats = (rows @ (inner[shape.x, shape.x] @ lead)).T
    outside: Floats = inner[shape.theta, shape.x] @ lead - checks @ inside.T
    return LeafTerms(n, inside, outside)


def terms_of_root(n: int, root: Floats, rows: Floats, count: int) -> LeafTerms:
    """Return the terms of one leaf where all channels are kept, from a factor of its products instead of them.

    Nothing is squared before it is small, so weak modes are told beside strong ones.

    Parameters
    ----------
    n : int
        Samples of the leaf.
    root : float64 (t, m)
        ``root^T root`` are the products of the channels about the background of the whole campaign.
    rows : float64 (k', m)
        Row map of all modes of the whole campaign.
    count : int
        Leading modes wanted, r'.
    """
    require_between("count", count, 0, rows.shape[0])
    series = root @ rows.T
    return LeafTerms(n, series[:, :count].T @ series, np.zeros((0, count)))


def join(a: LeafTerms, b: LeafTerms) -> LeafTerms:
    """Return the terms of two leaves as one."""
    return LeafTerms(a.n + b.n, a.inside + b.inside, a.outside + b.outside)
