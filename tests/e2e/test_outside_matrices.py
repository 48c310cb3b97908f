"""Matrices and covariance kernels with known decompositions come out right through the whole pipeline.

A matrix is written as shards, a channel per row and a sample per column, and decomposed about zero. Sources stand
beside each check; [M] marks one quoted from memory, and every value was confirmed by computing. Labels A1 to A15 number
the known decompositions; those of beams and oscillations are in ``test_outside_oscillations.py``, the first of these
matrices on object storage in ``test_known_decompositions.py``.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
import scipy.linalg
import scipy.optimize
import scipy.special
from campaigns import Found, job_text, put_table, run_job, write_array

from shardfold.store import open_store

EPS = np.finfo(np.float64).eps
SUMMARIES = ["whole", "exact"]


@pytest.fixture(params=SUMMARIES)
def summary(request: pytest.FixtureRequest) -> str:
    return str(request.param)


def decompose(
    place: Path, matrix: np.ndarray, rank: int, *, weight: np.ndarray | None = None, reads: int = 1, **design: Any
) -> Found:
    """Run a job on the columns of a matrix, with a weight per channel if there is one."""
    write_array(open_store(f"{place}/campaign"), matrix)
    source: dict[str, Any] = {"time": "none"}
    if weight is not None:
        names = [f"ch{number:05d}" for number in range(len(matrix))]
        put_table(open_store(str(place)), "channels.parquet", {"channel": names, "weight": weight})
        source["channels"] = {"table": f"{place}/channels.parquet"}
    modes = {"rank": rank, "remove": [], "reads": reads}
    places = (f"{place}/campaign", f"{place}/dossier")
    return run_job(job_text(*places, "array", source=source, modes=modes, design=design))


def within(found: Found, summary: str) -> np.ndarray:
    """Return how far off the found values (r,) may be.

    Sums of squares are right to rounding of the energy, and so is a value above the root of that; a triangular factor
    keeps values to rounding of the largest.
    """
    if summary == "exact":
        return np.full(found.values.shape, 1e-13 * found.values[0])
    return np.asarray(20 * EPS * found.result.manifest["quality"]["energy"] / found.values)


def assert_values(found: Found, exact: np.ndarray, summary: str) -> None:
    """All values agree as far as the summary can tell them; what is blank is too small for it to tell."""
    assert found.result.manifest["quality"]["energy"] == pytest.approx(np.sum(exact**2), rel=1e-12)
    exact = np.sort(exact)[::-1][: len(found.values)]
    told = np.isfinite(found.values)
    assert (np.abs(found.values - exact)[told] <= within(found, summary)[told]).all()
    # Squares up to 16 eps of the energy (times the rounding of the largest, in a triangular factor) are left blank.
    blank_below = 8 * np.sqrt(EPS * np.sum(exact**2)) if summary == "whole" else 1e-13 * exact[0]
    assert (exact[~told] < blank_below).all()


def sines(found: np.ndarray, exact: np.ndarray) -> np.ndarray:
    """Return the sine of the angle between each found direction and the exact one, column by column."""
    found, exact = found / np.linalg.norm(found, axis=0), exact / np.linalg.norm(exact, axis=0)
    return np.asarray(np.linalg.norm(found - exact * (exact * found).sum(axis=0), axis=0))


def test_a2_wiener_process(tmp_path: Path) -> None:
    # Karhunen-Loeve expansion of min(s, t) on [0, 1]: 1/((k-1/2) pi)^2, sqrt 2 sin((k-1/2) pi t) [M]: Loeve,
    # Probability Theory; Ghanem, Spanos, Stochastic Finite Elements, 1991. Midpoints are right to O(N^-2); the matrix
    # is a factor of the covariance, so values are roots.
    points = (np.arange(400) + 0.5) / 400
    factor = scipy.linalg.cholesky(np.minimum.outer(points, points), lower=True) / np.sqrt(400)
    found = decompose(tmp_path, factor, 3, reads=2)
    order = np.arange(1, 4) - 0.5
    np.testing.assert_allclose(found.values**2, 1 / (order * np.pi) ** 2, rtol=1e-4)
    np.testing.assert_allclose(found.values**2, [0.405285, 0.045032, 0.016211], atol=2e-6)
    assert found.column("energy_fraction")[0] == pytest.approx(8 / np.pi**2, rel=1e-4)
    assert found.result.manifest["quality"]["energy"] == pytest.approx(1 / 2, rel=1e-12)
    assert sines(found.modes, np.sin(np.outer(points, order) * np.pi)).max() < 1e-4


def test_a3_brownian_bridge(tmp_path: Path) -> None:
    # min(s, t) - s t: 1/(k pi)^2, sqrt 2 sin(k pi t) [M]: Anderson, Darling, Ann. Math. Stat. 23 (1952) 193.
    points = (np.arange(400) + 0.5) / 400
    covariance = np.minimum.outer(points, points) - np.outer(points, points)
    found = decompose(tmp_path, scipy.linalg.cholesky(covariance, lower=True) / np.sqrt(400), 3, reads=2)
    order = np.arange(1, 4)
    np.testing.assert_allclose(found.values**2, 1 / (order * np.pi) ** 2, rtol=1e-4)
    np.testing.assert_allclose(found.values**2, [0.101321, 0.025330, 0.011258], atol=2e-6)
    assert found.column("energy_fraction")[0] == pytest.approx(6 / np.pi**2, rel=1e-4)
    assert sines(found.modes, np.sin(np.outer(points, order) * np.pi)).max() < 1e-4


def test_a5_ornstein_uhlenbeck_process_on_gauss_points(tmp_path: Path) -> None:
    # exp(-c|s-t|) on [-a, a], c = a = 1: 2c/(w^2+c^2), even functions cos wt with c = w tan wa, odd ones sin wt with
    # w = -c tan wa [M]: Van Trees, Detection, Estimation and Modulation Theory; Ghanem, Spanos 1991. The points are not
    # even: their quadrature weights stand in the channel table. The kink of the kernel leaves an error of O(N^-2).
    points, weight = scipy.special.roots_legendre(400)
    even = [scipy.optimize.brentq(lambda w: w * np.sin(w) - np.cos(w), k * np.pi, (k + 0.5) * np.pi) for k in (0, 1)]
    odd = scipy.optimize.brentq(lambda w: w * np.cos(w) + np.sin(w), np.pi / 2, np.pi)
    frequency = np.array([even[0], odd, even[1]])
    np.testing.assert_allclose(frequency, [0.860334, 2.028758, 3.425618], atol=1e-6)
    factor = scipy.linalg.cholesky(np.exp(-np.abs(np.subtract.outer(points, points))), lower=True)
    found = decompose(tmp_path, factor, 3, weight=weight, reads=2)
    np.testing.assert_allclose(found.values**2, 2 / (frequency**2 + 1), rtol=1e-4)
    np.testing.assert_allclose(found.values**2, [1.14931, 0.390941, 0.157049], rtol=1e-4)
    assert found.result.manifest["quality"]["energy"] == pytest.approx(2, rel=1e-12)  # the trace, 2a
    exact = np.stack([np.cos(frequency[0] * points), np.sin(odd * points), np.cos(frequency[2] * points)], axis=1)
    assert sines(found.modes, exact).max() < 1e-3  # modes are in channel units: functions, without weights
    np.testing.assert_allclose((found.modes * weight[:, np.newaxis]).T @ found.modes, np.eye(3), atol=1e-12)


def test_a5b_autoregressive_covariance(tmp_path: Path, summary: str) -> None:
    # rho^|i-j|: (1-r^2)/(1-2r cos th+r^2) at the n roots of sin((n+1)th) - 2r sin(n th) + r^2 sin((n-1)th) [M]: Kac,
    # Murdock, Szego, J. Rational Mech. Anal. 2 (1953) 767.
    n, r = 50, 0.9

    def condition(th: float) -> float:
        return float(np.sin((n + 1) * th) - 2 * r * np.sin(n * th) + r * r * np.sin((n - 1) * th))

    edges = np.pi * np.arange(n + 1) / (n + 1)
    edges[0] = 1e-6
    roots = np.array([scipy.optimize.brentq(condition, *edges[k : k + 2], xtol=1e-15) for k in range(n)])
    exact = (1 - r * r) / (1 - 2 * r * np.cos(roots) + r * r)
    matrix = r ** np.abs(np.subtract.outer(np.arange(n), np.arange(n)))
    found = decompose(tmp_path, matrix, n, summary=summary)
    np.testing.assert_allclose(found.values, exact, rtol=1e-10)
    assert found.values[0] == pytest.approx(15.931485, abs=1e-6)


def test_a6_circulant(tmp_path: Path, summary: str) -> None:
    # Values are |fft(c)|, all but two of them in equal pairs [M]: Davis, Circulant Matrices, 1979.
    c = np.random.Generator(np.random.PCG64(0)).standard_normal(48)
    found = decompose(tmp_path, scipy.linalg.circulant(c), 48, summary=summary)
    np.testing.assert_allclose(found.values, np.sort(np.abs(np.fft.fft(c)))[::-1], rtol=1e-12)


def test_a7_hilbert_matrix(tmp_path: Path, summary: str) -> None:
    # Largest value and condition number for n = 10, found with 60 digits (tables give 1.6e13) [M]: Todd; Higham,
    # Accuracy and Stability of Numerical Algorithms. Sums of squares cannot hold that range, and leave blanks.
    found = decompose(tmp_path, scipy.linalg.hilbert(10), 10, summary=summary)
    assert found.values[0] == pytest.approx(1.75191967027, abs=1e-11)
    if summary == "exact":
        assert found.values[0] / found.values[9] == pytest.approx(1.60262868702e13, rel=1e-2)
    else:
        assert np.isfinite(found.values).tolist() == 7 * [True] + 3 * [False]


def test_a7_condition_of_a_small_hilbert_matrix(tmp_path: Path, summary: str) -> None:
    # n = 5: 4.76607250e5 [M], the same sources; a smallest value 30 times above the floor of squares.
    found = decompose(tmp_path, scipy.linalg.hilbert(5), 5, summary=summary)
    relative = within(found, summary)[4] / found.values[4]
    assert relative < 2e-3
    assert found.values[0] / found.values[4] == pytest.approx(4.76607250e5, rel=relative + 1e-8)


@pytest.mark.parametrize("n", [20, 100])
def test_a7b_hilbert_values_fall_geometrically(tmp_path: Path, n: int, summary: str) -> None:
    # sigma_{1+k} <= 4 exp(-pi^2 k / log(16 g)) sigma_1, g = n^2/(2n-1) [M]: Beckermann, Townsend, SIAM J. Matrix Anal.
    # 38 (2017) 1227, worked out for this matrix.
    found = decompose(tmp_path, scipy.linalg.hilbert(n), 20, summary=summary)
    told = found.values[np.isfinite(found.values)]
    bound = 4 * np.exp(-(np.pi**2) * np.arange(told.size) / np.log(16 * n**2 / (2 * n - 1))) * told[0]
    assert told.size >= 7
    assert (told <= bound + within(found, summary)[: told.size]).all()
    assert np.max(told[1:] / bound[1:]) > 0.05  # the bound is not idle


def test_a7b_hilbert_values_of_a_random_probe(tmp_path: Path) -> None:
    # The same bound for n = 400, more channels than an exact summary takes; values are lower bounds.
    n = 400
    found = decompose(tmp_path, scipy.linalg.hilbert(n), 12)
    told = found.values[np.isfinite(found.values)]
    assert told.size >= 7
    assert (told <= 4 * np.exp(-(np.pi**2) * np.arange(told.size) / np.log(16 * n**2 / (2 * n - 1))) * told[0]).all()
    assert found.values[0] == pytest.approx(np.linalg.norm(scipy.linalg.hilbert(n), 2), rel=1e-12)


def test_a8_kahan_matrix(tmp_path: Path, summary: str) -> None:
    # n = 30, theta = 1.2: sigma_{n-1} = s^(n-2) sqrt(1+c) [M]: Zha, Amer. Math. Monthly 104 (1997) 172. The smallest
    # value, 3.085e-5, is far below the last diagonal entry of QR, 0.1299.
    s, c = np.sin(1.2), np.cos(1.2)
    matrix = s ** np.arange(30.0)[:, np.newaxis] * (np.eye(30) - c * np.triu(np.ones((30, 30)), 1))
    found = decompose(tmp_path, matrix, 30, summary=summary)
    assert found.values[28] == pytest.approx(s**28 * np.sqrt(1 + c), abs=1e-10)
    assert found.values[28] == pytest.approx(0.162667612455, abs=1e-10)
    assert found.values[29] == pytest.approx(3.085e-5, abs=1e-8)
    assert matrix[29, 29] == pytest.approx(0.1299, abs=5e-5)


def test_a9b_golub_and_reinsch_20_by_21(tmp_path: Path, summary: str) -> None:
    # 20 x 21, 21 - i on the diagonal, -1 above: sqrt(k (k+1)), k = 20 .. 1 [M]: Golub, Reinsch, Numer. Math. 14 (1970)
    # 403; the example of 8 x 5 (A9) is in ``test_known_decompositions.py``.
    matrix = np.triu(np.full((20, 21), -1.0), 1)
    matrix[np.arange(20), np.arange(20)] = 20 - np.arange(20)
    k = np.arange(1.0, 21)
    assert_values(decompose(tmp_path, matrix, 20, summary=summary), np.sqrt(k * (k + 1)), summary)


def test_a9c_golub_and_reinsch_of_rank_29(tmp_path: Path, summary: str) -> None:
    # 30 x 30, 1 on the diagonal, -1 above: 18.2029 .. 1.5002, 2.794e-9 [M], the same paper: rank 29 at a level of 1e-7,
    # which the diagonal does not show.
    matrix = np.eye(30) - np.triu(np.ones((30, 30)), 1)
    found = decompose(tmp_path, matrix, 30, summary=summary)
    np.testing.assert_allclose(found.values[[0, 28]], [18.202906, 1.500231], atol=1e-6)
    assert np.sum(found.values > 1e-7 * found.values[0]) == 29
    if summary == "exact":
        assert found.values[29] == pytest.approx(2.794e-9, rel=1e-3)
    else:
        assert np.isnan(found.values[29])


@pytest.mark.parametrize("name", ["magic", "four by five", "clement"])
def test_a10_small_matrices(tmp_path: Path, name: str, summary: str) -> None:
    # magic(4): documentation of MATLAB [M]; 4 x 5: Wikipedia, Singular value decomposition [M]; eigenvalues -20, -18 ..
    # 20, so pairs: Clement, SIAM Review 1 (1959) 50 [M].
    root = np.sqrt(np.arange(1.0, 21) * np.arange(20.0, 0, -1))
    four = np.zeros((4, 5))
    four[[0, 0, 1, 3], [0, 4, 2, 1]] = 1, 2, 3, 2
    magic = np.array([[16, 2, 3, 13], [5, 11, 10, 8], [9, 7, 6, 12], [4, 14, 15, 1]])
    matrix, exact = {
        "magic": (magic, np.array([34, 8 * np.sqrt(5), 2 * np.sqrt(5), 0])),
        "four by five": (four, np.array([3, np.sqrt(5), 2, 0])),
        "clement": (np.diag(root, 1) + np.diag(root, -1), np.abs(np.arange(-20.0, 21, 2))),
    }[name]
    found = decompose(tmp_path, matrix, len(matrix), summary=summary)
    assert_values(found, exact, summary)
    assert np.isnan(found.values).sum() == 1  # each is singular
