"""Published theory of random projections holds for the numbers of the kernels.

Expectations are compared with means over addressed random matrices, so every figure is the same in every run, and
tolerances are some standard errors of those means. Sources stand beside each check, all quoted from memory [M]. Labels
C1 to C17 number the statements; angles and noise are in ``test_outside_angles.py``. A is 120 x 160, rows of mean zero.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest
import scipy.linalg
import scipy.stats

from shardfold.kernels import addressed, background, bounds, factors

Floats = np.ndarray

M, N, K, ROWS, TRIALS = 120, 160, 20, 41, 200
J = np.arange(1.0, M + 1)
SPECTRA = {
    "1/j": 1 / J,
    "1/j^2": 1 / J**2,
    "10^(-j/4)": 10 ** (-J[:60] / 4),
    "rank 5 + 0.02": np.where(J <= 5, 1.0, 0.02),
}
KEYS = addressed.name_keys([f"channel {i}" for i in range(M)])


def tail(values: Floats, rank: int) -> float:
    """Return tau_{rank+1}, the root of the energy beyond a rank."""
    return float(np.linalg.norm(values[rank:]))


def best_split(values: Floats) -> float:
    """Return min over rho <= k - 2 of (1 + rho/(k-rho-1)) tau_{rho+1}^2."""
    return min((1 + rho / (K - rho - 1)) * tail(values, rho) ** 2 for rho in range(K - 1))


@dataclass(frozen=True)
class Trials:
    """Errors over many probes, each (trials,)."""

    values: Floats
    squared: Floats
    spectral: Floats
    from_two_sketches: Floats
    squared_of_signs: Floats


@pytest.fixture(scope="module", params=list(SPECTRA))
def trials(request: pytest.FixtureRequest, lab: Any) -> Trials:
    """Project one matrix onto the row spaces of many Gaussian probes, and of as many of random signs."""
    values = SPECTRA[request.param]
    matrix = lab.with_spectrum(M, N, values)
    errors = np.array([one_trial(lab, matrix, seed) for seed in range(TRIALS)])
    return Trials(values, *errors.T)


def one_trial(lab: Any, matrix: Floats, seed: int) -> tuple[float, float, float, float]:
    rows = addressed.normals(seed, addressed.STREAM_PROBE, KEYS, K)
    made = factors.finish(lab.fold(matrix, K, rows=rows, checks=0, cuts=[60]).summary)
    right = made.row_map @ (rows @ matrix) / made.values[:, np.newaxis]
    error = matrix - (made.modes * made.values) @ right
    second = addressed.normals(seed, addressed.STREAM_SAMPLE, np.arange(N), ROWS)
    two = matrix - (matrix @ second.T) @ np.linalg.pinv(right @ second.T) @ right
    signs = factors.finish(lab.fold(matrix, K, seed=seed, checks=0, cuts=[60]).summary)
    spectral = np.sqrt(scipy.linalg.eigvalsh(error @ error.T, subset_by_index=[M - 1, M - 1])[0])
    return missed(made), float(spectral), float(np.sum(two**2)), missed(signs)


def missed(made: factors.Factors) -> float:
    """Return the energy that all computed modes leave, |A - A P P^T|^2."""
    return made.energy_total - float(np.sum(made.values**2))


def relative_error_of_mean(sample: Floats) -> float:
    return float(np.std(sample) / np.mean(sample) / np.sqrt(len(sample)))


def test_c1_expected_error_is_below_its_bound(trials: Trials) -> None:
    # Halko, Martinsson, Tropp, SIAM Review 53 (2011) 217, theorem 10.5 for every split of the width: an upper bound.
    # Means over bounds were 0.56 0.44 0.19 0.87 for the four spectra.
    ratio = np.mean(trials.squared) / best_split(trials.values)
    assert 0.1 < ratio < 1
    assert (trials.squared >= 0.999999 * tail(trials.values, K) ** 2).all()  # Eckart and Young


def test_c1s_expected_spectral_error_is_below_its_bound(trials: Trials) -> None:
    # The same paper, theorem 10.6, for k = 10 and 10 more rows; it is loose, 5 to 17 times.
    k, p, values = 10, K - 10, trials.values
    bound = (1 + np.sqrt(k / (p - 1))) * values[k] + np.e * np.sqrt(k + p) / p * tail(values, k)
    assert values[K] <= np.mean(trials.spectral) < bound


def test_c1_the_part_that_is_exact(lab: Any) -> None:
    # E |S2 O2 O1^+|_F^2 = rho/(k-rho-1) |S2|_F^2 for a Gaussian (O1 over O2) of k columns: the proof's one equality.
    # It is exact, so it judges the addressed normal numbers.
    rho, values = 10, SPECTRA["1/j"]
    sample = np.empty(600)
    for seed in range(len(sample)):
        omega = addressed.normals(seed, addressed.STREAM_PROBE, KEYS, K).T
        sample[seed] = np.sum((values[rho:, np.newaxis] * (omega[rho:] @ np.linalg.pinv(omega[:rho]))) ** 2)
    expected = rho / (K - rho - 1) * tail(values, rho) ** 2
    assert relative_error_of_mean(sample) < 0.02
    assert np.mean(sample) == pytest.approx(expected, rel=4 * relative_error_of_mean(sample))


def test_c2_a_second_sketch_adds_what_theory_says(trials: Trials) -> None:
    # Practical sketching algorithms, SIAM J. Matrix Anal. 38 (2017) 1454: given the row space P and l Gaussian rows,
    # E |A - A Psi^T (P^T Psi^T)^+ P^T|^2 = (1 + k/(l-k-1)) |A - A P P^T|^2 exactly. Here that is 2: what the row-space
    # projection saves over two sketches of one read. The left side is dense, the right one the energies of the kernels.
    ratio = trials.from_two_sketches / trials.squared
    assert relative_error_of_mean(ratio) < 0.03
    assert np.mean(ratio) == pytest.approx(1 + K / (ROWS - K - 1), rel=4 * relative_error_of_mean(ratio))
    assert np.mean(trials.from_two_sketches) < 2 * best_split(trials.values)


def test_c2n_generalized_nystrom_bound(trials: Trials) -> None:
    # Nakatsukasa, arXiv 2009.11392 (2020), r columns and r + l' rows; the projection lies below it as well.
    factor = np.sqrt(1 + K / (ROWS - K - 1))
    bound = factor * min(np.sqrt(1 + q / (K - q - 1)) * tail(trials.values, q) for q in range(K - 1))
    assert np.mean(np.sqrt(trials.squared)) < np.mean(np.sqrt(trials.from_two_sketches)) < bound


def test_c17_signs_serve_as_well_as_normals(trials: Trials) -> None:
    # The theory is Gaussian; mean errors with signs were measured equal. Signs are what the kernels use.
    # Logarithms, because errors of a steep spectrum have heavy tails.
    signs, normals = np.log(trials.squared_of_signs), np.log(trials.squared)
    spread = 4 * np.hypot(np.std(signs), np.std(normals)) / np.sqrt(TRIALS)
    assert spread < 0.35
    assert np.mean(signs) == pytest.approx(np.mean(normals), abs=spread)
    assert np.mean(trials.squared_of_signs) < best_split(trials.values)


CHECKS = 10
QUANTILE = float(scipy.stats.chi2.ppf(0.05, CHECKS)) / CHECKS  # what upper values are divided by


@dataclass(frozen=True)
class Estimates:
    """Squared estimates over many check matrices, and the matrices they estimate."""

    sample_error: Floats
    sample_squared: Floats
    channel_error: Floats
    channel_squared: Floats
    right_error: Floats
    right_squared: Floats
    left_error: Floats
    left_squared: Floats


@pytest.fixture(scope="module", params=["1/j", "rank 5 + 0.02", "rank 21"])
def estimates(request: pytest.FixtureRequest, lab: Any) -> Estimates:
    """Fold one matrix by one probe with many check matrices."""
    values = SPECTRA.get(request.param, 1 / J[: K + 1])
    matrix = lab.with_spectrum(M, N, values)
    rows = addressed.signs(1, addressed.STREAM_PROBE, KEYS, K).astype(np.float64)
    x = rows @ matrix
    made = factors.finish(lab.fold(matrix, K, rows=rows, checks=0).summary)
    error = matrix - made.modes @ (made.row_map @ x)
    gram = matrix @ matrix.T - (made.modes * made.values**2) @ made.modes.T
    right = np.sum((matrix.T @ made.modes - (made.row_map @ x).T) ** 2, axis=0)
    squared = np.array([estimate(lab, matrix, rows, made, seed) for seed in range(600)])
    by_mode = squared[:, 2:].reshape(len(squared), 2, -1)
    left = np.sum((gram @ made.modes) ** 2, axis=0)
    return Estimates(error, squared[:, 0], gram, squared[:, 1], right, by_mode[:, 0], left, by_mode[:, 1])


def estimate(lab: Any, matrix: Floats, rows: Floats, made: factors.Factors, seed: int) -> Floats:
    """Return the squared estimates from what a summary holds.

    Of ``A - U S V^T`` and of ``A A^T - U L U^T`` as wholes; then of their residuals by mode, right ones as the kernels
    give them.
    """
    folded = lab.fold(matrix, K, rows=rows, checks=CHECKS, seed=seed)
    summary, shape = folded.summary, folded.summary.shape
    f, h = summary.outer[:, shape.xi], summary.outer[:, shape.theta]
    whole = np.sum((f - made.modes @ made.row_map @ summary.inner[shape.x, shape.xi]) ** 2) / CHECKS
    remainder = h - (made.modes * made.values**2) @ (folded.probe.check @ made.modes).T
    found = bounds.residuals(background.reduce(summary)[0], made, bounds.Checks(h, folded.probe.check))
    left = np.sum((remainder.T @ made.modes) ** 2, axis=0) / CHECKS
    return np.concatenate([[whole, np.sum(remainder**2) / CHECKS], found.right_estimate**2, left])


def assert_law(error: Floats, squared: Floats) -> None:
    """Check the mean, the variance and the tails of an estimate of |E|_F^2 from q Gaussian rows."""
    sizes = np.linalg.svd(error, compute_uv=False) ** 2
    ratio = squared / sizes.sum()
    variance = 2 / CHECKS * np.sum(sizes**2) / sizes.sum() ** 2
    assert np.mean(ratio) == pytest.approx(1, abs=4 * np.sqrt(variance / len(ratio)))
    assert np.var(ratio) == pytest.approx(variance, rel=0.3)  # chi-square: 4 standard errors are 0.23 to 0.29
    for e in (0.25, 0.5, 0.75):
        assert np.mean(ratio <= 1 - e) <= (np.exp(e) * (1 - e)) ** (CHECKS / 2)
        assert np.mean(ratio >= 1 + e) <= (np.exp(-e) * (1 + e)) ** (CHECKS / 2)


def test_c5_law_of_the_sample_checks(estimates: Estimates) -> None:
    # Streaming low-rank matrix approximation, SIAM J. Sci. Comput. 41 (2019) A2430: |(A - A^) Xi^T|^2/q has mean
    # |A - A^|^2, the law (1/q) sum sigma_i(E)^2 chi2_q, variance (2/q) |E|_4^4 and exponential tails.
    assert_law(estimates.sample_error, estimates.sample_squared)


def test_c5_law_of_the_channel_checks(estimates: Estimates) -> None:
    # The same for H = A (Theta A)^T and the error of A A^T.
    assert_law(estimates.channel_error, estimates.channel_squared)


@pytest.mark.parametrize("side", ["right", "left"])
def test_c5_residual_of_a_mode_is_chi_square(estimates: Estimates, side: str) -> None:
    # A^T u - S v and A A^T u - lambda u are vectors, errors of rank one: exactly chi-square with q degrees. Upper
    # values of 95 % divide by its 5 % quantile, 0.394 at q = 10. Modes of a level tail leave nothing but rounding.
    assert pytest.approx(0.394, abs=5e-4) == QUANTILE
    squared, error = {
        "right": (estimates.right_squared, estimates.right_error),
        "left": (estimates.left_squared, estimates.left_error),
    }[side]
    told = [mode for mode in (0, 2, 4, 9, 19) if error[mode] > 1e-20]
    assert told[:3] == [0, 2, 4]
    for mode in told:
        ratio = squared[:, mode] / error[mode]
        assert scipy.stats.kstest(CHECKS * ratio, "chi2", args=(CHECKS,)).pvalue > 1e-4
        covered = np.mean(ratio / QUANTILE >= 1)
        assert covered == pytest.approx(0.95, abs=4 * np.sqrt(0.95 * 0.05 / len(ratio)))


def test_c5_an_error_of_rank_one_is_chi_square(lab: Any) -> None:
    # Rank 21 seen by 20 rows leaves an error of rank one. Factors on the squared error: 95 % within 0.325 to 2.048,
    # 99 % within 0.216 to 2.519 at q = 10.
    matrix = lab.with_spectrum(M, N, 1 / J[: K + 1])
    rows = addressed.signs(1, addressed.STREAM_PROBE, KEYS, K).astype(np.float64)
    made = factors.finish(lab.fold(matrix, K, rows=rows, checks=0).summary)
    squared = np.array([estimate(lab, matrix, rows, made, seed)[0] for seed in range(600)]) / missed(made)
    assert scipy.stats.kstest(CHECKS * squared, "chi2", args=(CHECKS,)).pvalue > 0.01
    for share, low, high in ((0.95, 0.325, 2.048), (0.99, 0.216, 2.519)):
        edges = scipy.stats.chi2.ppf([(1 - share) / 2, (1 + share) / 2], CHECKS) / CHECKS
        np.testing.assert_allclose(edges, [low, high], atol=5e-4)
        within = np.mean((squared > low) & (squared < high))
        assert within == pytest.approx(share, abs=4 * np.sqrt(share * (1 - share) / len(squared)))


@pytest.mark.parametrize("name", list(SPECTRA))
def test_c6_scree_bounds(lab: Any, name: str) -> None:
    # The same paper: tau(A^) <= tau(A) <= tau(A^) + |A - A^| for tails beyond any rank. There the error is estimated;
    # here it is known exactly, and the tails of computed values are lower bounds.
    values, seeds, covered = SPECTRA[name], range(20), 0
    matrix = lab.with_spectrum(M, N, values)
    for seed in seeds:
        rows = addressed.signs(seed, addressed.STREAM_PROBE, KEYS, K).astype(np.float64)
        made = factors.finish(lab.fold(matrix, K, rows=rows, checks=0).summary)
        guess = np.sqrt(estimate(lab, matrix, rows, made, seed)[0])
        for rank in (2, 5, 10, 15):
            lower, exact = tail(made.values, rank), tail(values, rank)
            assert lower <= exact * (1 + 1e-9)
            assert exact <= (lower + np.sqrt(missed(made))) * (1 + 1e-9)
            assert exact**2 <= (made.energy_total - np.sum(made.values[:rank] ** 2)) * (1 + 1e-9)  # sharper
            covered += exact <= lower + guess
    assert covered == 4 * len(seeds)
