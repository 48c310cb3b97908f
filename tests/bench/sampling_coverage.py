"""Print how often the sampling angle that nine campaigns in ten should keep is kept, and how N_eff and North's rule do.

    python tests/bench/sampling_coverage.py [--quick] [--cells NAME ...] [--repeats 400] [--seed 1]

Every repeat is a new campaign of a process whose modes are known. It goes through the block kernel leaf by leaf, and
the truth is the angle between the modes of the sample and those of the process. Coefficients are AR(1) series; five
modes are judged. Columns: coverage of the five modes (least, mean, most) in per cent; median of the 90 % angle over the
90 % quantile of the true angles; median of N_eff over ``n (1 - rho^2) / (1 + rho^2)``; North's angle over the root mean
square of the true ones; share of modes that got no angle.
"""

from __future__ import annotations

import argparse
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from scipy.signal import lfilter

from shardfold.kernels import addressed, background, factors, whole
from shardfold.kernels.blocks import Preparation
from shardfold.kernels.leaves import LeafTerms, leaf_terms
from shardfold.kernels.noise import noise_edge
from shardfold.kernels.sampling import Sampling, sampling

Floats = np.ndarray
JUDGED = 5
BURN = 400


@dataclass(frozen=True)
class Cell:
    """One setting: AR(1) coefficient, leaves, samples of a leaf, channels, and how modes fall off.

    ``noise`` is the weakest judged mode over the noise edge, or 0 without noise; ``pair`` joins modes 2 and 3.
    """

    rho: float
    leaves: int
    length: int
    channels: int = 10
    fall: float = 0.6
    noise: float = 0.0
    pair: bool = False

    @property
    def samples(self) -> int:
        """Return the samples of a campaign."""
        return self.leaves * self.length


CELLS = {
    "white-16": Cell(0, 16, 400),
    "white-32": Cell(0, 32, 200),
    "white-64": Cell(0, 64, 100),
    "0.9-16": Cell(0.9, 16, 400),
    "0.9-32": Cell(0.9, 32, 200),
    "0.9-64": Cell(0.9, 64, 100),
    "0.98-16": Cell(0.98, 16, 1600),
    "0.98-32": Cell(0.98, 32, 800),
    "0.98-64": Cell(0.98, 64, 400),
    "short-0.98-16": Cell(0.98, 16, 400),
    "short-0.98-32": Cell(0.98, 32, 200),
    "short-0.98-64": Cell(0.98, 64, 100),
    "too-short-0.98-16": Cell(0.98, 16, 100),
    "few-6": Cell(0.9, 6, 1000),
    "few-8": Cell(0.9, 8, 800),
    "few-10": Cell(0.9, 10, 640),
    "memory-16": Cell(0.98, 16, 60, channels=6, fall=0.1),
    "memory-40": Cell(0.98, 40, 60, channels=6, fall=0.1),
    "pair-0.9-32": Cell(0.9, 32, 400, pair=True),
    "noise-0-32": Cell(0, 32, 64, channels=1000, noise=4.2),
    "noise-0.9-32": Cell(0.9, 32, 100, channels=1000, noise=4.2),
    "noise-0.98-64": Cell(0.98, 64, 100, channels=1000, noise=4.2),
}
SLOW = [name for name in CELLS if name.startswith("noise")]


def strengths(cell: Cell) -> Floats:
    """Return the standard deviation of each mode's coefficient; with noise there are the judged modes only."""
    squares = cell.fall ** np.arange(JUDGED if cell.noise else cell.channels)
    if cell.pair:
        squares[2] = squares[1] / 1.02
    edge = (np.sqrt(cell.channels) + np.sqrt(cell.samples)) / np.sqrt(cell.samples)
    return np.sqrt(squares / squares[JUDGED - 1]) * (cell.noise * edge if cell.noise else 1.0)


def campaign(cell: Cell, rng: np.random.Generator) -> Floats:
    """Return channels x samples; mode i of the process is channel i, which no kernel knows."""
    size = strengths(cell)
    white = rng.standard_normal((size.size, cell.samples + BURN))
    series = lfilter([np.sqrt(1 - cell.rho**2)], [1, -cell.rho], white, axis=1)[:, BURN:] * size[:, np.newaxis]
    if not cell.noise:
        return series
    values = rng.standard_normal((cell.channels, cell.samples), dtype=np.float32)
    values[: size.size] += series.astype(np.float32)
    return values


def read(cell: Cell, values: Floats, probe: whole.Probe) -> list[whole.Summary]:
    """Fold each leaf into a summary of its own."""
    q = probe.check.shape[0]
    identity = probe.rows is None
    shape = whole.Shape(cell.channels, cell.channels if probe.rows is None else len(probe.rows), q, 0, 0, identity)
    parts = []
    for first in range(0, cell.samples, cell.length):
        parts.append(whole.zero(shape))
        block, none = values[:, first : first + cell.length], np.empty((0, cell.length))
        whole.fold_block(parts[-1], block, Preparation.unit(cell.channels), probe, none, none)
    return parts


