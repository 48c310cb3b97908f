"""A finished factorization becomes tables, and the tables become a result when one manifest names them.

Parts first, the manifest last: a folder without a manifest is no result. Everything but hosts and clocks is a function
of the inputs, so a repeated run writes the same bytes.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from shardfold import advice, layout
from shardfold.assess import Assessment, padded
from shardfold.background_columns import background_columns
from shardfold.channels import ChannelTable
from shardfold.ids import canonical_json, digest_bytes
from shardfold.kernels.background import Removal, Terms
from shardfold.kernels.factors import Factors, captured_by_channel
from shardfold.store import Created, Store
from shardfold.summaries import AnySummary
from shardfold.tables import Column, mode_names, to_parquet

Array = npt.NDArray[Any]

CAUTION = (
    "Modes are patterns of largest variance over the channels, not natural modes of a structure. Where they feed a "
    "judgement on the safety of a structure or machine, local codes and licensed practice decide."
)


@dataclass(frozen=True)
class Finding:
    """What is published: what was found of a sum, and who the channels are.

    ``rank`` modes are written; those under the rounding floor are blank.
    """

    table: ChannelTable
    factor: Array
    judged: Assessment
    terms: Terms
    unit: str

    @property
    def summary(self) -> AnySummary:
        """Return the sum as it was added up."""
        return self.judged.summary

    @property
    def factors(self) -> Factors:
        """Return all computed modes."""
        return self.judged.factors

    @property
    def removal(self) -> Removal:
        """Return what was taken off before."""
        return self.judged.factors.removal

    @property
    def rank(self) -> int:
        """Return the number of modes that are written."""
        return self.judged.rank

    @property
    def held(self) -> int:
        """Return how many of them lie above the floor."""
        return min(self.rank, len(self.factors.values))

    @property
    def values(self) -> Array:
        """Return the singular values (rank,), NaN under the floor."""
        return padded(self.factors.values[: self.held], self.rank)

    @property
    def patterns(self) -> Array:
        """Return the modes in channel units (m, rank), NaN under the floor."""
        patterns = np.full((len(self.factor), self.rank), np.nan)
        patterns[:, : self.held] = self.factors.modes[:, : self.held] / self.factor[:, None]
        return patterns


def result_tables(finding: Finding, dominant_hz: Array) -> dict[str, bytes]:
    """Return the tables of a result, coefficients apart, by file name."""
    return {
        "modes.parquet": modes_table(finding),
        "mode_table.parquet": mode_table(finding, dominant_hz),
        "channel_summary.parquet": channel_summary(finding),
        "background.parquet": background_table(finding),
    }


def modes_table(finding: Finding) -> bytes:
    """Return one row per channel: who it is, and its share in each mode, in the channel's unit."""
    table = finding.table
    columns = {
        "channel": Column(list(table.names), "", "channel name"),
        "unit": Column(list(table.unit), "", "unit of the channel's values after gain and shift"),
        "scale": Column(table.scale, finding.unit, "prepared values are divided by it"),
        "weight": Column(table.weight, "", "quadrature or mass weight; its square root multiplies the amplitude"),
    }
    for name, values in table.positions.items():
        columns[name] = Column(values, "", "position of the channel, as in the channel table")
    about = "background + modes . coefficients is the channel's value"
    names = zip(mode_names(finding.rank, "mode"), advice.group_names(finding.judged), strict=True)
    for (name, group), pattern in zip(names, finding.patterns.T, strict=True):
        columns[name] = Column(pattern, "the channel's", about, facts={} if group is None else {"group": group})
    return to_parquet(columns, {"caution": CAUTION})


def mode_table(finding: Finding, dominant_hz: Array) -> bytes:
    """Return one row per mode: value, size, share of energy, how far it can be relied on, where it moves most."""
    n, unit, judged = max(1, finding.summary.n), finding.unit, finding.judged
    values, patterns = finding.values, finding.patterns
    share = values**2 / finding.factors.energy_total
    peaks = [int(np.argmax(np.abs(p))) if np.isfinite(p).all() else -1 for p in patterns.T]
    at_peak = np.array([abs(patterns[c, j]) if c >= 0 else np.nan for j, c in enumerate(peaks)])
    columns = {
        "mode": Column(np.arange(1, finding.rank + 1), "", "number, by falling singular value"),
        "singular_value": Column(values, unit, "empty where it lies under the rounding floor"),
        "rms": Column(values / np.sqrt(n), unit, "root mean square of the coefficient over the samples"),
        "energy_fraction": Column(share, "", "share of the energy left after the background was removed; exact"),
        "energy_cumulative": Column(np.cumsum(share), "", "share of this and all stronger modes"),
        **_accuracy_columns(judged),
        "peak_channel": Column([finding.table.names[c] if c >= 0 else None for c in peaks], "", "where it is largest"),
        "rms_at_peak": Column(at_peak * values / np.sqrt(n), "the channel's", "root mean square at the peak channel"),
        "dominant_hz": Column(dominant_hz, "Hz", "peak of the coefficient's spectrum; empty if sampling is uneven"),
    }
    return to_parquet(columns, {"caution": CAUTION, "tolerance_deg": repr(judged.tolerance_deg)})


