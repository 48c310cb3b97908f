"""Print how often the bounds of ``kernels/bounds.py`` hold, and how far they are from the truth.

    python tests/bench/bounds_coverage.py            about four minutes
    python tests/bench/bounds_coverage.py --quick    a quarter of a minute

A dossier is one matrix of known spectrum and one set of random rows, read one to three times; r is 1 to 20 and k is
r + 1 to 5 r. The truth is LAPACK's decomposition of the whole matrix, groups of modes compared as subspaces. A row of
the table is a spectrum and a number of reads; the columns between the first and the last are of modes | coefficients.

    modes     among the first r (a group that crosses r is counted up to there)
    bound     share of them with a bound
    holds     share of these whose bound is at least the truth
    clean     share of dossiers without a single false bound
    median    of bound over truth, modes whose singular values are 1.1 apart from both neighbours; above rounding
    all       the same for all modes and groups
    floor     share of bounded modes whose bound is the rounding floor's, left out of the medians
    split     bounded groups that hold one mode of an exact pair, which must never be

Groups are formed by the computation alone (no sampling), which certifies the most single modes.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Iterator
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from threadpoolctl import threadpool_limits

from shardfold.kernels import addressed, comoments, factors
from shardfold.kernels.bounds import Bounds, Checks, Residuals, bounds, residuals

Floats = np.ndarray[Any, np.dtype[np.float64]]

READS = (1, 2, 3)
PAIRS = (2, 6, 11, 16)  # first members, counted from 0
J = np.arange(1.0, 2001.0)
SPECTRA = {
    "1/sqrt(j)": J**-0.5,
    "1/j": 1 / J,
    "1/j, float32": 1 / J,
    "1/j^2": J**-2,
    "10^(-j/10)": 10 ** (-J / 10),
    "step": np.where(J <= 8, 1 - 0.05 * J, 0.1 / np.sqrt(J)),
    "noise 0.36": np.where(J <= 10, 1 - (J - 1) / 18, 0),
    "noise 0.09": np.where(J <= 10, 1 - (J - 1) / 18, 0),
    "exact pairs": 1 / J,
    "pairs 1.001": 1 / J,
    "pairs 1.01": 1 / J,
    "pairs 1.1": J**-1.5,
    "new mode late": np.concatenate([[2.0], 1 / J[:-1]]),
}
COLUMNS = ("modes", "bound", "holds", "clean", "median", "all", "floor       split")
WIDTHS = (6, 11, 13, 13, 13, 13, 17)
LARGE = ("1/j", "noise 0.36", "exact pairs")


@dataclass(frozen=True)
class Matrix:
    """A matrix and its decomposition by LAPACK."""

    name: str
    a: Floats
    modes: Floats
    values: Floats
    right: Floats


@dataclass
class Cell:
    """What is counted in a row of the table; pairs are modes, coefficients."""

    modes: int = 0
    dossiers: int = 0
    splits: int = 0
    floored: list[int] = field(default_factory=lambda: [0, 0])
    ratios: tuple[list[float], list[float]] = field(default_factory=lambda: ([], []))
    measured: tuple[list[float], list[float]] = field(default_factory=lambda: ([], []))
    apart: tuple[list[float], list[float]] = field(default_factory=lambda: ([], []))
    clean: list[int] = field(default_factory=lambda: [0, 0])


def build(name: str, m: int, n: int, rng: np.random.Generator) -> Matrix:
    """Return a matrix with the named spectrum between random orthonormal factors."""
    count = min(m, n)
    values = SPECTRA[name][:count].copy()
    if name.startswith(("pairs", "exact")):
        for first in PAIRS:
            values[first + 1] = values[first] / (1 if name.startswith("exact") else float(name.split()[1]))
    left = np.linalg.qr(rng.standard_normal((m, count)))[0]
    right = np.linalg.qr(rng.standard_normal((n, count)))[0]
    a = (left * np.sort(values)[::-1]) @ right.T
    if name.startswith("noise"):  # its largest singular value as a part of the tenth planted one
        a += rng.standard_normal((m, n)) * (float(name.split()[1]) * values[9] / (np.sqrt(m) + np.sqrt(n)))
    u, s, vt = np.linalg.svd(a, full_matrices=False)
    return Matrix(name, a, u, s, vt.T)


def summarise(matrix: Matrix, a: Floats, rows: Floats, theta: Floats, xi: Floats) -> tuple[comoments.Summary, Floats]:
    """Return the summary of a matrix, moments about zero, and X."""
    m, n = a.shape
    summary = comoments.zero(comoments.Shape(m, len(rows), len(theta), len(xi), 0, False))
    x = rows @ a
    if matrix.name.endswith("float32"):
        x = x.astype(np.float32).astype(np.float64)
    stack = np.concatenate([x, theta @ a, xi])
    summary.n = n
    summary.outer[:] = a @ stack.T
    summary.inner[:] = stack @ stack.T
    summary.energy[:] = np.einsum("ij,ij->i", a, a)
    return summary, x


def reads(
    matrix: Matrix, rank: int, rows: Floats, checks: int, alone: bool, seed: int, rng: np.random.Generator
) -> Iterator[tuple[int, factors.Factors, Residuals, Floats]]:
    """Yield read number, factors, residuals and right singular vectors of one dossier."""
    m, n = matrix.a.shape
    keys = addressed.name_keys([f"channel {i}" for i in range(m)])
    theta, xi = rng.standard_normal((checks, m)), rng.standard_normal((checks, n))
    late = matrix.name.endswith("late")
    for read in READS:
        a = matrix.a
        if late and read == 1:  # the strongest mode has not happened yet
            a = a - np.outer(matrix.modes[:, 0] * matrix.values[0], matrix.right[:, 0])
        summary, x = summarise(matrix, a, rows, theta, xi)
        if not (late and read == 1):
            made = factors.finish(summary, keep_mean=True)
            judged = residuals(
                summary, made, Checks(summary.outer[:, summary.shape.theta], theta), None if alone else rows
            )
            yield read, made, judged, (made.row_map @ x).T / made.values
        if read < READS[-1]:
            rows = factors.next_probe(summary, rank, seed, read + 1, keys)


def turned(found: Floats, true: Floats, members: slice) -> float:
    """Return the sine of the largest principal angle between the spans of some columns of two orthonormal sets."""
    part, basis = found[:, members], true[:, members]
    return float(np.linalg.norm(part - basis @ (basis.T @ part), 2))


def count(cell: Cell, matrix: Matrix, rank: int, made: factors.Factors, judged: Residuals, v: Floats) -> None:
    """Count the groups of one read of one dossier."""
    result: Bounds = bounds(made, judged, np.inf)
    apart = matrix.values[:-1] / matrix.values[1:] >= 1.0999
    false = [False, False]
    cell.dossiers += 1
    for number in np.unique(result.group[:rank]):
        places = np.flatnonzero(result.group == number)
        members = slice(int(places[0]), int(places[-1]) + 1)
        size = min(members.stop, rank) - members.start
        cell.modes += size
        alone = places.size == 1 and apart[members.start] and (members.start == 0 or apart[members.start - 1])
        levels = (judged.left[members] / judged.floor, judged.right[members] / np.sqrt(judged.floor))
        sines = (result.sine[members.start], result.coefficient_sine[members.start])
        if matrix.name.startswith("exact") and not np.isnan(sines).all():
            cell.splits += sum((first in places) != (first + 1 in places) for first in PAIRS)
        for k, (sine, found, true) in enumerate(zip(sines, (made.modes, v), (matrix.modes, matrix.right), strict=True)):
            if np.isnan(sine):
                continue
            ratio = float(sine) / max(turned(found, true, members), 1e-300)
            floored = levels[k].max() <= 4
            cell.floored[k] += size * bool(floored)
            cell.ratios[k].extend([ratio] * size)
            cell.measured[k].extend([] if floored else [ratio] * size)
            cell.apart[k].extend([ratio] if alone and not floored else [])
            false[k] |= ratio < 1
    for k in (0, 1):
        cell.clean[k] += not false[k]


def line(name: str, read: int | str, cell: Cell) -> str:
    """Return a row of the table."""

    def pair(values: tuple[float, float], form: str) -> str:
        return " | ".join("   -" if np.isnan(value) else format(value, form) for value in values)

    def median(lists: tuple[list[float], list[float]]) -> tuple[float, float]:
        return tuple(float(np.median(part)) if part else np.nan for part in lists)  # type: ignore[return-value]

    bounded = tuple(len(part) / cell.modes for part in cell.ratios)
    holds = tuple(float(np.mean(np.array(part) >= 1)) if part else np.nan for part in cell.ratios)
    clean = tuple(part / cell.dossiers for part in cell.clean)
    floored = tuple(part / max(len(ratios), 1) for part, ratios in zip(cell.floored, cell.ratios, strict=True))
    return (
        f"{name:24s} {read!s:>3s} {cell.modes:6d} {pair(bounded, '4.2f')} {pair(holds, '5.3f')} {pair(clean, '5.3f')}"
        f" {pair(median(cell.apart), '5.2f')} {pair(median(cell.measured), '5.2f')} {pair(floored, '4.2f')}"
        f" {cell.splits:5d}"
    )


def add(total: Cell, cell: Cell) -> None:
    """Add a cell to a total."""
    total.modes += cell.modes
    total.dossiers += cell.dossiers
    total.splits += cell.splits
    for k in (0, 1):
        total.floored[k] += cell.floored[k]
        total.clean[k] += cell.clean[k]
        for mine, other in ((total.ratios, cell.ratios), (total.measured, cell.measured), (total.apart, cell.apart)):
            mine[k].extend(other[k])


def study(
    name: str, m: int, n: int, matrices: int, dossiers: int, checks: int, alone: bool, seed: int
) -> dict[int, Cell]:
    """Return the cells of one spectrum by read."""
    place = list(SPECTRA).index(name)
    rng = np.random.Generator(np.random.PCG64([seed, m, place]))
    cells = {read: Cell() for read in READS}
    for _ in range(matrices):
        matrix = build(name, m, n, rng)
        for number in range(dossiers):
            rank = int(rng.integers(1, 21))
            rows = rng.choice([-1.0, 1.0], (int(rng.integers(rank + 1, 5 * rank + 1)), m))
            for read, made, judged, v in reads(matrix, rank, rows, checks, alone, number, rng):
                count(cells[read], matrix, rank, made, judged, v)
    return {read: cell for read, cell in cells.items() if cell.modes}


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--matrices", type=int, default=4, help="of each spectrum, 600 x 800")
    parser.add_argument("--dossiers", type=int, default=40, help="of each matrix")
    parser.add_argument("--checks", type=int, default=10, help="rows q of either check")
    parser.add_argument("--alone", action="store_true", help="checks only, no probe rows left out")
    parser.add_argument("--large", type=int, default=10, help="dossiers of each of the few matrices 5,000 x 2,000")
    parser.add_argument("--spectra", nargs="*", default=list(SPECTRA), choices=list(SPECTRA), metavar="NAME")
    parser.add_argument("--quick", action="store_true", help="one matrix, 20 dossiers, none of the large ones")
    options = parser.parse_args()
    matrices, dossiers, large = (1, 20, 0) if options.quick else (options.matrices, options.dossiers, options.large)
    plans = [(name, 600, 800, matrices, dossiers) for name in options.spectra]
    plans += [(name, 5000, 2000, 1, large) for name in options.spectra if large and name in LARGE]
    start, total = time.perf_counter(), Cell()
    print(f"seed {options.seed}, q = {options.checks}; pairs of values: modes | coefficients")
    heads = (name.ljust(width) for name, width in zip(COLUMNS, WIDTHS, strict=True))
    print(f"{'spectrum':24s} read {' '.join(heads)}")
    with threadpool_limits(1):
        for name, m, n, *counts in plans:
            for read, cell in study(name, m, n, *counts, options.checks, options.alone, options.seed).items():
                print(line(name if m == 600 else f"{name} {m} x {n}", read, cell), flush=True)
                add(total, cell)
    print(line("all", "", total))
    print(f"{total.dossiers} reads of dossiers, {time.perf_counter() - start:.0f} s")


if __name__ == "__main__":
    main()
