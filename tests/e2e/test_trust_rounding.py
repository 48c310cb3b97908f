"""Bounds cover what rounding does too: large offsets, shards in float32, campaigns of hardly more than rounding.

The truth is LAPACK's decomposition of the numbers as stored, their means taken off in extended precision. Where the
rank is less than the probe's width nothing but rounding is lost.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from campaigns import Found, even_times, job_text, run_job, write_vector

from shardfold.store import open_store

SAMPLES = 1200
VALUES = np.array([4.0, 2.0, 1.0, 0.5, 0.05])
OWN_DEGREES = 1e-12  # what the truth itself is right to
ROUTES: dict[str, tuple[int, dict[str, Any]]] = {
    "probe": (120, {"width": 20}),
    "identity": (36, {"summary": "whole"}),
    "exact": (36, {"summary": "exact"}),
}


def offset_field(channels: int, offset: float) -> np.ndarray:
    """Return (channels, samples) of rank five on offsets of either sign, in units of the root mean square."""
    rng = np.random.Generator(np.random.PCG64(1))
    patterns = np.linalg.qr(rng.standard_normal((channels, len(VALUES))))[0]
    matrix = (patterns * VALUES) @ rng.standard_normal((len(VALUES), SAMPLES))
    unit = np.sqrt(np.mean(matrix**2))
    return np.asarray(matrix + offset * unit * rng.choice([-1.0, 1.0], (channels, 1)))


def run(folder: Path, matrix: np.ndarray, design: dict[str, Any], **modes: Any) -> Found:
    write_vector(open_store(f"{folder}/campaign"), matrix, even_times(SAMPLES), shards=2, row_group=120)
    places = (f"{folder}/campaign", f"{folder}/dossier")
    return run_job(job_text(*places, "vector", design={"leaf": "15 s", **design}, modes=modes))


def true_angles(found: Found, matrix: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the angles in degrees of each mode, and of its coefficients, to those of the stored numbers."""
    stored = matrix.astype(np.float64)
    centred = (stored - stored.mean(axis=1, keepdims=True, dtype=np.longdouble)).astype(np.float64)
    left, _, right = np.linalg.svd(centred, full_matrices=False)
    numbers = range(len(found.values))
    return (
        np.array([_degrees(found.modes[:, j], left[:, j]) for j in numbers]),
        np.array([_degrees(found.coefficients[j], right[j]) for j in numbers]),
    )


def _degrees(found: np.ndarray, exact: np.ndarray) -> float:
    found = found / np.linalg.norm(found)
    return float(np.degrees(np.arcsin(np.linalg.norm(found - exact * (exact @ found)))))


@pytest.mark.parametrize("offset", [1e2, 1e6])
@pytest.mark.parametrize("route", ROUTES)
def test_bounds_cover_what_offsets_do(route: str, offset: float, tmp_path: Path) -> None:
    channels, design = ROUTES[route]
    matrix = offset_field(channels, offset)
    found = run(tmp_path, matrix, design, rank=len(VALUES))
    left, right = true_angles(found, matrix)
    bound, of_coefficients = found.column("angle_bound_deg"), found.column("coefficient_angle_bound_deg")
    assert (bound < 0.001).all()
    assert (left <= bound + OWN_DEGREES).all()
    assert (right <= of_coefficients + OWN_DEGREES).all()


@pytest.mark.parametrize("reads", [1, 2])
def test_bounds_cover_what_float32_does(reads: int, tmp_path: Path) -> None:
    # Shards and X in float32: noise of full rank in the stored numbers, 6e-4 of what varies.
    matrix = offset_field(120, 1e4).astype(np.float32)
    found = run(tmp_path, matrix, {"width": 20}, rank=len(VALUES), reads=reads)
    left, right = true_angles(found, matrix)
    bound, of_coefficients = found.column("angle_bound_deg"), found.column("coefficient_angle_bound_deg")
    assert (bound < 0.1).all()
    assert (left <= bound).all()
    assert (right <= of_coefficients).all()
    assert (of_coefficients > 1e-6).all()  # nothing in float32 is known better than that


@pytest.mark.parametrize("kind", ["float32", "float64"])
def test_a_campaign_of_fewer_patterns_than_rows_is_read_once(kind: str, tmp_path: Path) -> None:
    # What float32 leaves beside the five patterns is 1e-8 of them: no read brings more, and the last has a bound.
    found = run(tmp_path, offset_field(120, 0.0).astype(kind), {"width": 20}, rank=len(VALUES), reads="auto")
    assert found.result.manifest["reads"] == 1, found.result.manifest["quality"]["another_read"]
    assert (found.column("angle_bound_deg") < 0.001).all()
