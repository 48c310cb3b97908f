"""From the sum of a read to what can be said of its modes: how accurate, how many, told apart or not, what would help.

The mathematics is in the kernels; here their answers are brought together, with the one stage of tasks that they need,
and cut to the modes that are published. No table and no wording.
"""

from __future__ import annotations

import io
from dataclasses import dataclass, replace
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

from shardfold import layout
from shardfold.blas import one_thread
from shardfold.errors import InputError
from shardfold.events import StageDone, StageStarted, TaskDone
from shardfold.ingest import Intake, Pass
from shardfold.job import AngleRank, EnergyRank
from shardfold.job_values import MOST_READS
from shardfold.kernels.addressed import STREAM_CHECK, name_keys, normals
from shardfold.kernels.bounds import CLOSE, Bounds, Checks, Residuals, bounds, residuals
from shardfold.kernels.factors import Factors, fresh_rows
from shardfold.kernels.leaves import LeafTerms
from shardfold.kernels.noise import NoiseEdge, State, noise_edge
from shardfold.kernels.ranks import AboveNoise, Angle, Count, Energy, RankChoice, RankReason, RankRule, choose_rank
from shardfold.kernels.remedy import Predictions, fit_spectrum, head_size, predict, squares_outside
from shardfold.kernels.sampling import Sampling, sampling
from shardfold.kernels.verdicts import Judgement, ReadDecision, judge, read_again
from shardfold.kernels.whole import Summary
from shardfold.leaf_terms import TermsTaken, mode_map, terms_tasks
from shardfold.plan import by_leaf
from shardfold.site import Site
from shardfold.summaries import AnySummary, finish
from shardfold.sums import add_all

Array = npt.NDArray[Any]


@dataclass(frozen=True, eq=False)
class Assessment:
    """What was found of a sum.

    Attributes
    ----------
    summary : Summary or Triangle
        As added up.
    factors, bounds, sampling, noise
        Of all computed modes; ``sampling`` of the leading ones, ``noise`` is ``None`` where nothing is left.
    choice : RankChoice
        How many modes are published, and why.
    judgements : tuple of Judgement
        Of the published modes that lie above the rounding floor.
    decision : ReadDecision
        Whether another read would help.
    asked : int or None
        Number of modes asked for, if a number was.
    tolerance_deg : float
    leaves : int
        Leaves of the campaign; the sampling is judged by fewer where neighbours had to be joined.
    modes_after_a_read : int
        Leading modes expected within the angle asked for if the campaign is read once more; 0 without such a rule.
    """

    summary: AnySummary
    factors: Factors
    bounds: Bounds
    sampling: Sampling
    noise: NoiseEdge | None
    choice: RankChoice
    judgements: tuple[Judgement, ...]
    decision: ReadDecision
    asked: int | None
    tolerance_deg: float
    leaves: int
    modes_after_a_read: int

    @property
    def held(self) -> int:
        """Return how many published modes lie above the floor."""
        return len(self.judgements)

    @property
    def rank(self) -> int:
        """Return how many modes are written: those asked for are, blank where they lie under the floor."""
        return max(self.choice.rank, self.asked or 0)

    @property
    def told(self) -> Array:
        """Return which of the held modes are more than noise, bool (held,): of others no angle is worth a figure."""
        return np.array([not noisy for noisy in at_noise(self.noise, self.held)], dtype=bool)

    @cached_property
    def grouped(self) -> Array:
        """Return which of the held modes share a group with another, computed or published, bool (held,)."""
        _, place, sizes = np.unique(self.bounds.group, return_inverse=True, return_counts=True)
        return np.asarray(sizes[place][: self.held] > 1)

    def degrees(self, sines: Array) -> Array:
        """Return angles of the written modes (rank,), NaN where there is none to be given."""
        held = np.where(self.told, padded(sines, self.held), np.nan)
        return padded(np.degrees(np.arcsin(np.minimum(held, 1.0))), self.rank)


