"""From the sum of a read to what is published: modes, and the coefficients that the workers write leaf by leaf."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from shardfold import layout
from shardfold.blas import one_thread
from shardfold.dossier import Dossier, npy_bytes
from shardfold.errors import InputError
from shardfold.events import Listener, Noted, StageDone, StageStarted, TaskDone
from shardfold.executor import Executor
from shardfold.kernels.addressed import name_keys
from shardfold.kernels.blocks import Preparation
from shardfold.kernels.factors import finish, next_probe
from shardfold.kernels.spectra import dominant_frequency
from shardfold.kernels.whole import Shape, Summary
from shardfold.plan import Cell
from shardfold.publish import Finding
from shardfold.tasks import CoefficientMap, PartWritten, Workplace, WriteCoefficients

LONGEST_SEGMENT = 8192
SHORTEST_SEGMENT = 64
EVEN_STEP_TOLERANCE = 1e-3


def finding_of(dossier: Dossier, summary: Summary, rank: int, keep_mean: bool, listen: Listener) -> Finding:
    """Return the modes of a sum, ready to be published.

    Raises
    ------
    InputError
        If nothing varies: no mode lies above the rounding floor.
    """
    if rank > summary.n:
        raise too_few_samples(rank, summary.n)
    with one_thread():
        factors = finish(summary, keep_mean=keep_mean)
    if not len(factors.values):
        raise _nothing_varies(summary, keep_mean)
    if len(factors.values) < rank:
        listen(
            Noted(
                f"{rank - len(factors.values)} of {rank} modes lie under the rounding floor "
                f"({factors.floor:.3g}) and are left blank"
            )
        )
    return Finding(dossier.table, _factor(dossier), summary, factors, rank, keep_mean, _unit(dossier))


def too_few_samples(rank: int, samples: int) -> InputError:
    """Return the error for more modes than samples."""
    return InputError(
        "more modes are asked for than there are samples",
        where="modes.rank",
        rule=f"at most the number of samples, {samples}",
        got=str(rank),
        remedy=f"--set modes.rank={max(1, samples - 1)} or less",
    )


def write_probe(dossier: Dossier, summary: Summary, rank: int, read: int) -> None:
    """Freeze the probe of the next read from the sum of the one before; one that exists wins."""
    with one_thread():
        rows = next_probe(summary, rank, dossier.design.seed, read, name_keys(dossier.table.names))
    dossier.store.create(layout.probe_key(read), npy_bytes(rows.astype(np.float32)))


def write_parts(
    finding: Finding,
    shape: Shape,
    cells: Sequence[Cell],
    rows_of: dict[int, int],
    prefix: str,
    workplace: Workplace,
    executor: Executor,
    listen: Listener,
) -> tuple[list[PartWritten], int]:
    """Have the coefficients written, one part per leaf that has samples, and return the parts in order of time.

    Returns
    -------
    parts : list of PartWritten
    segment : int
        Samples per segment of the spectra; 0 where there are too few.
    """
    segment = _segment(rows_of) if workplace.design.timed else 0
    mapping = coefficient_map(finding, shape)
    leaves = [leaf for leaf, rows in sorted(rows_of.items()) if rows]
    tasks = [
        WriteCoefficients(
            prefix + layout.part_name(index),
            leaf,
            tuple(cell for cell in cells if cell.leaf == leaf),
            shape,
            mapping,
            segment,
            finding.unit,
        )
        for index, leaf in enumerate(leaves)
    ]
    again = sum(cell.stored_bytes for cell in cells) if shape.identity else 0
    listen(StageStarted("coefficients", len(tasks), again))
    parts = []
    for _, outcome in executor.perform(workplace, tasks):
        if not isinstance(outcome, PartWritten):
            raise getattr(outcome, "error", RuntimeError("a coefficient task must write a part"))
        parts.append(outcome)
        listen(TaskDone("coefficients", outcome.bytes_read))
    listen(StageDone("coefficients"))
    return sorted(parts, key=lambda part: part.key), segment


def coefficient_map(finding: Finding, shape: Shape) -> CoefficientMap:
    """Return how X (or prepared raw data) becomes coefficients; rows under the floor are NaN."""
    rows = np.full((finding.rank, shape.k), np.nan)
    rows[: finding.held] = finding.factors.row_map[: finding.held]
    mean = finding.summary.mean if shape.identity else finding.summary.right_mean[shape.x]
    return CoefficientMap(rows, np.zeros_like(mean) if finding.keep_mean else mean)


def dominant_hz(parts: Sequence[PartWritten], rank: int, segment: int) -> np.ndarray:
    """Return the peak frequency of each coefficient, NaN where sampling is uneven or too short.

    The spectra of the parts are summed in order of time, so the figure does not depend on who finished first.
    """
    blank = np.full(rank, np.nan)
    steps = [part.steps for part in parts if part.steps[1] > 0]
    if not segment or not steps or not any(part.segments for part in parts):
        return blank
    low, high = min(a for a, _ in steps), max(b for _, b in steps)
    if low <= 0 or high - low > EVEN_STEP_TOLERANCE * low:
        return blank
    power = np.sum([part.power for part in parts if part.segments], axis=0)
    return dominant_frequency(power, (low + high) / 2 * 1e-9)


def _segment(rows_of: dict[int, int]) -> int:
    longest = max(rows_of.values(), default=0)
    segment = min(LONGEST_SEGMENT, 1 << max(0, longest.bit_length() - 1))
    return segment if segment >= SHORTEST_SEGMENT else 0


def _factor(dossier: Dossier) -> np.ndarray:
    table = dossier.table
    return Preparation.build(table.gain, table.shift, table.scale, table.weight).factor


def _unit(dossier: Dossier) -> str:
    units = {unit for unit in dossier.table.unit if unit}
    plain = dossier.design.scale == "none" and len(units) == 1 and bool(np.all(dossier.table.weight == 1))
    return units.pop() if plain else ""


def _nothing_varies(summary: Summary, keep_mean: bool) -> InputError:
    about = "zero" if keep_mean else "the mean of each channel"
    why = "there is one sample only" if summary.n == 1 else "every channel is constant to rounding"
    return InputError(
        "there is nothing to decompose",
        where="the campaign",
        rule=f"values that vary about {about}",
        got=f"{summary.n} samples; {why}",
        remedy="see that the right column and time span are read; 'modes.remove: []' keeps the mean",
    )