def merged(parts: Sequence[whole.Summary]) -> whole.Summary:
    """Return the summary of all leaves."""
    total = whole.zero(parts[0].shape)
    for part in parts:
        whole.merge_into(total, part)
    return total


def decompose(cell: Cell, values: Floats, seed: int) -> tuple[factors.Factors, list[LeafTerms]]:
    """Return modes and leaf terms: the identity probe for few channels, two reads for many."""
    keys = np.arange(cell.channels)
    if cell.noise:
        check = addressed.normals(seed, addressed.STREAM_CHECK, keys, 10)
        rows = addressed.signs(seed, addressed.STREAM_PROBE, keys, 40).astype(np.float32)
        total = merged(read(cell, values, whole.Probe(rows, check)))
        rows = factors.next_probe(total, JUDGED, seed, 2, keys)
        probe = whole.Probe(rows, check).in_precision(np.float32)
    else:
        probe = whole.Probe(None, np.empty((0, cell.channels)))
    parts = read(cell, values, probe)
    made = factors.finish(merged(parts))
    theta = probe.check @ made.modes
    terms = []
    for part in parts:
        inner = background.apply(part.n, part.right_mean, part.inner, made.removal)
        terms.append(leaf_terms(part.n, inner, part.shape, made.row_map, theta, JUDGED))
    return made, terms


def judge(cell: Cell, values: Floats, seed: int) -> tuple[Floats, Sampling]:
    """Return the sines of the true angles of the judged modes, and what was said about them."""
    made, terms = decompose(cell, values, seed)
    noise = None
    if cell.noise:
        n, m = cell.samples, cell.channels
        noise = noise_edge(made.values, np.zeros(made.values.size), made.energy, m, n, 1, modes=made.modes)
    group = np.arange(made.values.size)
    if cell.pair:
        group[2:] -= 1
    true = np.sqrt(np.maximum(0, 1 - np.diagonal(made.modes)[:JUDGED] ** 2))
    if cell.pair:
        cosines = np.linalg.svd(made.modes[1:3, 1:3], compute_uv=False)
        true[1:3] = np.sqrt(max(0, 1 - cosines.min() ** 2))
    return true, sampling(terms, made, noise, group)


def study(cell: Cell, repeats: int, seed: int) -> list[float]:
    """Return the columns of one line."""
    rng = np.random.Generator(np.random.PCG64(seed))
    found = [judge(cell, campaign(cell, rng), number) for number in range(repeats)]
    true = np.array([sines for sines, _ in found])
    said = np.array([told.sine for _, told in found])
    north = np.array([told.north for _, told in found])
    effective = np.array([told.n_effective for _, told in found])
    kept = np.where(np.isnan(said), np.nan, true <= said)
    blank = float(np.isnan(said).mean())
    if blank == 1:
        return [np.nan] * 6 + [100.0]
    cover = 100 * np.nanmean(kept, axis=0)
    angle = np.nanmedian(said, axis=0) / np.quantile(true, 0.9, axis=0)
    expected = cell.samples * (1 - cell.rho**2) / (1 + cell.rho**2)
    rule = np.median(north, axis=0) / np.sqrt(np.mean(true**2, axis=0))
    covers = [cover.min(), cover.mean(), cover.max()]
    ratios = [np.median(angle), np.median(effective) / expected, np.median(rule)]
    return [*map(float, covers + ratios), 100 * blank]


def main(show: Callable[[str], None] = print) -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--quick", action="store_true", help="40 repeats, and no cell of 1,000 channels")
    parser.add_argument("--cells", nargs="*", choices=CELLS, help="only these")
    parser.add_argument("--repeats", type=int, default=400)
    parser.add_argument("--seed", type=int, default=1)
    chosen = parser.parse_args()
    names = chosen.cells or [name for name in CELLS if not (chosen.quick and name in SLOW)]
    repeats = 40 if chosen.quick else chosen.repeats
    show(f"{repeats} repeats, seed {chosen.seed}")
    show(f"{'cell':18} {'n':>6}  coverage: least  mean  most   angle  N_eff  North  blank %")
    for name in names:
        cell = CELLS[name]
        least, mean, most, angle, effective, rule, blank = study(cell, repeats, chosen.seed)
        show(  # one line per cell as soon as it is known
            f"{name:18} {cell.samples:6d}           {least:5.1f} {mean:5.1f} {most:5.1f}   "
            f"{angle:5.2f}  {effective:5.2f}  {rule:5.2f}  {blank:5.1f}"
        )


if __name__ == "__main__":
    main()
