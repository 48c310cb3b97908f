"""Matrices whose decomposition is known in closed form or published, through the kernels.

Columns are fed as samples and the mean is kept, so the decomposition is that of the matrix itself. With the identity
probe the squares of singular values are exact to rounding of the largest square; that is the tolerance used.
Marks: [M] quoted from memory and confirmed by computing, as is every value here. Labels A1 to A10 number the known
decompositions; the same and more go through the whole pipeline in the end-to-end tests.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest

from shardfold.kernels import factors

EPS = np.finfo(np.float64).eps


def decompose(lab: Any, matrix: np.ndarray, width: int | None = None, **options: Any) -> factors.Factors:
    samples = matrix.shape[1]
    folded = lab.fold(matrix.astype(np.float64), width, cuts=range(3, samples, max(3, samples // 4)), **options)
    return factors.finish(folded.summary, keep_mean=True)


def assert_values(made: factors.Factors, expected: np.ndarray) -> None:
    """Squares agree to rounding of the energy; what is below the floor is left out."""
    expected = np.sort(expected)[::-1]
    kept = expected[expected > made.floor]
    assert made.values.size == kept.size
    np.testing.assert_allclose(made.values**2, kept**2, atol=20 * EPS * made.energy_total, rtol=0)
    strong = kept > 0.05 * kept[0]
    np.testing.assert_allclose(made.values[strong], kept[strong], rtol=1e-12)


def test_a1_cumulative_sum(lab: Any) -> None:
    # [M] classical: lower-triangular ones, sigma_k = 1 / (2 sin((2k-1) pi / (4n+2))), left vectors
    # sin((2k-1) j pi / (2n+1)); the inverse is a bidiagonal difference.
    n = 100
    k, j = np.arange(1, n + 1), np.arange(1, n + 1)[:, np.newaxis]
    made = decompose(lab, np.tril(np.ones((n, n))))
    assert_values(made, 1 / (2 * np.sin((2 * k - 1) * np.pi / (4 * n + 2))))
    vectors = np.sin((2 * k[:10] - 1) * j * np.pi / (2 * n + 1))
    vectors /= np.linalg.norm(vectors, axis=0)
    for i in range(10):
        assert lab.angle(made.modes[:, i], vectors[:, i]) < 1e-11


def test_a1_cumulative_sum_by_a_probe_and_a_second_read(lab: Any) -> None:
    n, k = 200, np.arange(1, 201)
    matrix = np.tril(np.ones((n, n)))
    exact = 1 / (2 * np.sin((2 * k - 1) * np.pi / (4 * n + 2)))
    first = lab.fold(matrix, 64)
    rows = factors.next_probe(first.summary, 10, 1, 2, first.keys)
    made = decompose(lab, matrix, rows=rows)
    np.testing.assert_allclose(made.values[:5], exact[:5], rtol=1e-6)
    np.testing.assert_allclose(made.values[:10], exact[:10], rtol=1e-4)


def test_a4_discrete_brownian_bridge(lab: Any) -> None:
    # [M] Strang, SIAM Review 41 (1999) 135: min(i, j) - i j / (n + 1) is the inverse of tridiag(-1, 2, -1), whose
    # eigenvalues are 4 sin^2(k pi / (2 (n + 1))).
    n = 60
    i = np.arange(1.0, n + 1)
    bridge = np.minimum.outer(i, i) - np.outer(i, i) / (n + 1)
    made = decompose(lab, bridge)
    assert_values(made, 1 / (4 * np.sin(i * np.pi / (2 * (n + 1))) ** 2))
    sine = np.sin(np.pi * i / (n + 1))
    assert lab.angle(made.modes[:, 0], sine / np.linalg.norm(sine)) < 1e-12


def test_a6_circulant(lab: Any) -> None:
    # [M] Davis, Circulant Matrices, 1979: singular values are |fft(c)|.
    c = np.random.default_rng(0).standard_normal(48)
    matrix = np.array([np.roll(c, i) for i in range(48)]).T
    assert_values(decompose(lab, matrix), np.abs(np.fft.fft(c)))


GOLUB_REINSCH = np.array(
    [
        [22, 10, 2, 3, 7],
        [14, 7, 10, 0, 8],
        [-1, 13, -1, -11, 3],
        [-3, -2, 13, -2, 4],
        [9, 8, 1, -2, 4],
        [9, 1, -7, 5, -1],
        [2, -6, 6, 5, 1],
        [4, 5, 0, -2, 2],
    ]
)


@pytest.mark.parametrize("width", [None, 4])
def test_a9_golub_and_reinsch_8_by_5(lab: Any, width: int | None) -> None:
    # [M] Golub, Reinsch, Numer. Math. 14 (1970) 403: sqrt(1248), 20, sqrt(384), 0, 0. Rank 3, so four rows suffice.
    made = decompose(lab, GOLUB_REINSCH, width)
    assert_values(made, np.array([np.sqrt(1248), 20, np.sqrt(384), 0, 0]))
    assert made.energy_total == pytest.approx(1248 + 400 + 384, rel=1e-14)


def test_a9b_golub_and_reinsch_20_by_21(lab: Any) -> None:
    # [M] the same paper: 21 - i on the diagonal, -1 above, 20 x 21: sqrt(k (k + 1)), k = 20 .. 1.
    matrix = np.zeros((20, 21))
    matrix[np.triu_indices(20, 1, 21)] = -1
    matrix[np.arange(20), np.arange(20)] = 20 - np.arange(20)
    k = np.arange(1.0, 21)
    assert_values(decompose(lab, matrix), np.sqrt(k * (k + 1)))


def test_a10_magic_square(lab: Any) -> None:
    # [M] MATLAB documentation, magic(4): 34, 8 sqrt 5, 2 sqrt 5, 0.
    magic = np.array([[16, 2, 3, 13], [5, 11, 10, 8], [9, 7, 6, 12], [4, 14, 15, 1]])
    assert_values(decompose(lab, magic), np.array([34, 8 * np.sqrt(5), 2 * np.sqrt(5), 0]))


def test_a10_example_of_four_by_five(lab: Any) -> None:
    # [M] Wikipedia, Singular value decomposition, Example: 3, sqrt 5, 2, 0.
    matrix = np.zeros((4, 5))
    matrix[0, 0], matrix[0, 4], matrix[1, 2], matrix[3, 1] = 1, 2, 3, 2
    made = decompose(lab, matrix)
    assert_values(made, np.array([3, np.sqrt(5), 2, 0]))
    np.testing.assert_allclose(made.modes, np.eye(4)[:, [1, 0, 3]], atol=1e-12)


def test_a10_kac_clement(lab: Any) -> None:
    # [M] Clement, SIAM Review 1 (1959) 50: eigenvalues -20, -18 .. 20; made symmetric, singular values in exact pairs.
    i = np.arange(1.0, 21)
    off = np.sqrt(i * (21 - i))
    made = decompose(lab, np.diag(off, 1) + np.diag(off, -1))
    assert_values(made, np.abs(np.arange(-20.0, 21, 2)))
