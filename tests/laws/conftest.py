"""The bench for kernel laws: matrices with known spectra, and a fold of any matrix by any cut. No checks live here."""

from __future__ import annotations

import itertools
from collections.abc import Iterator, Sequence
from dataclasses import dataclass

import numpy as np
import pytest
from threadpoolctl import threadpool_limits

from shardfold.kernels import addressed, factors
from shardfold.kernels.blocks import Preparation
from shardfold.kernels.whole import Probe, Shape, Summary, XBlock, fold_block, stored_dtype, zero


@dataclass
class Folded:
    """A matrix after a read: its summary, what was stored of each block, and the probe that was used."""

    summary: Summary
    blocks: list[XBlock | None]
    probe: Probe
    keys: np.ndarray

    def coefficients(
        self, made: factors.Factors, rank: int, background: np.ndarray | None = None
    ) -> np.ndarray:
        """Return the coefficients of all samples; ``background`` (p', n) holds the functions that were removed."""
        parts, start = [], 0
        for block in self.blocks:
            if block is not None:
                place = slice(start, start + block.x.shape[1])
                known = None if background is None else background[:, place]
                parts.append(factors.coefficients(made, rank, block.x, block.centre, known))
                start = place.stop
        return np.concatenate(parts, axis=1)


class Lab:
    """Builders; everything is a function of its arguments."""

    def with_spectrum(self, channels: int, samples: int, values: Sequence[float], seed: int = 0) -> np.ndarray:
        """Return a matrix with these singular values, whose rows have mean zero, so that centring changes nothing."""
        rng = np.random.default_rng(seed)
        rank = len(values)
        left, _ = np.linalg.qr(rng.standard_normal((channels, rank)))
        right, _ = np.linalg.qr(np.column_stack([np.ones(samples), rng.standard_normal((samples, rank))]))
        return (left * np.asarray(values)) @ right[:, 1:].T

    def fold(
        self,
        matrix: np.ndarray,
        width: int | None,
        *,
        cuts: Sequence[int] = (),
        checks: int = 6,
        rows: np.ndarray | None = None,
        preparation: Preparation | None = None,
        background: np.ndarray | None = None,
        seed: int = 1,
        order: Sequence[int] | None = None,
    ) -> Folded:
        """Fold a (channels, samples) matrix cut at ``cuts``, blocks in ``order``; width ``None``: identity probe."""
        m, n = matrix.shape
        keys = addressed.name_keys([f"channel {i}" for i in range(m)])
        if rows is None and width is not None:
            rows = addressed.signs(seed, addressed.STREAM_PROBE, keys, width)
        probe = Probe(rows, addressed.normals(seed, addressed.STREAM_CHECK, keys, checks))
        background = np.empty((0, n)) if background is None else background
        k = m if rows is None else rows.shape[0]
        summary = zero(Shape(m, k, checks, checks, background.shape[0], rows is None))
        probe = probe.in_precision(stored_dtype(matrix.dtype))
        xi = addressed.normals(seed, addressed.STREAM_SAMPLE, np.arange(n), checks)
        edges = [0, *cuts, n]
        places = [slice(a, b) for a, b in itertools.pairwise(edges)]
        prepared = preparation or Preparation.unit(m)
        blocks = [
            fold_block(summary, matrix[:, places[i]], prepared, probe, xi[:, places[i]], background[:, places[i]])
            for i in (order or range(len(places)))
        ]
        return Folded(summary, blocks, probe, keys)

    def distance(self, a: Summary, b: Summary, least: float = 0.0) -> float:
        """Return the largest difference of two summaries, each product in units of the energies behind it.

        ``least`` is the smallest root of an energy to measure by, for blocks that happen to be nearly still.
        """
        left = np.sqrt(np.maximum(a.energy, 1e-300))
        right = np.sqrt(np.maximum(np.diagonal(a.inner), 1e-300))
        size_left, size_right = max(np.linalg.norm(left), least), max(np.linalg.norm(right), least)
        root = np.sqrt(max(a.n, 1))
        return max(
            np.linalg.norm(a.outer - b.outer) / (size_left * size_right),
            np.linalg.norm(a.inner - b.inner) / size_right**2,
            np.linalg.norm(a.energy - b.energy) / size_left**2,
            np.linalg.norm(a.mean - b.mean) * root / (size_left + root * np.linalg.norm(a.mean)),
            np.linalg.norm(a.right_mean - b.right_mean) * root / (size_right + root * np.linalg.norm(a.right_mean)),
        )

    def angle(self, a: np.ndarray, b: np.ndarray) -> float:
        """Return the sine of the angle between two unit vectors."""
        return float(np.linalg.norm(a - b * (a @ b)))


@pytest.fixture(scope="session", autouse=True)
def one_blas_thread() -> Iterator[None]:
    """Run as a task does; it is also quicker on shared machines."""
    with threadpool_limits(1):
        yield


@pytest.fixture(scope="session")
def lab() -> Lab:
    return Lab()
