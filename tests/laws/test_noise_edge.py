"""The noise edge: published values, planted modes, noise alone, no noise at all, and noise that is not equal."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from shardfold.kernels import factors
from shardfold.kernels.noise import (
    NoiseEdge,
    State,
    hard_threshold,
    hard_threshold_unknown,
    marchenko_pastur_median,
    noise_edge,
    uneven_edge,
)

# Gavish, Donoho, IEEE T-IT 60 (2014) 5040: omega(beta), from memory, confirmed by computing; 2.858 was read.
OMEGA = {
    0.05: 1.5193, 0.1: 1.6088, 0.2: 1.7650, 0.25: 1.8369, 0.3: 1.9062, 0.4: 2.0402, 0.5: 2.1712, 0.6: 2.3018,
    0.7: 2.4341, 0.75: 2.5014, 0.8: 2.5698, 0.9: 2.7106, 1.0: 2.8584,
}  # fmt: skip


def rng(seed: int) -> np.random.Generator:
    return np.random.Generator(np.random.PCG64(seed))


def edge_of(matrix: np.ndarray, **settings: Any) -> NoiseEdge | None:
    """Return the edge of a matrix decomposed exactly, its mean removed."""
    centred = matrix - matrix.mean(axis=1, keepdims=True)
    modes, values, _ = np.linalg.svd(centred, full_matrices=False)
    energy = np.sum(centred**2, axis=1)
    return noise_edge(values, np.zeros(values.size), energy, *matrix.shape, 1, modes=modes, **settings)


@pytest.mark.parametrize("beta", OMEGA)
def test_published_thresholds(beta: float) -> None:
    assert hard_threshold_unknown(beta) == pytest.approx(OMEGA[beta], abs=5e-4)


def test_the_square_case_is_known_in_closed_form() -> None:
    assert hard_threshold(1) == pytest.approx(4 / np.sqrt(3), rel=1e-14)
    assert marchenko_pastur_median(1) == pytest.approx(0.65278, abs=5e-6)
    assert hard_threshold(1e-12) == pytest.approx(np.sqrt(2), abs=1e-6)


@pytest.mark.parametrize("beta", [0.0, -0.1, 1.01, float("nan")])
def test_a_ratio_of_sizes_is_asked_for(beta: float) -> None:
    with pytest.raises(ValueError, match="beta: must be above 0 and at most 1"):
        hard_threshold(beta)


def test_the_median_rule_finds_three_planted_modes_without_knowing_the_noise(lab: Any) -> None:
    # The same paper: singular values above omega(beta) times the median one are worth keeping.
    for m, n in ((100, 100), (50, 500)):
        noise = rng(m).standard_normal((m, n))
        size = np.sqrt(n) * np.array([8.0, 6.0, 5.0])
        values = np.linalg.svd(lab.with_spectrum(m, n, size) + noise, compute_uv=False)
        assert np.sum(values > hard_threshold_unknown(m / n) * np.median(values)) == 3


def test_pure_noise_ends_where_it_should() -> None:
    # Edges sqrt(n) +- sqrt(m) of noise of unit variance (Geman 1980; Bai, Yin 1993, from memory): 51.96 and 17.32.
    ends = []
    for seed in range(10):
        matrix = rng(seed).standard_normal((300, 1200))
        values = np.linalg.svd(matrix, compute_uv=False)
        ends.append((values[0], values[-1]))
        found = edge_of(matrix)
        assert found is not None
        assert found.count == 0
        assert set(found.states) == {State.AT_NOISE}
        assert found.variance == pytest.approx(1, rel=0.01)
        assert found.edge == pytest.approx(51.96, rel=0.01)
        assert found.white
    assert np.mean(ends, axis=0) == pytest.approx([51.96, 17.32], rel=0.02)


@pytest.mark.parametrize("reads", [1, 2])
def test_planted_modes_just_above_the_edge_are_found_through_a_probe(lab: Any, reads: int) -> None:
    # A planted value of 1.3 edges. Estimates of g count, not their upper values, which hide nearly all of them.
    m, n, found = 300, 800, 0
    edge = np.sqrt(m) + np.sqrt(n)
    for seed in range(8):
        planted = lab.with_spectrum(m, n, 1.3 * edge * np.array([1.02, 1.01, 1]), seed)
        matrix = planted + rng(seed).standard_normal((m, n))
        folded = lab.fold(matrix, 30, checks=10, seed=seed)
        if reads == 2:
            rows = factors.next_probe(folded.summary, 5, seed, 2, folded.keys)
            folded = lab.fold(matrix, 30, checks=10, seed=seed, rows=rows)
        made = factors.finish(folded.summary)
        noise = noise_edge(made.values, right_estimate(folded, made), made.energy, m, n, 1, modes=made.modes)
        assert noise is not None
        assert noise.count <= 3
        assert noise.variance == pytest.approx(1, rel=0.02)
        assert noise.white
        found += noise.count == 3
    assert found >= 7


def right_estimate(folded: Any, made: factors.Factors) -> np.ndarray:
    """Return the estimates of ``|A^T u - S v|`` from the sample checks."""
    summary = folded.summary
    shape = summary.shape
    seen = summary.outer[:, shape.xi].T @ made.modes
    rest = seen - (made.row_map @ summary.inner[shape.x, shape.xi]).T
    return np.linalg.norm(rest, axis=0) / np.sqrt(shape.q_xi)


def test_states_stand_in_their_order(lab: Any) -> None:
    m, n = 100, 400
    edge = np.sqrt(m) + np.sqrt(n)
    matrix = lab.with_spectrum(m, n, edge * np.array([3.0, 1.5, 0.8, 0.3])) + rng(1).standard_normal((m, n))
    found = edge_of(matrix)
    assert found is not None
    assert found.states[:2] == (State.ABOVE, State.ABOVE)
    assert found.states[2] is State.WEAK
    assert set(found.states[3:]) == {State.AT_NOISE}
    assert found.edge < found.limit < found.hard
    assert found.count == 3
    assert found.reached


@pytest.mark.parametrize("width", [None, 12])
def test_nothing_is_noise_where_the_modes_hold_everything(lab: Any, width: int | None) -> None:
    for values in ([5.0, 4.0, 3.0], [1.0, 1.0, 1.0], [1.0, 1e-3, 1e-6]):
        for m in (4, 8, 60):
            if width is not None and m < width:
                continue
            matrix = lab.with_spectrum(m, 200, values)
            made = factors.finish(lab.fold(matrix, width).summary)
            found = noise_edge(
                made.values, np.zeros(made.values.size), made.energy, m, 200, 1, modes=made.modes, floor=made.floor
            )
            assert found is not None
            assert (found.count, found.variance, found.edge, found.limit, found.hard) == (3, 0.0, 0.0, 0.0, 0.0)
            assert set(found.states) == {State.ABOVE}
            assert found.white is None


def test_all_modes_of_few_channels_have_an_edge(lab: Any) -> None:
    m, n = 20, 3000
    edge = np.sqrt(m) + np.sqrt(n)
    matrix = lab.with_spectrum(m, n, edge * np.array([5.0, 3.0])) + rng(2).standard_normal((m, n))
    made = factors.finish(lab.fold(matrix, None).summary)
    assert made.values.size == m
    found = noise_edge(made.values, np.zeros(m), made.energy, m, n, 1, modes=made.modes, floor=made.floor)
    assert found is not None
    assert found.count == 2
    assert found.variance == pytest.approx(1, rel=0.03)
    assert found.white


@pytest.mark.parametrize("spread", [0.1, 0.25, 0.5])
def test_unequal_channels_are_flagged(spread: float) -> None:
    for seed in range(5):
        size = np.exp(spread * rng(seed).standard_normal(300))
        found = edge_of(size[:, np.newaxis] * rng(100 + seed).standard_normal((300, 1200)))
        assert found is not None
        assert found.white is False
        assert found.probability < 0.01
        assert found.shift > 1.01


def test_equal_channels_are_rarely_flagged_and_noise_is_rarely_a_mode() -> None:
    # One in a hundred each; the edge itself would be exceeded by every tenth.
    flagged, counted, exceeded = 0, 0, 0
    for seed in range(100):
        found = edge_of(matrix := rng(seed).standard_normal((60, 200)))
        assert found is not None
        flagged += not found.white
        counted += found.count > 0
        exceeded += np.linalg.norm(matrix - matrix.mean(axis=1, keepdims=True), 2) > found.edge
    assert flagged <= 4
    assert counted <= 4
    assert 5 <= exceeded <= 30


def test_a_difference_too_small_to_matter_is_not_flagged() -> None:
    size = np.where(np.arange(40) % 2, 1.01, 0.99)
    found = edge_of(size[:, np.newaxis] * rng(0).standard_normal((40, 20000)))
    assert found is not None
    assert found.probability < 0.01
    assert found.shift < 1.01
    assert found.white


def test_the_edge_of_unequal_channels() -> None:
    # Oracle: singular values of such noise. Half the channels four times as loud, and one loud channel alone.
    for variances in (np.repeat([1.0, 4.0], 100), np.r_[np.ones(199), 30.0]):
        noise = np.sqrt(variances)[:, np.newaxis] * rng(3).standard_normal((200, 600))
        top = np.linalg.svd(noise, compute_uv=False)
        expected = top[0]
        assert uneven_edge(variances, 600) == pytest.approx(expected, rel=0.04)
    assert uneven_edge(np.ones(200), 600) == pytest.approx(np.sqrt(200) + np.sqrt(600), rel=1e-9)


@given(
    m=st.integers(1, 6),
    n=st.integers(1, 6),
    p=st.integers(0, 3),
    kept=st.integers(0, 6),
    scale=st.floats(1e-100, 1e100),
)
@settings(max_examples=200, deadline=None)
def test_no_shape_divides_by_zero(m: int, n: int, p: int, kept: int, scale: float) -> None:
    matrix = scale * rng(m + 10 * n).standard_normal((m, n))
    modes, values, _ = np.linalg.svd(matrix, full_matrices=False)
    kept = min(kept, values.size)
    energy = np.sum(matrix**2, axis=1)
    found = noise_edge(values[:kept], np.zeros(kept), energy, m, n, p, modes=modes[:, :kept])
    if found is None:
        return
    assert np.isfinite([found.variance, found.edge, found.hard]).all()
    assert len(found.states) == kept
    assert 0 <= found.count <= min(m, n)


@pytest.mark.parametrize(("m", "n", "p"), [(3, 1, 1), (3, 2, 2), (3, 2, 5)])
def test_no_degree_of_freedom_is_no_edge(m: int, n: int, p: int) -> None:
    assert noise_edge(np.empty(0), np.empty(0), np.ones(m), m, n, p) is None


def test_doors() -> None:
    with pytest.raises(ValueError, match="right_estimate: must have shape"):
        noise_edge(np.ones(2), np.ones(3), np.ones(4), 4, 9, 1)
    with pytest.raises(ValueError, match="energy: must have shape"):
        noise_edge(np.ones(2), np.ones(2), np.ones(3), 4, 9, 1)