@one_thread()  # else bits of products would depend on this machine's processors
def assess(site: Site, intake: Intake, done: Pass) -> Assessment:
    """Return what can be said of the modes of a read.

    Raises
    ------
    InputError
        If nothing varies: no mode lies above the rounding floor. If more modes are asked for than there are samples.
    """
    summary = sum_of(site, intake, done)
    modes, design = site.job.modes, site.dossier.design
    if isinstance(modes.rank, int) and modes.rank > summary.n:
        raise too_few_samples(modes.rank, summary.n)
    periods = [term for term in modes.remove if isinstance(term, int)]
    rows = design.terms.rows("trend" in modes.remove, periods)
    reduced, factors = finish(summary, keep_mean="mean" not in modes.remove, rows=rows)
    if not len(factors.values):
        raise _nothing_varies(summary, factors)
    checks, left = _residuals(site, done, reduced, factors)
    terms = _leaf_terms(site, intake, done, factors, checks)
    energy, removed = factors.energy, factors.removal.rank + (not factors.removal.keep_mean)
    noise = noise_edge(
        factors.values, left.right_estimate, energy, len(energy), factors.n, removed,
        modes=factors.modes, floor=factors.floor,
    )  # fmt: skip
    told = sampling(terms, factors, noise)
    samples = told.n_effective if np.isfinite(told.n_effective) else float(factors.n)
    found = bounds(factors, left, samples)
    told = sampling(terms, factors, noise, found.group)
    ahead = _predictions(done, factors, left, checks, found.group)
    choice = _choice(modes.rank, design.most_modes(modes.rank), factors, found, noise)
    return _judged(site, done, summary, factors, found, told, noise, choice, ahead, samples)


def sum_of(site: Site, intake: Intake, done: Pass) -> AnySummary:
    """Return the sum of all cells of a read."""
    return add_all(
        site.dossier.store, site.workplace, intake.executor, intake.listen, done.read, done.shape, done.cells
    )


def too_few_samples(rank: int, samples: int) -> InputError:
    """Return the error for more modes than samples."""
    return InputError(
        "more modes are asked for than there are samples",
        where="modes.rank",
        rule=f"at most the number of samples, {samples}",
        got=str(rank),
        remedy=f"--set modes.rank={max(1, samples - 1)} or less",
    )


def padded(values: Array, length: int) -> Array:
    """Return some figures with NaN for the modes that have none."""
    head = values[:length]
    return np.concatenate([head, np.full(length - len(head), np.nan)])


def at_noise(noise: NoiseEdge | None, count: int) -> Array:
    """Return which of the leading modes are no more than noise, bool (count,)."""
    states = () if noise is None else noise.states
    return np.array([i < len(states) and states[i] is State.AT_NOISE for i in range(count)], dtype=bool)


def _residuals(
    site: Site, done: Pass, reduced: Summary | None, factors: Factors
) -> tuple[Checks | None, Residuals]:
    """Return what the modes leave, and what it was measured with; nothing but rounding where all channels are kept."""
    if reduced is None:
        nothing, floor = np.zeros(factors.values.size), factors.floor**2
        return None, Residuals(nothing, nothing, nothing, floor, floor)
    dossier, shape = site.dossier, done.shape
    theta = normals(dossier.design.seed, STREAM_CHECK, name_keys(dossier.table.names), shape.q_theta)
    checks = Checks(reduced.outer[:, shape.theta], theta)
    probe = np.load(io.BytesIO(dossier.store.read(layout.probe_key(done.read))), allow_pickle=False)
    return checks, residuals(reduced, factors, checks, probe)


def _leaf_terms(
    site: Site, intake: Intake, done: Pass, factors: Factors, checks: Checks | None
) -> list[LeafTerms]:
    """Have the terms of all leaves taken, and return them in the order of time."""
    count = min(factors.values.size, site.dossier.design.most_modes(site.job.modes.rank))
    seen = np.zeros((0, factors.values.size)) if checks is None else checks.theta @ factors.modes
    mapping = mode_map(done.shape, factors.removal, factors.row_map, seen, count)
    tasks = terms_tasks(done.read, done.cells, mapping)
    intake.listen(StageStarted("judge", len(tasks)))
    taken: dict[int, TermsTaken] = {}
    for _, outcome in intake.executor.perform(site.workplace, tasks):
        assert isinstance(outcome, TermsTaken)
        taken[outcome.number] = outcome
        intake.listen(TaskDone("judge"))
    intake.listen(StageDone("judge"))
    return [terms for number in sorted(taken) for terms in taken[number].terms]


@dataclass(frozen=True)
class _Ahead:
    """What more effort is expected to bring: for groups as one, and for each mode by itself."""

    grouped: Predictions
    alone: Predictions


