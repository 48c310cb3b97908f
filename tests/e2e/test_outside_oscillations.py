"""Modes of largest variance against natural modes, waves and random walks, through the whole pipeline.

Modes that a campaign holds are natural modes only under conditions, and these tests hold the pipeline to the published
figures on both sides of them: masses as channel weights, quadrature weights for uneven sensors, light damping, and what
fails without. Sources stand beside each check: [R] was read in a public copy, [M] quoted from memory, [D] derived, and
every figure was confirmed by computing. Labels A11 to A15 as in ``test_outside_matrices.py``.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import scipy.linalg
import scipy.optimize
from campaigns import Found, even_times, job_text, put_table, run_job, write_vector

from shardfold.store import open_store

Floats = np.ndarray
SECOND_NS = 10**9


def find_modes(
    place: Path, matrix: Floats, rank: int, *, weight: Floats | None = None, step_ns: int = SECOND_NS, **modes: Any
) -> Found:
    """Run a job on an evenly sampled matrix (channels, samples), with a weight per channel if there is one."""
    write_vector(open_store(f"{place}/campaign"), matrix, even_times(matrix.shape[1], step_ns), row_group=256)
    source: dict[str, Any] = {}
    if weight is not None:
        names = [f"ch{number:05d}" for number in range(len(matrix))]
        put_table(open_store(str(place)), "channels.parquet", {"channel": names, "weight": weight})
        source["channels"] = {"table": f"{place}/channels.parquet"}
    places = (f"{place}/campaign", f"{place}/dossier")
    return run_job(job_text(*places, "vector", source=source, modes={"rank": rank} | modes))


def assurance(found: Floats, exact: Floats) -> Floats:
    """Return the modal assurance criterion of each pair of columns (Allemang and Brown, IMAC 1982)."""
    return np.asarray((found * exact).sum(axis=0) ** 2 / (found**2).sum(axis=0) / (exact**2).sum(axis=0))


def clamped_free(b: float) -> float:
    return float(np.cos(b) + 1 / np.cosh(b))


def ends_alike(b: float) -> float:
    return float(np.cos(b) - 1 / np.cosh(b))


# Roots of a beam's frequency equation and coefficients of its shapes. Three or four digits: Thomson, Theory of
# Vibration, appendix D, p. 510 [R]; all: Blevins, Formulas for Natural Frequency and Mode Shape, table 8-1 [M].
ROOTS = {
    "clamped-free": [1.87510407, 4.69409113, 7.85475744, 10.99554073, 14.13716839],
    "clamped-clamped": [4.73004074, 7.85320462, 10.9956079, 14.1371655, 17.2787597],
    "free-free": [4.73004074, 7.85320462, 10.9956079, 14.1371655, 17.2787597],
}
COEFFICIENTS = {
    "clamped-free": [0.734095514, 1.018467319, 0.999224497],
    "clamped-clamped": [0.982502215, 1.000777312, 0.999966450],
    "free-free": [0.982502215, 1.000777312, 0.999966450],
}
EQUATION: dict[str, Callable[[float], float]] = {
    "clamped-free": clamped_free,
    "clamped-clamped": ends_alike,
    "free-free": ends_alike,
}


def roots(ends: str, count: int = 3) -> Floats:
    """Return the first roots of the frequency equation, cos b cosh b = -1 or 1, to rounding."""
    return np.array([scipy.optimize.brentq(EQUATION[ends], b - 0.1, b + 0.1, xtol=1e-15) for b in ROOTS[ends][:count]])


def coefficients(ends: str, b: Floats) -> Floats:
    """Return the coefficient sigma of the shapes."""
    sign = 1 if ends == "clamped-free" else -1
    return np.asarray((np.cosh(b) + sign * np.cos(b)) / (np.sinh(b) + sign * np.sin(b)))


def shapes(ends: str, x: Floats, count: int = 3) -> Floats:
    """Return the first shapes (points, count) at the points x of [0, 1]; their mean square over the beam is 1."""
    b = roots(ends, count)
    sign, bx = (1 if ends == "free-free" else -1), np.outer(x, b)
    return np.asarray(np.cosh(bx) + sign * np.cos(bx) - coefficients(ends, b) * (np.sinh(bx) + sign * np.sin(bx)))


@pytest.mark.parametrize("ends", list(ROOTS))
def test_a11_shapes_of_beams_at_gauss_points(tmp_path: Path, ends: str) -> None:
    # A11, A11c, A11e: the integral of phi_i phi_j over the beam is L delta_ij [M, Blevins]. With quadrature weights in
    # the channel table the sampled shapes are orthonormal, and the modes are the shapes, scale included.
    np.testing.assert_allclose(roots(ends, 5), ROOTS[ends], atol=5e-8)
    np.testing.assert_allclose(coefficients(ends, roots(ends)), COEFFICIENTS[ends], atol=1e-8)
    nodes, weight = np.polynomial.legendre.leggauss(24)
    points, weight = (nodes + 1) / 2, weight / 2
    samples = 2000
    series = np.sin(2 * np.pi * np.outer([20, 126, 352], np.arange(samples)) / samples)
    exact = shapes(ends, points)
    np.testing.assert_allclose((exact * weight[:, np.newaxis]).T @ exact, np.eye(3), atol=1e-10)
    found = find_modes(tmp_path, exact @ (np.array([[1], [0.3], [0.1]]) * series), 3, weight=weight)
    np.testing.assert_allclose(np.abs(found.modes), np.abs(exact), atol=1e-8)
    assert assurance(found.modes, exact).min() > 1 - 1e-12
    np.testing.assert_allclose(found.values, np.array([1, 0.3, 0.1]) * np.sqrt(samples / 2), rtol=1e-9)


@pytest.mark.parametrize(
    ("ends", "ratios"), [("clamped-free", [1, 6.2669, 17.5475]), ("free-free", [1, 2.7565, 5.4039])]
)
def test_a11_frequencies_of_beams(tmp_path: Path, ends: str, ratios: list[float]) -> None:
    # Natural frequencies go with the squares of the roots: 1, 6.2669, 17.5475 for the clamped-free beam [R, Thomson].
    b = roots(ends)
    np.testing.assert_allclose((b / b[0]) ** 2, ratios, atol=5e-5)
    hertz, samples, step = 1.25, 4000, 0.01
    times = step * np.arange(samples)
    series = np.cos(2 * np.pi * hertz * np.outer((b / b[0]) ** 2, times))
    exact = shapes(ends, (np.arange(16) + 0.5) / 16)
    matrix = exact @ (np.array([[1], [0.3], [0.1]]) * series)
    found = find_modes(tmp_path, matrix, 3, step_ns=int(step * SECOND_NS))
    np.testing.assert_allclose(found.column("dominant_hz"), hertz * np.array(ratios), rtol=5e-3)
    assert assurance(found.modes, exact).min() > 0.995


def test_a11e_sampled_shapes_are_orthogonal_at_midpoints_only() -> None:
    # Largest cosine between two of five sampled shapes of the clamped-free beam [D]: the reason for weights.
    for sensors, middle, tip in ((10, 0.044, 0.22), (20, 0.011, 0.11), (50, 0.0017, 0.042), (200, 0.0001, 0.010)):
        for points, published in (((np.arange(sensors) + 0.5), middle), (np.arange(1, sensors + 1), tip)):
            sampled = shapes("clamped-free", points / sensors, 5)
            sampled /= np.linalg.norm(sampled, axis=0)
            assert np.abs(sampled.T @ sampled - np.eye(5)).max() == pytest.approx(published, rel=0.05)


@pytest.mark.parametrize(("weighted", "expected"), [(False, [0.9995, 0.941, 0.899]), (True, [0.9999, 0.998, 0.99])])
def test_a12c_sensors_up_to_the_tip_need_weights(tmp_path: Path, weighted: bool, expected: list[float]) -> None:
    # Eight sensors at j/n, amplitudes 1, 0.3, 0.1 [D]; with trapezoid weights (half at the tip) the modes are nearly
    # natural again. Sensors at midpoints, which do better still: ``test_known_decompositions.py``.
    weight = np.append(np.full(7, 1 / 8), 1 / 16) if weighted else None
    exact = shapes("clamped-free", np.arange(1, 9) / 8)
    series = np.sin(2 * np.pi * np.outer([6, 38, 105], np.arange(600)) / 600)
    found = find_modes(tmp_path, exact @ (np.array([[1], [0.3], [0.1]]) * series), 3, weight=weight)
    if weighted:
        assert (assurance(found.modes, exact) > expected).all()
    else:
        np.testing.assert_allclose(assurance(found.modes, exact), expected, atol=5e-4)


MASSES, STEP = 8, 0.5
ORDER = np.arange(1, MASSES + 1)
CHAIN = np.sin(np.outer(ORDER, ORDER) * np.pi / (MASSES + 1)) * np.sqrt(2 / (MASSES + 1))
OMEGA = 2 * np.sin(ORDER * np.pi / (2 * (MASSES + 1)))


def decay(omega: Floats, amplitude: Floats, damping: float, seconds: float, seed: int) -> Floats:
    """Return free decays (modes, samples) with random phases."""
    phase = np.random.Generator(np.random.PCG64(seed)).uniform(0, 2 * np.pi, (len(omega), 1))
    times = np.arange(0, seconds, STEP)
    rate = omega[:, np.newaxis] * times
    return np.asarray(
        amplitude[:, np.newaxis] * np.exp(-damping * rate) * np.cos(np.sqrt(1 - damping**2) * rate + phase)
    )


@pytest.mark.parametrize(
    ("seconds", "damping", "least"),
    [
        (500, 0.0, [0.9999, 0.9999, 0.9995, 0.998]),
        (2000, 0.0, [0.9999, 0.9999, 0.9999, 0.9999]),
        (2000, 0.0005, [0.9999, 0.9999, 0.9999, 0.9998]),
        (2000, 0.005, [0.999, 0.999, 0.996, 0.987]),
        (2000, 0.01, [0.999, 0.997, 0.987, 0.95]),
    ],
)
def test_a12_free_vibration_shows_the_natural_modes(
    tmp_path: Path, seconds: float, damping: float, least: list[float]
) -> None:
    # Eight equal masses and springs between walls, amplitudes 1/k. Modes of largest variance converge to the natural
    # ones for equal masses, light damping and long records [R]: Feeny, Kappagantu, J. Sound Vib. 211 (1998) 607. Least
    # values are the worst of 20 phases; five phases here.
    for seed in range(5):
        series = decay(OMEGA, 1 / ORDER, damping, seconds, seed)
        found = find_modes(tmp_path / str(seed), CHAIN @ series, 4, step_ns=int(STEP * SECOND_NS))
        assert (assurance(found.modes, CHAIN[:, :4]) > least).all()
        if damping == 0 and seconds == 2000:
            np.testing.assert_allclose(found.column("rms") ** 2, 1 / (2 * ORDER[:4] ** 2), rtol=2e-3)
            np.testing.assert_allclose(found.column("dominant_hz"), OMEGA[:4] / (2 * np.pi), rtol=5e-3)


def test_a12_strong_damping_hides_the_natural_modes(tmp_path: Path) -> None:
    # 5 % of critical damping [D]: worst of 20 phases 0.995 0.946 0.746 0.315. The method is not to blame, the data are.
    series = decay(OMEGA, 1 / ORDER, 0.05, 500, 0)
    found = find_modes(tmp_path, CHAIN @ series, 4, step_ns=int(STEP * SECOND_NS))
    values = assurance(found.modes, CHAIN[:, :4])
    assert values[0] > 0.99
    assert (values[2:] < 0.9).all()
    exact = np.linalg.svd(CHAIN @ (series - series.mean(axis=1, keepdims=True)), full_matrices=False)[0]
    assert assurance(found.modes, exact[:, :4]).min() > 1 - 1e-10


def test_a12_unequal_masses_need_their_weights(tmp_path: Path) -> None:
    # Masses 1 to 5: M^(1/2) x has the natural modes, x has not [R, the same abstract]. A channel's weight is its mass.
    mass = np.linspace(1, 5, MASSES)
    stiffness = 2 * np.eye(MASSES) - np.eye(MASSES, k=1) - np.eye(MASSES, k=-1)
    squares, natural = scipy.linalg.eigh(stiffness, np.diag(mass))
    matrix = natural @ decay(np.sqrt(squares), 1 / ORDER, 0.0, 4000, 0)
    plain = find_modes(tmp_path / "plain", matrix, 4, step_ns=int(STEP * SECOND_NS))
    assert (assurance(plain.modes, natural[:, :4])[1:] < 0.9).all()
    weighted = find_modes(tmp_path / "weighted", matrix, 4, weight=mass, step_ns=int(STEP * SECOND_NS))
    assert assurance(weighted.modes, natural[:, :4]).min() > 0.9999
    # Modes are in channel units, orthonormal by mass, as natural modes are.
    np.testing.assert_allclose((weighted.modes * mass[:, np.newaxis]).T @ weighted.modes, np.eye(4), atol=1e-12)


def test_a12_equal_amplitudes_leave_modes_undetermined(tmp_path: Path) -> None:
    # Equal mean squares of all modes [D]: values are equal within 2 %, and no mode found is a natural one.
    found = find_modes(tmp_path, CHAIN @ decay(OMEGA, np.ones(MASSES), 0.0, 2000, 0), 8, step_ns=int(STEP * SECOND_NS))
    assert found.values[0] / found.values[-1] < 1.02
    assert assurance(found.modes, CHAIN).max() < 0.9


def test_a12b_variances_of_a_decay(tmp_path: Path) -> None:
    # Once decayed, the mean square of a mode is A^2/(4 zeta omega T) [D], to 2 %.
    found = find_modes(
        tmp_path, CHAIN @ decay(OMEGA, 1 / ORDER, 0.005, 2000, 0), 4, step_ns=int(STEP * SECOND_NS), remove=[]
    )
    expected = 1 / (ORDER**2 * 4 * 0.005 * OMEGA * 2000)
    np.testing.assert_allclose(found.column("rms") ** 2, expected[:4], rtol=0.02)


def test_a13_a_wave_on_an_open_array(tmp_path: Path) -> None:
    # 1.3 wavelengths and 7.7 periods of cos(kx - wt): no whole numbers, so two unequal values, and still rank 2 [D].
    # cos kx cos wt + sin kx sin wt, so the squares are eigenvalues of the product of two 2 x 2 Gram matrices.
    x, t = 2 * np.pi * 1.3 * np.arange(64) / 64, 2 * np.pi * 7.7 * np.arange(400) / 400
    space, time = (np.stack([np.cos(a), np.sin(a)]) for a in (x, t))
    squares = np.sort(np.linalg.eigvals((space @ space.T) @ (time @ time.T)).real)[::-1]
    found = find_modes(tmp_path, np.cos(x[:, np.newaxis] - t), 4, remove=[])
    np.testing.assert_allclose(found.values[:2], np.sqrt(squares), rtol=1e-10)
    assert np.isnan(found.values[2:]).all()
    np.testing.assert_allclose(found.column("energy_fraction")[:2], [0.5665, 0.4335], atol=1e-4)
    np.testing.assert_allclose(found.modes[:, :2] @ found.coefficients[:2], np.cos(x[:, np.newaxis] - t), atol=1e-12)


def test_a15_a_random_walk_of_many_channels(tmp_path: Path) -> None:
    # Energies 6/(pi k)^2 and cosines as coefficients, a phantom oscillation without any [R]: Antognini,
    # Sohl-Dickstein, PCA of high dimensional random walks, arXiv 1806.08805. 500 steps of 4000 channels; five runs
    # differ by 0.003 in the first share.
    steps = np.random.Generator(np.random.PCG64(1)).standard_normal((4000, 500))
    found = find_modes(tmp_path, np.cumsum(steps, axis=1), 3, reads=2)
    order = np.arange(1, 4)
    np.testing.assert_allclose(found.column("energy_fraction"), 6 / (np.pi * order) ** 2, atol=0.01)
    cosines = np.cos(np.outer(order, np.arange(500) + 0.5) * np.pi / 500) * np.sqrt(2 / 500)
    overlap = (found.coefficients * cosines).sum(axis=1) / found.values
    assert (np.abs(overlap) > [0.9995, 0.999, 0.999]).all()
