"""Segment powers add up across parts, and the dominant frequency of a line is found between the bins."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import signal

from shardfold.kernels.spectra import dominant_frequency, segment_power


def test_power_is_welch_without_its_scale() -> None:
    # scipy.signal.welch, which the project does not use at run time, is the outside value.
    series = np.random.default_rng(0).standard_normal((3, 1000))
    power, segments = segment_power(series, 128)
    assert segments == 14
    _, expected = signal.welch(series, window="hann", nperseg=128, noverlap=64, detrend="constant")
    window = signal.get_window("hann", 128)
    scaled = power / segments / (window @ window)
    scaled[:, 1:-1] *= 2
    np.testing.assert_allclose(scaled, expected, rtol=1e-12, atol=1e-15)


def test_parts_of_whole_half_segments_overlap_to_the_whole() -> None:
    series = np.random.default_rng(1).standard_normal((2, 640))
    whole, count = segment_power(series, 128)
    first, count_1 = segment_power(series[:, :384], 128)
    second, count_2 = segment_power(series[:, 320:], 128)
    assert count == count_1 + count_2
    np.testing.assert_allclose(first + second, whole, rtol=1e-12)


@given(frequency=st.floats(0.6, 12.0), offset=st.floats(-1e6, 1e6), phase=st.floats(0, 6.28))
@settings(max_examples=60, deadline=None)
def test_a_line_is_found_between_the_bins(frequency: float, offset: float, phase: float) -> None:
    step = 1 / 32
    times = np.arange(4096) * step
    power, _ = segment_power(offset + np.sin(2 * np.pi * frequency * times + phase)[np.newaxis], 256)
    bin_width = 1 / (256 * step)
    assert abs(dominant_frequency(power, step)[0] - frequency) < 0.06 * bin_width


def test_series_without_power_and_short_series() -> None:
    power, segments = segment_power(np.full((2, 100), 7.0), 64)
    assert segments == 2
    assert np.isnan(dominant_frequency(np.zeros_like(power), 1.0)).all()
    power, segments = segment_power(np.ones((2, 63)), 64)
    assert (segments, power.shape, power.any()) == (0, (2, 33), False)


def test_a_line_at_the_highest_frequency() -> None:
    power, _ = segment_power(np.tile([1.0, -1.0], 128)[np.newaxis], 32)
    assert dominant_frequency(power, 0.5)[0] == pytest.approx(1.0)


def test_settings_that_cannot_be() -> None:
    with pytest.raises(ValueError, match="segment: must be even; got 33"):
        segment_power(np.ones((1, 100)), 33)
    with pytest.raises(ValueError, match="segment: must be at least 4; got 2"):
        segment_power(np.ones((1, 100)), 2)
    with pytest.raises(ValueError, match="step_seconds: must be above zero; got 0"):
        dominant_frequency(np.ones((1, 9)), 0)
    with pytest.raises(ValueError, match="power: must hold at least 3 frequencies; got 2"):
        dominant_frequency(np.ones((1, 2)), 1)