def _predictions(
    done: Pass, factors: Factors, left: Residuals, checks: Checks | None, group: Array
) -> _Ahead | None:
    if checks is None:
        return None
    rank, k = min(factors.values.size, done.shape.k), done.shape.k
    head = min(head_size(min(rank, k // 2), k), factors.values.size)
    spectrum = fit_spectrum(
        factors.values,
        left.right_estimate,
        factors.energy_total,
        squares_outside(factors.modes[:, :head], checks.h),
        head=head,
        count=min(len(factors.energy), factors.n),
        width=k,
        reads=done.read,
        floor=factors.floor,
    )
    fresh = fresh_rows(k, min(rank, k // 3))
    return _Ahead(predict(spectrum, head, fresh, group), predict(spectrum, head, fresh))


def _choice(
    asked: Any, most: int, factors: Factors, found: Bounds, noise: NoiseEdge | None
) -> RankChoice:
    """Return how many modes are published: a group whole, unless there is no room for it."""
    count = factors.values.size
    # A mode at noise is known to no angle, however well it is computed.
    computed = np.where(at_noise(noise, count), np.nan, np.maximum(found.sine, found.coefficient_sine))
    rule = _rule(asked, count if noise is None else noise.count)
    choice = choose_rank(
        rule, eigenvalues=factors.values**2, energy_total=factors.energy_total, sine=computed, group=found.group
    )
    if choice.rank <= most:
        return choice
    if isinstance(asked, int):
        return replace(choice, rank=min(asked, count), reason=RankReason.GROUP_LONG)
    return replace(choice, rank=most, met=False, reason=RankReason.NO_ROOM)


def _rule(asked: Any, above_noise: int) -> RankRule:
    if isinstance(asked, int):
        return Count(asked)
    if isinstance(asked, EnergyRank):
        return Energy(asked.energy)
    return Angle(asked.angle_deg) if isinstance(asked, AngleRank) else AboveNoise(above_noise)


def _judged(
    site: Site,
    done: Pass,
    summary: AnySummary,
    factors: Factors,
    found: Bounds,
    told: Sampling,
    noise: NoiseEdge | None,
    choice: RankChoice,
    ahead: _Ahead | None,
    samples: float,
) -> Assessment:
    modes, rank = site.job.modes, choice.rank
    noisy = at_noise(noise, rank)
    weak = np.array([bool(noise and i < len(noise.states) and noise.states[i] is State.WEAK) for i in range(rank)])
    judgements = judge(
        modes.tolerance_deg,
        sine=found.sine[:rank],
        coefficient_sine=found.coefficient_sine[:rank],
        sampling_sine=padded(told.sine, rank),
        group=found.group,
        at_noise=noisy,
        weak=weak.astype(bool),
        predictions=None if ahead is None else ahead.grouped,
    )
    nothing = np.full(rank, np.nan)
    decision = read_again(
        modes.rank.angle_deg if isinstance(modes.rank, AngleRank) else modes.tolerance_deg,
        sine=found.sine[:rank],
        coefficient_sine=found.coefficient_sine[:rank],
        group=found.group,
        at_noise=noisy,
        predicted=nothing if ahead is None else padded(ahead.grouped.read, rank),
        predicted_alone=nothing if ahead is None else padded(ahead.alone.read, rank),
        held_by_sampling=_held_together(factors.values**2, found.group, samples)[:rank],
        reads=done.read,
        most_reads=MOST_READS,
        exact=done.shape.identity,
    )
    asked = modes.rank if isinstance(modes.rank, int) else None
    more = _run_within(modes.rank.angle_deg, ahead) if isinstance(modes.rank, AngleRank) else 0
    leaves = len(by_leaf(done.cells))
    return Assessment(
        summary, factors, found, told, noise, choice, judgements, decision, asked, modes.tolerance_deg, leaves, more
    )


def _run_within(degrees: float, ahead: _Ahead | None) -> int:
    """Return how many leading modes are expected within an angle after one more read."""
    if ahead is None:
        return 0
    failed = ~(ahead.grouped.read <= np.sin(np.radians(degrees)))
    return int(failed.argmax()) if failed.any() else failed.size


def _held_together(squares: Array, group: Array, samples: float) -> Array:
    """Return which modes share a group because the samples are too few to part them, whatever is computed (k',)."""
    apart = np.maximum(squares[:-1] - squares[1:], 0)
    close = (np.sqrt(squares[:-1] * squares[1:] / samples) > CLOSE * apart) & (group[:-1] == group[1:])
    held = np.zeros(squares.size, dtype=bool)
    held[:-1] |= close
    held[1:] |= close
    return held


def _nothing_varies(summary: AnySummary, factors: Factors) -> InputError:
    keep_mean = factors.removal.keep_mean
    about = "zero" if keep_mean else "the mean of each channel"
    about += " and the functions of time removed" if factors.removal.rows else ""
    got = "one sample only" if summary.n == 1 else f"{summary.n:,} samples; every channel is constant to rounding"
    return InputError(
        "there is nothing to decompose",
        where="the campaign",
        rule=f"values that vary about {about}",
        got=got,
        remedy="see that the right columns are read" + ("" if keep_mean else "; 'modes.remove: []' keeps the mean"),
    )
