"""Random entries are a pure function of their address, and stay what they are for ever."""

from __future__ import annotations

import hashlib
from statistics import NormalDist

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from shardfold.kernels import addressed

SEED = 20310301
NAMES = ["G001", "strain/left", "ü"]
WRAP = (1 << 64) - 1


def mix(x: int) -> int:
    """SplitMix64's finalizer in Python integers: the rule written a second time."""
    x = ((x ^ (x >> 30)) * 0xBF58476D1CE4E5B9) & WRAP
    x = ((x ^ (x >> 27)) * 0x94D049BB133111EB) & WRAP
    return x ^ (x >> 31)


def word(seed: int, stream: int, key: int, number: int) -> int:
    digest = hashlib.blake2b(f"{addressed.GENERATOR_VERSION}/{seed}/{stream}".encode(), digest_size=16).digest()
    a, b = int.from_bytes(digest[:8], "little"), int.from_bytes(digest[8:], "little")
    state = mix((mix((key & WRAP) ^ a) + b) & WRAP)
    return mix((state + (number + 1) * 0x9E3779B97F4A7C15) & WRAP)


def test_golden_keys() -> None:
    # Computed once when version 1 was written; they may never change.
    assert addressed.GENERATOR_VERSION == 1
    assert [hex(key) for key in addressed.name_keys(NAMES)] == [
        "0x900bc7c862a2468d",
        "0xfcf9f27e08e4adb9",
        "0x372f39c1f59df155",
    ]
    rows = addressed.shard_row_keys("2031/03/a.parquet", np.array([0, 1, 2**40]))
    assert rows.tolist() == [13028217925613308503, 9393186709400070546, 11543911949724502566]


def test_golden_signs() -> None:
    made = addressed.signs(SEED, addressed.STREAM_PROBE, addressed.name_keys(NAMES), 70)
    assert made.dtype == np.int8
    assert made[[0, 1, 2, 3, 63, 64, 69]].tolist() == [
        [-1, -1, 1],
        [1, 1, -1],
        [-1, 1, -1],
        [1, 1, 1],
        [-1, -1, 1],
        [1, -1, 1],
        [1, -1, -1],
    ]


def test_golden_normals() -> None:
    by_name = addressed.normals(SEED, addressed.STREAM_CHECK, addressed.name_keys(NAMES), 3)
    expected = [
        [1.4299929790504016, 1.123440262524447, 0.8414665216983932],
        [-1.489945147728393, 0.6577539713141795, 0.7174003204668978],
        [0.3499050473807519, 2.033340894645187, 0.841432507972982],
    ]
    np.testing.assert_allclose(by_name, expected, rtol=1e-14)
    by_time = addressed.normals(SEED, addressed.STREAM_SAMPLE, np.array([-1, 0, 1930003200000000000]), 2)
    expected = [
        [0.18926102108155576, 0.11173229065255787, -0.1976526833790267],
        [0.7235585044500087, -1.008922709717115, 0.6895358618421293],
    ]
    np.testing.assert_allclose(by_time, expected, rtol=1e-14)


@given(seed=st.integers(0, 2**63), stream=st.integers(0, 2000), key=st.integers(-(2**63), 2**63 - 1))
@settings(max_examples=60, deadline=None)
def test_the_rule_written_a_second_time_agrees(seed: int, stream: int, key: int) -> None:
    keys = np.array([key], dtype=np.int64)
    signs = addressed.signs(seed, stream, keys, 130)[:, 0]
    assert signs.tolist() == [1 if word(seed, stream, key, r // 64) >> (r % 64) & 1 else -1 for r in range(130)]
    normals = addressed.normals(seed, stream, keys, 5)[:, 0]
    uniform = [max(word(seed, stream, key, r) >> 11, 1) / 2**53 for r in range(5)]
    np.testing.assert_allclose(normals, [NormalDist().inv_cdf(u) for u in uniform], rtol=1e-9, atol=1e-12)


@given(data=st.data())
@settings(max_examples=40, deadline=None)
def test_no_cut_or_order_changes_an_entry(data: st.DataObject) -> None:
    keys = np.array(data.draw(st.lists(st.integers(-(2**63), 2**63 - 1), min_size=1, max_size=40)), dtype=np.int64)
    chosen = data.draw(st.lists(st.integers(0, len(keys) - 1), max_size=20))
    rows, fewer = 75, data.draw(st.integers(0, 75))
    for make in (addressed.signs, addressed.normals):
        whole = make(SEED, 7, keys, rows)
        assert np.array_equal(make(SEED, 7, keys[chosen], fewer), whole[:fewer, chosen])
        assert np.array_equal(make(SEED, 7, keys.view(np.uint64), rows), whole)


@pytest.mark.parametrize("step", [1, 125_000_000, 1 << 32])
def test_signs_of_regular_keys_are_fair_and_uncorrelated(step: int) -> None:
    signs = addressed.signs(SEED, addressed.STREAM_PROBE, np.arange(1500) * step, 100).astype(float)
    assert abs(signs.mean()) < 5 / np.sqrt(signs.size)
    for products in (signs @ signs.T / 1500, signs.T @ signs / 100):
        samples = round(signs.size / len(products))
        off = products - np.diag(np.diagonal(products))
        # The largest of N^2/2 correlations of fair signs is near sqrt(4 ln N / samples).
        assert np.abs(off).max() < 1.3 * np.sqrt(4 * np.log(len(products)) / samples)


def test_normals_are_normal() -> None:
    made = addressed.normals(SEED, addressed.STREAM_SAMPLE, np.arange(20_000) * 1000, 5)
    assert stats.kstest(made.ravel(), "norm").pvalue > 1e-3
    assert np.abs(np.corrcoef(made) - np.eye(5)).max() < 0.05
    assert np.isfinite(made).all()


def test_streams_and_seeds_are_apart() -> None:
    keys = addressed.name_keys([str(i) for i in range(5000)])
    first = addressed.signs(SEED, addressed.STREAM_PROBE, keys, 1)[0].astype(float)
    for seed, stream in [(SEED, addressed.STREAM_PRIMED + 2), (SEED + 1, addressed.STREAM_PROBE)]:
        other = addressed.signs(seed, stream, keys, 1)[0]
        assert abs(first @ other) / 5000 < 5 / np.sqrt(5000)


def test_rows_of_a_shard_have_different_keys() -> None:
    a = addressed.shard_row_keys("a", np.arange(50_000))
    b = addressed.shard_row_keys("b", np.arange(50_000))
    assert np.unique(np.concatenate([a, b])).size == 100_000


def test_a_negative_number_of_rows_is_refused() -> None:
    for make in (addressed.signs, addressed.normals):
        with pytest.raises(ValueError, match="rows: must be at least 0; got -1"):
            make(SEED, 1, np.arange(3), -1)
