"""Power of coefficient series: sums over segments that add up across parts, and the dominant frequency.

The step between samples is a number the caller vouches for; nothing here knows whether sampling was even.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from .checks import require_between

Floats = NDArray[np.float64]


def segment_power(series: Floats, segment: int) -> tuple[Floats, int]:
    """Return the power of all half-overlapping Hann segments, added up (Welch 1967, unnormalized).

    Parameters
    ----------
    series : float64 (r, n)
        Evenly sampled series.
    segment : int
        Samples per segment, even, at least 4.

    Returns
    -------
    power : float64 (r, segment // 2 + 1)
        Sum over segments of the squared modulus of the transform; zero if the series is shorter than a segment.
    segments : int
        How many segments were added.
    """
    require_between("segment", segment, 4)
    if segment % 2:
        raise ValueError(f"segment: must be even; got {segment}")
    window = 0.5 - 0.5 * np.cos(2 * np.pi * np.arange(segment) / segment)
    power = np.zeros((series.shape[0], segment // 2 + 1))
    starts = range(0, series.shape[1] - segment + 1, segment // 2)
    for start in starts:
        part = series[:, start : start + segment]
        spectrum = np.fft.rfft((part - part.mean(axis=1, keepdims=True)) * window, axis=1)
        power += spectrum.real**2 + spectrum.imag**2
    return power, len(starts)


def dominant_frequency(power: Floats, step_seconds: float) -> Floats:
    """Return the frequency of the strongest line of each series, in hertz.

    Parameters
    ----------
    power : float64 (r, segment // 2 + 1)
        From ``segment_power``, of one part or added over parts.
    step_seconds : float
        Time between samples.

    Returns
    -------
    frequency : float64 (r,)
        Peak of the parabola through the logarithms of the largest bin and its neighbours; NaN without power.
        The lowest bin is never the peak.
    """
    if not step_seconds > 0:
        raise ValueError(f"step_seconds: must be above zero; got {step_seconds}")
    bins = power.shape[1]
    if bins < 3:
        raise ValueError(f"power: must hold at least 3 frequencies; got {bins}")
    width = 1 / (2 * (bins - 1) * step_seconds)
    return np.array([width * _peak_bin(row) if row[1:].max() > 0 else np.nan for row in power])


def _peak_bin(power: Floats) -> float:
    peak = 1 + int(power[1:].argmax())
    if peak == power.size - 1 or power[peak - 1 : peak + 2].min() <= 0:
        return float(peak)
    left, middle, right = np.log(power[peak - 1 : peak + 2])
    bend = left - 2 * middle + right
    return peak if bend >= 0 else float(peak + 0.5 * (left - right) / bend)
