"""Matrices whose decomposition is known in closed form come out right through the whole pipeline on object storage.

Sources stand beside each check; [M] marks a citation from memory that was confirmed by computing. Identity probes are
held to the accuracy of double precision, real probes to what two reads promise. Labels A1 to A15 number the known
decompositions; more are in ``test_outside_matrices.py`` and ``test_outside_oscillations.py``, in local folders.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from campaigns import FROM_NAME, STEP_NS, Found, even_times, job_text, run_job, write_array, write_vector, write_wide

from shardfold.store import open_store

KEEP_MEAN: dict[str, Any] = {"remove": []}
HERTZ = 1e9 / STEP_NS


class Shore:
    """A campaign and a dossier side by side in object storage."""

    def __init__(self, folder: Any) -> None:
        self._place, self._endpoint = folder.location, folder.endpoint
        self.campaign = open_store(f"{self._place}/campaign", self._endpoint)

    def run(self, layout: str, rank: int, modes: dict[str, Any] | None = None, **blocks: Any) -> Found:
        blocks |= {"modes": {"rank": rank} | (modes or {})}
        places = (f"{self._place}/campaign", f"{self._place}/dossier")
        return run_job(job_text(*places, layout, self._endpoint, **blocks))


@pytest.fixture
def shore(folder: Any) -> Shore:
    return Shore(folder)


def sines(found: np.ndarray, exact: np.ndarray) -> np.ndarray:
    """Return the sine of the angle between each found unit vector and the exact direction, column by column."""
    exact = exact / np.linalg.norm(exact, axis=0)
    return np.asarray(np.linalg.norm(found - exact * (exact * found).sum(axis=0), axis=0))


def assurance(found: np.ndarray, exact: np.ndarray) -> np.ndarray:
    """Return the modal assurance criterion of each pair of columns (Allemang and Brown, IMAC 1982)."""
    return np.asarray((found * exact).sum(axis=0) ** 2 / (found**2).sum(axis=0) / (exact**2).sum(axis=0))


def plane_sine(found: np.ndarray, exact: np.ndarray) -> float:
    """Return the sine of the largest angle between two column spaces."""
    basis, other = np.linalg.qr(found)[0], np.linalg.qr(exact)[0]
    return float(np.linalg.norm(other - basis @ (basis.T @ other), 2))


def summation(n: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return the lower-triangular matrix of ones, its singular values and left vectors.

    Its inverse is a bidiagonal difference, so that sigma_k = 1 / (2 sin((2k-1) pi / (4n+2))) and the left vectors are
    sin((2k-1) j pi / (2n+1)) [M: classical].
    """
    odd, j = 2 * np.arange(1, n + 1) - 1, np.arange(1, n + 1)
    values = 1 / (2 * np.sin(odd * np.pi / (4 * n + 2)))
    return np.tril(np.ones((n, n))), values, np.sin(np.outer(j, odd) * np.pi / (2 * n + 1))


@pytest.mark.parametrize(
    ("design", "reads", "value_error", "worst_sine"),
    [
        ({"summary": "whole", "width": 100}, 1, 1e-12, 1e-11),
        ({"summary": "exact"}, 1, 1e-12, 1e-11),
        ({"width": 40}, 2, 5e-6, 1e-3),
    ],
    ids=["identity", "exact", "two-reads"],
)
def test_a1_cumulative_sum(
    shore: Shore, design: dict[str, Any], reads: int, value_error: float, worst_sine: float
) -> None:
    matrix, values, left = summation(200)
    write_vector(shore.campaign, matrix, even_times(200), shards=4, row_group=32)
    found = shore.run("vector", 5, KEEP_MEAN | {"reads": reads}, design=design | {"leaf": "5 s"})
    np.testing.assert_allclose(found.values, values[:5], rtol=value_error)
    assert sines(found.modes, left[:, :5]).max() < worst_sine
    # The energy, half of n (n + 1) ones, is exact whatever the probe; values are lower bounds.
    assert (found.values < values[:5] * (1 + 1e-12)).all()
    assert found.result.manifest["quality"]["energy"] == pytest.approx(200 * 201 / 2, rel=1e-13)
    if reads == 1:
        np.testing.assert_allclose(found.column("energy_fraction"), values[:5] ** 2 / 20_100, rtol=1e-12)


