"""Published perturbation theory, the modal assurance criterion, and linearity hold for the modes of the kernels.

Sources stand beside each check, all quoted from memory [M] but for what says [R], read in a public copy. Labels C11 to
C14 continue those of ``test_outside_theory.py``. Random matrices are addressed or seeded: figures never change.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import scipy.stats

from shardfold.kernels import addressed, factors

Floats = np.ndarray

M, N, K, RANK = 60, 90, 16, 4
J = np.arange(1.0, M + 1)
SPECTRA = {
    "1/j": 1 / J,
    "1/j^2": 1 / J**2,
    "10^(-j/4)": 10 ** (-J[:30] / 4),
    "rank 4 + 0.1": np.where(J <= 4, 1 - J / 10, 0.1),
}


def sine_norm(found: Floats, exact: Floats) -> float:
    """Return the Frobenius norm of the sines between two column spaces."""
    return float(np.linalg.norm(found - exact @ (exact.T @ found)))


@pytest.mark.parametrize("name", list(SPECTRA))
def test_c11_angles_of_one_read_obey_perturbation_theory(lab: Any, name: str) -> None:
    # Wedin, BIT 12 (1972) 99: sqrt(|sin U|^2 + |sin V|^2) <= sqrt(|R|^2 + |S|^2)/delta with the residuals R = A V - U S
    # and S = A^T U - V S. Yu, Wang, Samworth, Biometrika 102 (2015) 315, theorem 4, and Weyl for the values.
    values = SPECTRA[name]
    matrix = lab.with_spectrum(M, N, values)
    left, exact, right = np.linalg.svd(matrix, full_matrices=False)
    ratios = []
    for seed in range(25):
        folded = lab.fold(matrix, K, seed=seed, checks=0, cuts=[40])
        made = factors.finish(folded.summary)
        u, s = made.modes[:, :RANK], made.values[:RANK]
        all_right = (made.row_map @ (folded.probe.rows @ matrix)) / made.values[:, np.newaxis]
        v = all_right[:RANK].T
        residual_u, residual_v = matrix @ v - u * s, matrix.T @ u - v * s
        assert np.linalg.norm(residual_u) < 1e-12 * exact[0]  # a row-space projection leaves nothing on this side
        moved = np.hypot(sine_norm(u, left[:, :RANK]), sine_norm(v, right[:RANK].T))
        delta = min(s[-1] - exact[RANK], s[-1])
        assert delta > 0
        bound = np.hypot(np.linalg.norm(residual_u), np.linalg.norm(residual_v)) / delta
        assert moved <= bound * (1 + 1e-6) + 1e-12
        ratios.append(moved / bound)
        error = matrix - (made.modes * made.values) @ all_right
        size = np.linalg.norm(error, 2)
        gap = exact[RANK - 1] ** 2 - exact[RANK] ** 2
        samworth = 2 * (2 * exact[0] + size) * min(np.sqrt(RANK) * size, np.linalg.norm(error)) / gap
        assert max(sine_norm(v, right[:RANK].T), sine_norm(u, left[:, :RANK])) <= samworth
        # Weyl's inequality, and values of a projection are lower bounds.
        assert (exact[: s.size] - s <= size).all()
        assert (s <= exact[: s.size] * (1 + 1e-12)).all()
    assert 0.05 < np.median(ratios) < 1  # the bound is near


@pytest.mark.parametrize(("sensors", "high", "trials"), [(8, 0.8069, 600), (20, 0.4425, 600), (100, 0.1041, 200)])
def test_c13_assurance_of_a_mode_of_noise(lab: Any, sensors: int, high: float, trials: int) -> None:
    # |a'b|^2/(a'a b'b) of independent directions is Beta(1/2, (n-1)/2), of mean 1/n: with 8 sensors a value of 0.81 is
    # chance once in 1000, by Student's t as well. Allemang and Brown, IMAC 1982 [R, title]. The first mode of white
    # noise must not favour any direction, whatever the signs of the probe.
    law = scipy.stats.beta(0.5, (sensors - 1) / 2)
    t = scipy.stats.t(sensors - 1).ppf(0.9995)
    assert law.ppf(0.999) == pytest.approx(high, abs=5e-5)
    assert law.ppf(0.999) == pytest.approx(t**2 / (t**2 + sensors - 1), rel=1e-9)
    assert law.mean() == pytest.approx(1 / sensors)
    shape = np.random.Generator(np.random.PCG64(7)).standard_normal(sensors)
    found = np.empty(trials)
    for seed in range(trials):
        noise = addressed.normals(seed, 9, np.arange(2 * sensors), sensors)
        width = None if sensors < 20 else sensors // 3
        mode = factors.finish(lab.fold(noise, width, seed=seed, checks=0).summary).modes[:, 0]
        found[seed] = (mode @ shape) ** 2 / (mode @ mode) / (shape @ shape)
    assert scipy.stats.kstest(found, law.cdf).pvalue > 1e-3
    assert np.mean(found) == pytest.approx(1 / sensors, abs=4 * law.std() / np.sqrt(trials))


def test_c13_assurance_as_an_angle() -> None:
    # The usual limits 0.9, 0.95 and 0.99 are angles of 18.43, 12.92 and 5.74 degrees; the criterion is a square.
    angles = np.degrees(np.arccos(np.sqrt([0.9, 0.95, 0.99])))
    np.testing.assert_allclose(angles, [18.43, 12.92, 5.74], atol=5e-3)


@pytest.mark.parametrize("width", [None, K])
def test_c14_a_sketch_is_linear(lab: Any, width: int | None) -> None:
    # sketch(A - mu 1') = sketch(A) - sketch(mu 1'): why the mean may be taken off, or put back, after the read.
    matrix = lab.with_spectrum(M, N, SPECTRA["1/j"])
    mean = np.random.Generator(np.random.PCG64(3)).standard_normal((M, 1))
    away, about = (lab.fold(block, width, cuts=[17, 50]) for block in (matrix + mean, matrix))
    assert lab.distance(away.summary, replaced_means(about.summary, away.summary)) < 1e-13
    stacked = about.probe.check if width is None else np.vstack([about.probe.rows, about.probe.check])
    plain = (matrix + mean) @ (stacked @ (matrix + mean)).T
    part = slice(M, M + 6) if width is None else slice(0, K + 6)
    centred = plain - N * mean @ (stacked @ mean).T
    np.testing.assert_allclose(away.summary.outer[:, part], centred, atol=1e-12 * np.abs(plain).max())
    kept = factors.finish(away.summary, keep_mean=True)
    np.testing.assert_allclose(kept.energy_total, np.sum((matrix + mean) ** 2), rtol=1e-13)
    gone = factors.finish(away.summary)
    np.testing.assert_allclose(gone.values[:10], factors.finish(about.summary).values[:10], rtol=1e-12)


def replaced_means(summary: Any, other: Any) -> Any:
    """Return a summary's moments with the means of another."""
    summary.mean, summary.right_mean = other.mean, other.right_mean
    return summary
