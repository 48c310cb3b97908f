"""From the sum of a read to what is published: modes, and the coefficients that the workers write leaf by leaf."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

from shardfold import layout
from shardfold.advice import group_names
from shardfold.assess import Assessment
from shardfold.blas import one_thread
from shardfold.dossier import Dossier, npy_bytes
from shardfold.events import Listener, StageDone, StageStarted, TaskDone
from shardfold.executor import Executor
from shardfold.kernels.addressed import name_keys
from shardfold.kernels.blocks import Preparation
from shardfold.kernels.factors import next_probe
from shardfold.kernels.spectra import dominant_frequency
from shardfold.kernels.whole import Shape, Summary
from shardfold.plan import Cell, by_leaf
from shardfold.publish import Finding
from shardfold.refusals import changed_between_reads
from shardfold.summaries import AnySummary
from shardfold.tasks import CoefficientMap, Outcome, PartWritten, Refusal, Task, Workplace, WriteCoefficients

Array = npt.NDArray[Any]

LONGEST_SEGMENT = 8192
SHORTEST_SEGMENT = 64
EVEN_STEP_TOLERANCE = 1e-3


def finding_of(dossier: Dossier, judged: Assessment) -> Finding:
    """Return what was found of a sum, ready to be published."""
    return Finding(dossier.table, _factor(dossier), judged, dossier.design.terms, _unit(dossier))


def write_probe(dossier: Dossier, summary: AnySummary, rank: int, read: int) -> None:
    """Freeze the probe of the next read from the sum of the one before; one that exists wins."""
    assert isinstance(summary, Summary), "a read with all channels kept is never followed by another"
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
) -> tuple[list[tuple[str, str]], Spectrum, int]:
    """Have the coefficients written, one part per leaf that has samples, and return the parts in order of time.

    Returns
    -------
    parts : list of (key, digest)
        In order of time.
    spectrum : Spectrum
        Of all coefficients.
    bytes_read : int
        What was read of the campaign.
    """
    segment = _segment(rows_of) if workplace.design.timed else 0
    mapping, groups = coefficient_map(finding, shape), tuple(group_names(finding.judged))
    filled = ((leaf, group) for leaf, group in by_leaf(cells).items() if rows_of[leaf])
    tasks = [
        WriteCoefficients(
            prefix + layout.part_name(index),
            leaf,
            group,
            shape,
            mapping,
            segment,
            finding.unit,
            groups,
        )
        for index, (leaf, group) in enumerate(filled)
    ]
    again = sum(cell.stored_bytes for cell in cells) if shape.identity else 0
    listen(StageStarted("coefficients", len(tasks), again))
    parts, bytes_read = [], 0
    spectrum = Spectrum(finding.rank, segment)
    for outcome in _in_order(executor.perform(workplace, tasks), tasks, listen):
        parts.append((outcome.key, outcome.digest))
        spectrum.add(outcome)
        bytes_read += outcome.bytes_read
    listen(StageDone("coefficients"))
    return parts, spectrum, bytes_read


def _in_order(
    outcomes: Iterator[tuple[Task, Outcome]], tasks: Sequence[WriteCoefficients], listen: Listener
) -> Iterator[PartWritten]:
    """Yield the parts in the order of their tasks; only those that came too early are held."""
    early: dict[str, PartWritten] = {}
    due = iter(tasks)
    task = next(due, None)
    for _, outcome in outcomes:
        if isinstance(outcome, Refusal):
            raise changed_between_reads(outcome.error)
        assert isinstance(outcome, PartWritten)
        listen(TaskDone("coefficients", outcome.bytes_read))
        early[outcome.key] = outcome
        while task is not None and task.key in early:
            yield early.pop(task.key)
            task = next(due, None)


class Spectrum:
    """The power of all coefficients, added up part by part in order of time, so that its bits are always the same."""

    def __init__(self, rank: int, segment: int) -> None:
        self._power = np.zeros((rank, segment // 2 + 1))
        self._rank, self._segments = rank, 0
        self._least, self._most = np.iinfo(np.int64).max, 0

    def add(self, part: PartWritten) -> None:
        """Add one part."""
        if part.segments:
            self._power += part.power
            self._segments += part.segments
        if part.steps[1] > 0:
            self._least, self._most = min(self._least, part.steps[0]), max(self._most, part.steps[1])

    def dominant_hz(self) -> Array:
        """Return the peak frequency of each coefficient (rank,), NaN where sampling is uneven or too short."""
        even = self._least > 0 and self._most - self._least <= EVEN_STEP_TOLERANCE * self._least
        if not (even and self._segments):
            return np.full(self._rank, np.nan)
        return dominant_frequency(self._power, (self._least + self._most) / 2 * 1e-9)


def coefficient_map(finding: Finding, shape: Shape) -> CoefficientMap:
    """Return how X (or prepared raw data) becomes coefficients; rows under the floor are NaN."""
    removal, held = finding.factors.removal, finding.factors.row_map[: finding.held]
    if shape.identity:
        centre, weights = removal.mean, removal.weights
    else:
        centre, weights = removal.right_mean[shape.x], removal.right_weights[shape.x]
    rows = np.full((finding.rank, shape.k), np.nan)
    rows[: finding.held] = held
    shares = np.zeros((finding.rank, weights.shape[1]))
    shares[: finding.held] = held @ weights
    return CoefficientMap(rows, centre, removal.rows, shares, removal.about)


def _segment(rows_of: dict[int, int]) -> int:
    longest = max(rows_of.values(), default=0)
    segment = min(LONGEST_SEGMENT, 1 << max(0, longest.bit_length() - 1))
    return segment if segment >= SHORTEST_SEGMENT else 0


def _factor(dossier: Dossier) -> Array:
    table = dossier.table
    return Preparation.build(table.gain, table.shift, table.scale, table.weight).factor


def _unit(dossier: Dossier) -> str:
    units = {unit for unit in dossier.table.unit if unit}
    plain = dossier.design.scale == "none" and len(units) == 1 and bool(np.all(dossier.table.weight == 1))
    return units.pop() if plain else ""
