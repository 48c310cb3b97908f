"""Print predicted against obtained angles for one more read and for twice the width, over twelve spectra.

    python tests/bench/remedy_study.py --width 42 --rank 10 --matrices 8 --seed 0

Matrices of 600 x 800. The obtained angle is that of a fold with the product's own kernels and the probe of
``factors.next_probe``. Each column shows least, median and largest ratio of the prediction to the truth, the share of
predictions below half the truth, and of modes that count: angles of which one, obtained or predicted, exceeds 1e-6.
Modes for which only "at least this good" is said are counted apart, behind the bar: those and how many fell below half.
Predictions are as they come; what is quoted to people is ``remedy.ABOUT`` times as large, so it fails less often.
"""

from __future__ import annotations

import argparse
from collections import defaultdict
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from shardfold.kernels import addressed, factors, remedy
from shardfold.kernels.blocks import Preparation
from shardfold.kernels.whole import Probe, Shape, Summary, fold_block, zero

M, N, Q = 600, 800, 10
J = np.arange(1.0, M + 1)
COUNTS_ABOVE = 1e-6
CASES = ("twice the width, 1 read", "one more: 1 to 2 reads", "one more: 2 to 3 reads", "twice the width, 2 reads")


def spectra() -> dict[str, np.ndarray | float]:
    """Return singular values by name; a number stands for rank 10 and white noise that high beside the tenth."""
    near = 1 / J
    near[3], near[8] = 1.05 * near[4], 1.01 * near[9]
    return {
        "1/sqrt(j)": J**-0.5,
        "1/j": 1 / J,
        "1/j^2": J**-2,
        "10^(-j/10)": 10 ** (-J / 10),
        "step after 10": np.where(J <= 10, 1 - 0.01 * J, 0.1 - 1e-4 * J),
        "rank 10, noise 0.09": 0.09,
        "rank 10, noise 0.36": 0.36,
        "1/j, near pairs": near,
        "two slopes": np.where(J <= 15, J**-0.5, 15**1.5 * J**-2),
        "plateau 1/j + 0.03": 1 / J + 0.03,
        "exp(-j/40)": np.exp(-J / 40),
        "drop after 20": np.where(J <= 20, 1 / J, 1e-4 / J),
    }


def matrix(values: np.ndarray | float, rng: np.random.Generator) -> tuple[np.ndarray, np.ndarray]:
    """Return a matrix of zero row means and its true modes."""
    white = isinstance(values, float)
    size = 1 - 0.05 * np.arange(10) if isinstance(values, float) else values
    left = np.linalg.qr(rng.standard_normal((M, size.size)))[0]
    right = np.linalg.qr(np.column_stack([np.ones(N), rng.standard_normal((N, size.size))]))[0][:, 1:]
    made = (left * size) @ right.T
    if white:
        made += rng.standard_normal((M, N)) * values * size[-1] / (np.sqrt(M) + np.sqrt(N))
        made -= made.mean(axis=1, keepdims=True)
        left = np.linalg.svd(made, full_matrices=False)[0]
    return made, left


def fold(made: np.ndarray, rows: np.ndarray, seed: int) -> Summary:
    """Return the summary of a read."""
    check = addressed.normals(seed, addressed.STREAM_CHECK, KEYS, Q)
    xi = addressed.normals(seed, addressed.STREAM_SAMPLE, np.arange(N), Q)
    summary = zero(Shape(M, len(rows), Q, Q, 0, False))
    fold_block(
        summary,
        made,
        Preparation.unit(M),
        Probe(rows, check).in_precision(np.float64),
        xi,
        np.empty((0, made.shape[1])),
    )
    return summary


@dataclass(frozen=True, eq=False)
class Seen:
    """A read: its sines, and the spectrum it makes out."""

    sine: np.ndarray
    spectrum: remedy.Spectrum