def _accuracy_columns(judged: Assessment) -> dict[str, Column]:
    degrees, bounds, told = judged.degrees, judged.bounds, judged.sampling
    whom = "the mode, or the space of its group"
    abouts: dict[str, tuple[Any, str, str]] = {
        "angle_bound_deg": (degrees(bounds.sine), "deg", f"{whom} is this close to the exact one of these data"),
        "mac_at_least": (advice.mac(judged), "", "least modal assurance with the exact mode of these data, if alone"),
        "coefficient_angle_bound_deg": (degrees(bounds.coefficient_sine), "deg", f"the same of coefficients of {whom}"),
        "sampling_angle_deg": (degrees(told.sine), "deg", f"{whom} is this close to the process, 9 times in 10"),
        "north_angle_deg": (degrees(told.north), "deg", "root mean square, by North's rule with the effective samples"),
        "group": (advice.group_names(judged), "", "close modes, of which only the space of all means anything"),
        "verdict": (advice.verdict_words(judged), "", "against the tolerance of the result"),
        "remedy": (advice.remedy_words(judged), "", "what would help, and by how much about"),
    }
    return {name: Column(*about) for name, about in abouts.items()}


def channel_summary(finding: Finding) -> bytes:
    """Return one row per channel: samples, gaps, range, spread, energy and how much of it the modes hold."""
    summary, table = finding.summary, finding.table
    energy = finding.factors.energy
    captured = captured_by_channel(finding.factors, finding.held)
    share = np.divide(captured, energy, out=np.full(len(energy), np.nan), where=energy > finding.factors.floor**2)
    spread = np.sqrt(summary.energy / max(1, summary.n - 1)) / finding.factor
    still = "nothing left when the background is removed" if finding.removal.rows else "constant"
    columns = {
        "channel": Column(list(table.names), "", "channel name"),
        "samples": Column(summary.n - summary.gaps, "", "valid samples"),
        "gaps": Column(summary.gaps, "", "missing samples"),
        "mean": Column(summary.mean / finding.factor, "the channel's", "mean of the valid samples"),
        "std": Column(spread, "the channel's", "standard deviation, divisor n - 1"),
        "min": Column(summary.low, "the channel's", "least value"),
        "max": Column(summary.high, "the channel's", "largest value"),
        "energy": Column(energy, f"{finding.unit}^2", "sum of squares of prepared values, background removed"),
        "captured_fraction": Column(share, "", "share of that energy which the written modes hold; exact"),
        "note": Column([still if e <= finding.factors.floor**2 else "" for e in energy], "", "remarks"),
    }
    return to_parquet(columns)


def background_table(finding: Finding) -> bytes:
    """Return one row per channel: each removed background term and the energy it took, one after the other."""
    return to_parquet({"channel": Column(list(finding.table.names), "", "channel name"), **background_columns(finding)})


def manifest(facts: Mapping[str, Any], files: Mapping[str, str], made: Mapping[str, Any]) -> bytes:
    """Return the manifest: facts and file digests that identify the result, and how it came to be beside them."""
    return json.dumps(
        {"format": 1, **facts, "files": dict(sorted(files.items())), "made": made, "caution": CAUTION},
        indent=1,
        ensure_ascii=False,
        allow_nan=False,
    ).encode()


def quality(finding: Finding) -> dict[str, Any]:
    """Return the numbers that say how much the modes hold and how far they can be relied on."""
    total = finding.factors.energy_total
    captured = float(np.nansum(finding.values**2))
    return {
        "samples": finding.summary.n,
        "channels": len(finding.factor),
        "modes": finding.held,
        "energy": total,
        "energy_captured": captured,
        "captured_fraction": captured / total,
        "rounding_floor": finding.factors.floor,
        "singular_values": [None if np.isnan(v) else float(v) for v in finding.values],
        **advice.record(finding.judged),
    }


def put_all(store: Store, prefix: str, files: Mapping[str, bytes]) -> dict[str, str]:
    """Write the tables of a result and return their digests."""
    for name, data in files.items():
        store.put(prefix + name, data)
    return {name: digest_bytes(data) for name, data in files.items()}


def seal(store: Store, prefix: str, body: bytes) -> bool:
    """Write the manifest, which makes the result exist; return whether this run did it."""
    return store.create(prefix + layout.MANIFEST, body) is Created.LANDED


def shards_digest(shards: Sequence[tuple[str, str]]) -> str:
    """Return the digest of a set of shard versions."""
    return digest_bytes(canonical_json(sorted(shards)))