def test_a4_discrete_brownian_bridge(shore: Shore) -> None:
    # min(i,j) - ij/(n+1) is the inverse of tridiag(-1, 2, -1), whose eigenvalues are 4 sin^2(k pi / (2(n+1))) and whose
    # vectors are sines: Strang, SIAM Review 41 (1999) 135 [M].
    n, rank = 50, 6
    i, k = np.arange(1, n + 1), np.arange(1, rank + 1)
    matrix = np.minimum.outer(i, i) - np.outer(i, i) / (n + 1)
    write_wide(shore.campaign, matrix, even_times(n))
    found = shore.run("wide", rank, KEEP_MEAN)
    np.testing.assert_allclose(found.values, 1 / (4 * np.sin(k * np.pi / (2 * (n + 1))) ** 2), rtol=1e-11)
    exact = np.sin(np.outer(i, k) * np.pi / (n + 1))
    assert sines(found.modes, exact).max() < 1e-11
    # The matrix is symmetric: its right vectors are the same sines.
    assert sines(found.coefficients.T / found.values, exact).max() < 1e-11


def test_a4c_first_difference(shore: Shore) -> None:
    # n x (n+1), rows (-1, 1): sigma_k = 2 sin(k pi / (2(n+1))), right vectors DCT-II, left vectors sines: Strang,
    # SIAM Review 41 (1999) 135 [M]. Every row sums to zero, so removing the mean changes nothing.
    n = 12
    matrix = np.diff(np.eye(n + 1), axis=0)
    write_array(shore.campaign, matrix, even_times(n + 1), orient="channels_by_samples")
    found = shore.run("array", n, source={"orient": "channels_by_samples"})
    k, j = np.arange(n, 0, -1), np.arange(n + 1)
    np.testing.assert_allclose(found.values, 2 * np.sin(k * np.pi / (2 * (n + 1))), rtol=1e-12)
    assert sines(found.coefficients.T / found.values, np.cos(np.outer(j + 0.5, k) * np.pi / (n + 1))).max() < 1e-12
    assert sines(found.modes, np.sin(np.outer(j[1:], k) * np.pi / (n + 1))).max() < 1e-12
    np.testing.assert_allclose(found.mean, 0, atol=1e-16)


@pytest.mark.parametrize("orient", ["channels_by_samples", "samples_by_channels"])
def test_a9_rank_three_leaves_blanks(shore: Shore, orient: str) -> None:
    # 8 x 5, singular values sqrt(1248), 20, sqrt(384), 0, 0: Golub and Reinsch, Numer. Math. 14 (1970) 403 [M].
    numbers = np.array(
        [
            [22, 10, 2, 3, 7],
            [14, 7, 10, 0, 8],
            [-1, 13, -1, -11, 3],
            [-3, -2, 13, -2, 4],
            [9, 8, 1, -2, 4],
            [9, 1, -7, 5, -1],
            [2, -6, 6, 5, 1],
            [4, 5, 0, -2, 2],
        ],
        dtype=np.int16,
    )
    matrix = numbers if orient == "channels_by_samples" else numbers.T  # the files are the same, the roles are not
    write_array(shore.campaign, matrix, orient=orient, shards=2)
    found = shore.run("array", 5, KEEP_MEAN, source={"orient": orient, "time": "none"})
    np.testing.assert_allclose(found.values[:3], [np.sqrt(1248), 20, np.sqrt(384)], rtol=1e-12)
    np.testing.assert_allclose(found.modes[:, :3] @ found.coefficients[:3], matrix, atol=1e-12)
    # What lies under the rounding floor is null in every table, never a small number.
    assert found.result.manifest["quality"]["modes"] == 3
    for table, stem in ((found.result.modes, "mode"), (found.result.coefficients(), "c")):
        nulls = [table.column(f"{stem}_{number:02d}").null_count for number in range(1, 6)]
        assert nulls == [0, 0, 0, len(table), len(table)]
    for name in ("singular_value", "rms", "energy_fraction", "energy_cumulative", "peak_channel", "rms_at_peak"):
        assert found.result.mode_table.column(name).to_pylist()[3:] == [None, None], name
    rebuilt = found.result.rebuild()
    assert len(rebuilt) == matrix.shape[1]
    assert all(np.isfinite(rebuilt.column(f"ch{place:05d}").to_numpy()).all() for place in range(len(matrix)))


def test_a11f_simply_supported_beam(shore: Shore) -> None:
    # Shapes sin(m pi j/(n+1)) at equispaced inner points are exactly orthogonal (DST-I) [M]; natural frequencies of an
    # Euler-Bernoulli beam go with m^2. Whole periods of three of them are orthogonal in time.
    points, samples, cycles = 20, 2000, np.array([50, 200, 450])
    shapes = np.sin(np.outer(np.arange(1, points + 1), [1, 2, 3]) * np.pi / (points + 1))
    series = np.sin(2 * np.pi * np.outer(cycles, np.arange(samples)) / samples + 0.3)
    matrix = shapes @ (np.array([[3.0], [1.0], [0.5]]) * series) + 40
    write_vector(shore.campaign, matrix, even_times(samples), row_group=100)
    found = shore.run("vector", 3, design={"leaf": "1 min"})
    assert sines(found.modes, shapes).max() < 1e-12
    np.testing.assert_allclose(found.modes.T @ found.modes, np.eye(3), atol=1e-13)
    expected = np.array([3, 1, 0.5]) * np.sqrt((points + 1) / 2 * samples / 2)
    np.testing.assert_allclose(found.values, expected, rtol=1e-12)
    np.testing.assert_allclose(found.mean, 40, rtol=1e-13)
    hertz = found.column("dominant_hz")
    np.testing.assert_allclose(hertz, cycles / samples * HERTZ, rtol=1e-2)
    np.testing.assert_allclose(hertz / hertz[0], [1, 4, 9], rtol=1e-2)