def look(summary: Summary, left: np.ndarray, rank: int, reads: int) -> Seen:
    """Return the true sines of the leading modes, and the spectrum fitted without knowing them."""
    made, shape = factors.finish(summary), summary.shape
    rank = min(rank, made.values.size)
    own = (left[:, :rank] * made.modes[:, :rank]).sum(axis=0)
    sine = np.linalg.norm(made.modes[:, :rank] - left[:, :rank] * own, axis=0)
    product = made.row_map @ summary.inner[shape.x, shape.xi]
    estimate = np.linalg.norm(made.modes.T @ summary.outer[:, shape.xi] - product, axis=1) / np.sqrt(Q)
    head = min(remedy.head_size(rank, shape.k), made.values.size)
    spectrum = remedy.fit_spectrum(
        made.values,
        estimate,
        made.energy_total,
        remedy.squares_outside(made.modes[:, :head], summary.outer[:, shape.theta]),
        head=head,
        count=min(M, N - 1),
        width=shape.k,
        reads=reads,
        floor=made.floor,
    )
    return Seen(sine, spectrum)


def compare(made: np.ndarray, left: np.ndarray, rank: int, width: int, seed: int) -> Iterator[tuple[str, np.ndarray]]:
    """Yield for each case the predictions, truths and "at least" flags, (3, r)."""
    signs = addressed.signs(seed, addressed.STREAM_PROBE, KEYS, 2 * width)
    folds = {"k": fold(made, signs[:width], seed), "2k": fold(made, signs, seed)}
    seen = {name: look(summary, left, rank, 1) for name, summary in folds.items()}
    for name, before, reads in (("k2", "k", 2), ("2k2", "2k", 2), ("k3", "k2", 3)):
        folds[name] = fold(made, factors.next_probe(folds[before], rank, seed, reads, KEYS), seed)
        seen[name] = look(folds[name], left, rank, reads)
    for case, (before, after) in zip(CASES, (("k", "2k"), ("k", "k2"), ("k2", "k3"), ("k2", "2k2")), strict=True):
        fresh = max(14, rank, -(-folds[before].shape.k // 3))
        told = remedy.predict(seen[before].spectrum, rank, fresh)
        read = case.startswith("one more")
        predicted, least = (told.read, told.read_at_least) if read else (told.wider, told.wider_at_least)
        yield case, np.array([predicted, seen[after].sine, least])


def summarize(found: np.ndarray) -> str:
    """Return one column of the table, from predictions, truths and flags (3, modes)."""
    predicted, truth, least = found
    counts = np.maximum(predicted, truth) > COUNTS_ABOVE
    ratio, flagged = predicted / truth, counts & (least > 0)
    plain = ratio[counts & (least == 0)]
    text = "none" + 41 * " "
    if plain.size:
        low, middle, high = plain.min(), np.median(plain), plain.max()
        text = f"{low:5.2f} {middle:5.1f} {high:6.1f}  {(plain < 0.5).mean():5.1%}  {plain.size / truth.size:4.0%}"
        text = text.ljust(45)
    return text[:34] + f" | {flagged.sum():3d} {(ratio[flagged] < 0.5).sum():3d}"


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser()
    for name, value in (("width", 42), ("rank", 10), ("matrices", 8), ("seed", 0)):
        parser.add_argument(f"--{name}", type=int, default=value)
    given = parser.parse_args()
    remedy.ABOUT = 1.0  # predictions as they come
    print(" " * 20 + "".join(f"{case:46s}" for case in CASES))
    print(" " * 20 + f"{'least median largest <0.5 counted | at least, <0.5':46s}" * len(CASES))
    for name, values in spectra().items():
        found = defaultdict(list)
        for number in range(given.matrices):
            seed = given.seed + number
            made, left = matrix(values, np.random.Generator(np.random.PCG64(seed)))
            for case, columns in compare(made, left, given.rank, given.width, seed):
                found[case].append(columns)
        cells = [summarize(np.concatenate(found[case], axis=1)) for case in CASES]
        print(f"{name:20s}" + "".join(f"{cell:46s}" for cell in cells), flush=True)


KEYS = addressed.name_keys([f"channel {i}" for i in range(M)])

if __name__ == "__main__":
    main()
