"""The removed background as columns: what each term is, how much of it a channel held, and how to rebuild it.

``background(t) = mean + trend_per_day (t - zero) + sum of cos and sin shares (cos(2 pi t / period) - subtract)``, with
the figures of each term in its column's metadata, so that no other file and no program is needed to rebuild it.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any, Protocol

import numpy as np
import numpy.typing as npt

from shardfold.kernels.background import Removal, Terms
from shardfold.quantities import format_duration
from shardfold.summaries import AnySummary, term_energies
from shardfold.tables import Column

Array = npt.NDArray[Any]

DAY_NS = 86_400 * 10**9


class Background(Protocol):
    """What is asked of a finding here."""

    @property
    def summary(self) -> AnySummary:
        """Return the sum as it was added up."""
        ...

    @property
    def terms(self) -> Terms:
        """Return the functions of the dossier."""
        ...

    @property
    def factor(self) -> Array:
        """Return the factor from channel units to prepared values (m,)."""
        ...

    @property
    def removal(self) -> Removal:
        """Return what was taken off."""
        ...

    @property
    def unit(self) -> str:
        """Return the unit of prepared values."""
        ...


def background_columns(found: Background) -> dict[str, Column]:
    """Return the columns of all removed terms: their shares in channel units, then the energy each took."""
    removal, summary, unit = found.removal, found.summary, f"{found.unit}^2"
    columns: dict[str, Column] = {}
    if not removal.keep_mean:
        columns["mean"] = Column(summary.mean / found.factor, "the channel's", "removed mean")
        columns["mean_energy"] = Column(summary.n * summary.mean**2, unit, "energy of the mean")
    stems = [name for name, _ in _terms(found.terms, removal)]
    groups = [rows for _, rows in _terms(found.terms, removal)]
    energies = term_energies(summary, groups, keep_mean=removal.keep_mean)
    for stem, rows, energy in zip(stems, groups, energies, strict=True):
        for row in rows:
            columns |= _share(found, stem, row)
        about = "energy that this term took; what it shares with earlier columns is counted there"
        columns[f"{stem}_energy"] = Column(energy, unit, about)
    return columns


def rebuilt(columns: Mapping[str, Array], facts: Mapping[str, Mapping[str, str]], times_ns: Array) -> Array:
    """Return the background at some times in channel units, float64 (m, n).

    Parameters
    ----------
    columns : mapping of name to ndarray (m,)
        Columns of the table.
    facts : mapping of name to mapping
        Their metadata.
    times_ns : int64 (n,)
        Nanoseconds since the Unix epoch; not looked at if only the mean was removed.
    """
    total = np.zeros((len(next(iter(columns.values()), [0.0])), len(times_ns)))
    for name, values in columns.items():
        if name == "mean":
            total += values[:, np.newaxis]
        elif "function" in facts[name]:
            total += np.outer(values, _function(json.loads(facts[name]["function"]), times_ns))
    return total


def _terms(terms: Terms, removal: Removal) -> list[tuple[str, tuple[int, ...]]]:
    """Return the name and the functions of each removed term, in their one order."""
    found: list[tuple[str, tuple[int, ...]]] = []
    first = bool(terms.unit_ns)
    if first and 0 in removal.rows:
        found.append(("trend", (0,)))
    for number in range(len(terms.periods_ns)):
        rows = (first + 2 * number, first + 2 * number + 1)
        if rows[0] in removal.rows:
            found.append((f"cycle_{number + 1:02d}", rows))
    return found


def _share(found: Background, stem: str, row: int) -> dict[str, Column]:
    removal, terms = found.removal, found.terms
    place = removal.rows.index(row)
    share, about = removal.weights[:, place] / found.factor, float(removal.about[place])
    if stem == "trend":
        zero = terms.origin_ns + round(about * terms.unit_ns)
        function: dict[str, Any] = {"kind": "trend", "zero_ns": zero}
        text = "slope: times the days since the instant zero_ns of the field's metadata"
        columns = {"trend_per_day": (share * (DAY_NS / terms.unit_ns), "the channel's per day", text)}
    else:
        cosine = (row - bool(terms.unit_ns)) % 2 == 0
        period = terms.periods_ns[(row - bool(terms.unit_ns)) // 2]
        kind = "cos" if cosine else "sin"
        function = {"kind": kind, "period_ns": period, "subtract": about}
        text = f"times {kind}(2 pi t / {format_duration(period)}) less its mean, t counted from 1970"
        columns = {f"{stem}_{kind}": (share, "the channel's", text)}
    facts = {"function": json.dumps(function)}
    return {name: Column(values, unit, text, facts=facts) for name, (values, unit, text) in columns.items()}


def _function(function: Mapping[str, Any], times_ns: Array) -> Array:
    if function["kind"] == "trend":
        return np.asarray((times_ns - function["zero_ns"]) / DAY_NS)
    phase = (2 * np.pi / function["period_ns"]) * (times_ns % function["period_ns"])
    wave = np.cos(phase) if function["kind"] == "cos" else np.sin(phase)
    return np.asarray(wave - function["subtract"])

