"""Print the accuracy that the whole pipeline reaches: sub-optimality, exactness of energies, offsets.

    python tests/bench/accuracy_figures.py

The campaigns are those of ``tests/e2e/test_accuracy.py``, on a real S3 server, run by two Ray workers; there the
figures are held against limits, here they are printed.
"""

from __future__ import annotations

import os
import sys
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np

sys.path.insert(0, str(Path(__file__).parents[1]))
sys.path.insert(0, str(Path(__file__).parents[1] / "e2e"))

import test_accuracy as test

from shardfold.local_s3 import Seaweed


def print_reads(place: Any) -> None:
    """Print excess error and energies of 3,000 x 6,000 with singular values 1/j^2."""
    matrix = test.with_spectrum(3000, 6000, test.VALUES)
    offset = np.random.Generator(np.random.PCG64(1)).standard_normal((3000, 1))
    matrix += np.linalg.norm(test.VALUES) / np.sqrt(matrix.size) * offset
    for dtype in ("float64", "float32"):
        campaign = test.write(place(), matrix.astype(dtype), 8, 250)
        total = test.sum_of_squares(campaign.centred)
        for reads in (1, 2):
            found = campaign.run(10, reads)
            left = test.sum_of_squares(campaign.stored - found.mean - found.modes @ found.coefficients)
            quality = found.result.manifest["quality"]
            whole, captured = quality["energy"] / total - 1, quality["energy_captured"] / (total - left) - 1
            print(
                f"{dtype}, {reads} read(s): sub-optimality {np.sqrt(left) / test.BEST - 1:.2e}, "
                f"relative error of energy {whole:.1e}, of captured energy {captured:.1e}"
            )


def print_offsets(place: Any) -> None:
    """Print how far an offset turns the first five modes of 400 x 3,000 (largest sine), one read."""
    for dtype in ("float64", "float32"):
        for offset in (0, 1e2, 1e4, 1e6):
            matrix = test.with_spectrum(400, 3000, 1 / np.arange(1.0, 41))
            unit = np.sqrt(test.sum_of_squares(matrix) / matrix.size)
            matrix += offset * unit * np.random.Generator(np.random.PCG64(1)).choice([-1.0, 1.0], (400, 1))
            campaign = test.write(place(), matrix.astype(dtype), 11, 150)
            modes = np.linalg.svd(campaign.centred, full_matrices=False)[0]
            found = campaign.run(5, leaf="1 min")
            print(f"{dtype}, offset {offset:g}: largest sine {test.largest_sine(found.modes, modes[:, :5]):.1e}")


def main() -> None:
    """Measure and print."""
    with Seaweed() as server:
        os.environ.update(server.environment)
        server.make_bucket("figures")
        numbers = iter(range(100))

        def place() -> Any:
            return SimpleNamespace(location=f"s3://figures/{next(numbers)}", endpoint=server.endpoint)

        print_reads(place)
        print_offsets(place)


if __name__ == "__main__":
    main()
