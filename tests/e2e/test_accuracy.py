"""How close modes, coefficients and energies come to those of the stored numbers: Ray workers, object storage, one and
two reads, either precision, offsets up to a million times the fluctuation.

The references are dense decompositions and sums in float64 of the matrix *as stored* (rounded to the type of the shards),
each channel's own mean removed; the approximation is made of the published tables: background plus modes times
coefficients.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pytest
from campaigns import Found, even_times, job_text, run_job, with_spectrum, write_vector
from shardfold.executor_ray import RayExecutor
from shardfold.store import open_store

RANK = 10
J = np.arange(1.0, 3001.0)


@dataclass(frozen=True)
class Campaign:
    """A written campaign and the numbers in it."""

    place: Any
    stored: np.ndarray

    def run(self, dossier: str = "dossier", leaf: str = "auto", **modes: Any) -> Found:
        places = (f"{self.place.location}/campaign", f"{self.place.location}/{dossier}")
        text = job_text(*places, "vector", self.place.endpoint, modes=modes, design={"leaf": leaf})
        return run_job(text, lambda: RayExecutor(2, None))


def write(place: Any, matrix: np.ndarray, shards: int, row_group: int) -> Campaign:
    samples = matrix.shape[1]
    store = open_store(f"{place.location}/campaign", place.endpoint)
    write_vector(store, matrix, even_times(samples), shards=shards, row_group=row_group)
    return Campaign(place, matrix.astype(np.float64))


def sum_of_squares(matrix: np.ndarray) -> float:
    """Return the sum of squares, summed pairwise so that its rounding is far below what is asked of the package."""
    return float(np.sum(np.square(matrix)))


@pytest.mark.usefixtures("ray_workers")
@pytest.mark.parametrize("dtype", ["float64", "float32"])
def test_one_read_is_near_the_best_and_two_are_the_best(folder: Any, dtype: str) -> None:
    # Singular values 1/j^2, so that the best rank 10 misses sqrt(sum of j^-4 beyond 10); default width 64.
    matrix = with_spectrum(3000, 6000, 1 / J**2)
    fluctuation = np.sqrt(np.mean(np.square(matrix)))
    matrix += fluctuation * np.random.default_rng(1).standard_normal((3000, 1))
    campaign = write(folder, matrix.astype(dtype), shards=8, row_group=250)
    centred = campaign.stored - campaign.stored.mean(axis=1, keepdims=True)
    total, best = sum_of_squares(centred), float(np.linalg.norm(1 / J[RANK:] ** 2))
    for reads, allowed in ((1, 0.012), (2, 1e-5)):
        found = campaign.run(rank=RANK, reads=reads)
        missed = sum_of_squares(campaign.stored - (found.mean + found.modes @ found.coefficients))
        quality = found.result.manifest["quality"]
        excess = np.sqrt(missed) / best - 1
        print(dtype, reads, "excess", excess, "energy", quality["energy"] / total - 1, "captured",
              quality["energy_captured"] / (total - missed) - 1)
        assert -1e-9 < excess <= allowed
        assert quality["energy"] == pytest.approx(total, rel=1e-12)
        assert quality["energy_captured"] == pytest.approx(total - missed, rel=1e-12)


@pytest.mark.usefixtures("ray_workers")
@pytest.mark.parametrize("dtype", ["float64", "float32"])
@pytest.mark.parametrize("offset", [0, 1e2, 1e4, 1e6])
def test_offsets_do_not_turn_the_modes(folder: Any, offset: float, dtype: str) -> None:
    matrix = with_spectrum(400, 3000, 1 / J[:40])
    fluctuation = np.sqrt(np.mean(np.square(matrix)))
    away = offset * fluctuation * np.random.default_rng(1).choice([-1.0, 1.0], (400, 1))
    campaign = write(folder, (matrix + away).astype(dtype), shards=7, row_group=150)
    centred = campaign.stored - campaign.stored.mean(axis=1, keepdims=True)
    left, values, right = np.linalg.svd(centred, full_matrices=False)
    found = campaign.run(rank=5, leaf="30 s", reads=1)
    def sines(a: np.ndarray, b: np.ndarray) -> np.ndarray:
        return np.linalg.norm(a - b * (a * b).sum(axis=0), axis=0)
    u = sines(found.modes, left[:, :5])
    v = sines(found.coefficients.T / found.values, right[:5].T)
    true = np.linalg.svd(matrix, full_matrices=False)[0][:, :5]
    print(dtype, offset, "modes", u, "coefs", v, "values", np.abs(found.values / values[:5] - 1).max(), "to true", sines(found.modes, true).max(), len(set(found.result.coefficients().column_names)), len([n for n in found.result.manifest["files"] if "part" in n]))