# Roots of 1 + cos(b) cosh(b) and the coefficient of the clamped-free beam: Blevins, Formulas for Natural Frequency and
# Mode Shape, table 8-1 [M]; the roots also in Thomson, Theory of Vibration, appendix D.
CANTILEVER_ROOTS = np.array([1.87510407, 4.69409113, 7.85475744])
CANTILEVER_SIGMAS = np.array([0.734095514, 1.018467319, 0.999224497])


def cantilever(x: np.ndarray) -> np.ndarray:
    """Return the first three shapes at the points x of (0, 1)."""
    b = np.outer(x, CANTILEVER_ROOTS)
    return np.asarray(np.cosh(b) - np.cos(b) - CANTILEVER_SIGMAS * (np.sinh(b) - np.sin(b)))


@pytest.mark.parametrize(
    ("sensors", "expected"),
    [(8, [0.999998, 0.99967, 0.9979]), (16, [1, 0.99998, 0.99988])],
)
def test_a12c_cantilever(shore: Shore, sensors: int, expected: list[float]) -> None:
    # Sampled shapes are only nearly orthogonal, so modes of largest variance are only nearly natural ones; sensors in
    # the middle of equal lengths do best. Expected figures were computed for amplitudes 1, 0.3, 0.1.
    samples = 600
    series = np.sin(2 * np.pi * np.outer([6, 38, 105], np.arange(samples)) / samples)
    shapes = cantilever((np.arange(sensors) + 0.5) / sensors)
    matrix = shapes @ (np.array([[1], [0.3], [0.1]]) * series)
    names = [f"x{place:02d}" for place in range(sensors)]
    write_wide(shore.campaign, matrix, even_times(samples), names=names, row_group=64)
    found = shore.run("wide", 3)
    assert found.result.modes.column("channel").to_pylist() == names
    np.testing.assert_allclose(assurance(found.modes, shapes), expected, atol=2e-5 if sensors == 16 else 6e-5)
    assert assurance(found.modes, shapes).min() > (0.997 if sensors == 8 else 0.9998)


def wave(points: int, samples: int, waves: int, cycles: int, backwards: float) -> np.ndarray:
    """Return cos(kx - wt) + backwards cos(kx + wt) on a ring, whole periods in space and time."""
    x = 2 * np.pi * waves * np.arange(points)[:, np.newaxis] / points
    t = 2 * np.pi * cycles * np.arange(samples) / samples
    return np.cos(x - t) + backwards * np.cos(x + t)


@pytest.mark.parametrize(
    ("points", "design", "reads", "backwards"),
    [(48, {"summary": "whole"}, 1, 0.0), (240, {"width": 12}, 1, 0.5), (240, {"width": 12}, 2, 0.0)],
    ids=["identity", "one-read", "two-reads"],
)
def test_a13_travelling_wave(shore: Shore, points: int, design: dict[str, Any], reads: int, backwards: float) -> None:
    # A to the right and B to the left: sqrt(nx nt)/2 (A + B) and |A - B|, by a trigonometric identity; see Feeny,
    # J. Sound Vib. 310 (2008) 24 [M]. With B = 0 the two are equal and only their plane is defined.
    samples, waves = 320, 3
    matrix = wave(points, samples, waves, 20, backwards)
    write_array(shore.campaign, matrix, even_times(samples))
    found = shore.run("array", 2, {"reads": reads}, source={"time": FROM_NAME}, design=design | {"leaf": "10 s"})
    assert len(found.result.manifest["probes"]) == reads
    size = np.sqrt(points * samples) / 2
    np.testing.assert_allclose(found.values, [size * (1 + backwards), size * (1 - backwards)], rtol=1e-10)
    angle = 2 * np.pi * waves * np.arange(points) / points
    assert plane_sine(found.modes, np.column_stack([np.cos(angle), np.sin(angle)])) < 1e-10
    np.testing.assert_allclose(found.modes @ found.coefficients, matrix, atol=1e-10)
    # Members of the pair are in quadrature, in space and in time.
    right = found.coefficients / found.values[:, np.newaxis]
    np.testing.assert_allclose(right @ right.T, np.eye(2), atol=1e-10)
    captured = found.result.manifest["quality"]["captured_fraction"]
    assert captured == pytest.approx(1, abs=1e-12)
