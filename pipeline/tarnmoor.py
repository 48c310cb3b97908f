"""The demo campaign: three invented hours on the Tarnmoor footbridge, and what must be found in them.

A simply supported deck is tracked at 640 points, 8 times a second. Wind and walkers drive three lightly damped
bending modes; the deck also sags, bows slowly in the morning sun, and the tracker has noise. Bending shapes and
frequencies are those of the Euler-Bernoulli beam, sin(m pi x / L) and 1 : 4 : 9, so what a run finds can be set
against a formula. The thermal bow is a parabola, and a parabola is nearly the first bending shape (MAC 0.9986): no
method that looks at patterns alone can tell them apart. It is kept to about two per cent of the first mode's energy,
where it adds to that mode and turns its shape by less than 0.1 degree, and it is not claimed to be found apart. What
the first three modes leave of it is a weak fourth pattern just above the noise; the rest is noise.

Demo data only: nothing in a real run may import this module, and only here may NumPy's generators be used.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta
from typing import Any, Protocol

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from numpy.typing import NDArray
from scipy.signal import lfilter

Floats = NDArray[np.float64]

CHANNELS = 640
SPAN_M = 64.0
RATE_HZ = 8
SHARDS = 12
SHARD_SAMPLES = 15 * 60 * RATE_HZ
ROW_GROUP_SAMPLES = 2400
START = datetime(2031, 4, 12, 6, tzinfo=UTC)
SEED = 20310412

FIRST_HZ = 0.32
ORDERS: Floats = np.array([1.0, 2.0, 3.0])
DAMPING_RATIO = 0.01
MASS_KG_PER_M = 2500.0
WIND_RMS_MM = np.array([6.0, 2.0, 0.6])
SAG_MM = 38.0
BOW_MM = 4.0
NOISE_MM = 0.05
RESOLUTION_MM = 1.0 / 256.0

WALKERS_PER_HOUR = 40.0
WALKER_N = 720.0
WALKER_SWING = 0.4

_WIND, _WALKERS, _NOISE = 1, 2, 3
_RUN_IN_SAMPLES = 600 * RATE_HZ


class Sink(Protocol):
    """Anything that keeps bytes under a key; every writable store of this package does."""

    def put(self, key: str, data: bytes) -> None:
        """Keep the bytes under the key, all or nothing."""


@dataclass(frozen=True)
class Truth:
    """What the campaign was made from.

    Attributes
    ----------
    keys : tuple of str
        The shards written, in time order.
    positions : (m,) float64
        Distance of every point from the first support, in m.
    shapes : (m, 3) float64
        Bending shapes, largest value 1.
    natural_hz : (3,) float64
        Natural frequencies in Hz, 1 : 4 : 9.
    samples : int
        Samples written.
    """

    keys: tuple[str, ...]
    positions: Floats
    shapes: Floats
    natural_hz: Floats
    samples: int


@dataclass(frozen=True)
class Closeness:
    """How close one mode that was found comes to the beam.

    ``mode`` counts from 1; ``shape`` is the order m of the bending shape it matches best; ``mac`` is the modal
    assurance criterion with it, between 0 and 1; ``found_hz`` and ``beam_hz`` are the dominant frequency found and the
    natural frequency built in; ``ratio`` is ``found_hz`` over that of the mode which matches the first shape (not a
    number if none does) and ``beam_ratio`` what it should be, m squared.
    """

    mode: int
    shape: int
    mac: float
    found_hz: float
    beam_hz: float
    ratio: float
    beam_ratio: int


def positions() -> Floats:
    """Return the distance of every point from the first support in m, shape (m,).

    The points sit in the middle of equal lengths; there the sampled sines are exactly orthogonal (DST-II).
    """
    return np.arange(0.5, CHANNELS) * (SPAN_M / CHANNELS)


def beam_shapes(x: Floats) -> Floats:
    """Return sin(m pi x / L) for m = 1, 2, 3 at the distances ``x`` (m,) in m; shape (m, 3)."""
    return np.sin(np.pi * ORDERS * (x[:, None] / SPAN_M))


def natural_hz() -> Floats:
    """Return the natural frequencies of the beam in Hz, shape (3,): m squared times the first."""
    return FIRST_HZ * ORDERS**2


def channel_names() -> tuple[str, ...]:
    """Return the names of the 640 points, ``deck_000`` to ``deck_639``, in the order of the vectors."""
    return tuple(f"deck_{number:03d}" for number in range(CHANNELS))


def channel_table() -> bytes:
    """Return the channel table as Parquet bytes: ``channel``, ``unit`` (mm) and position ``x_m``."""
    texts = [pa.field("channel", pa.string()), pa.field("unit", pa.string())]
    schema = pa.schema([*texts, _field("x_m", pa.float64(), "m")])
    columns = [list(channel_names()), ["mm"] * CHANNELS, positions()]
    out = pa.BufferOutputStream()
    pq.write_table(pa.table(columns, schema=schema), out)
    return bytes(out.getvalue())


def write_campaign(store: Sink, *, shards: int = SHARDS, seed: int = SEED) -> Truth:
    """Write the campaign through a store, one shard at a time, and return what it was made from.

    Parameters
    ----------
    store : Sink
        Where the shards go; only ``put(key, data)`` is used.
    shards : int
        Quarters of an hour to write, 1 to 12. Fewer shards are the first ones of the full campaign, bit for bit.
    seed : int
        Start of every random stream.

    Returns
    -------
    Truth

    Raises
    ------
    ValueError
        If ``shards`` is not between 1 and 12.

    Notes
    -----
    Memory is one shard (18 MB of values) and the modal series of the whole campaign (2 MB).
    """
    if not 1 <= shards <= SHARDS:
        raise ValueError(f"shards must be between 1 and {SHARDS}, got {shards}")
    keys = []
    for key, times, deck in _quarters(shards, seed):
        store.put(key, _parquet(times, deck))
        keys.append(key)
    x = positions()
    return Truth(tuple(keys), x, beam_shapes(x), natural_hz(), shards * SHARD_SAMPLES)


def how_close(modes: Floats, dominant_hz: Floats) -> tuple[Closeness, ...]:
    """Set modes that were found against the beam, one row per mode.

    Parameters
    ----------
    modes : (m, r) float64
        Modes in channel order, any scale and sign.
    dominant_hz : (r,) float64
        Dominant frequency of each coefficient series in Hz; may be not-a-number.

    Returns
    -------
    tuple of Closeness
        In the order of the modes. A mode beyond the third matches no bending shape, which its ``mac`` shows.

    Raises
    ------
    ValueError
        If the shapes do not fit.

    Notes
    -----
    MAC = (a . b)^2 / ((a . a)(b . b)), Allemang and Brown, IMAC 1982.
    """
    if modes.ndim != 2 or len(modes) != CHANNELS or dominant_hz.shape != (modes.shape[1],):
        raise ValueError(
            f"modes must have shape ({CHANNELS}, r) and dominant_hz (r,), got {modes.shape} and {dominant_hz.shape}"
        )
    shapes = beam_shapes(positions())
    energy = np.sum(modes**2, axis=0)[:, None] * np.sum(shapes**2, axis=0)
    mac = (modes.T @ shapes) ** 2 / np.where(energy > 0, energy, 1.0)
    best = np.argmax(mac, axis=1)
    first = int(np.argmax(mac[:, 0]))
    first_hz = float(dominant_hz[first]) if best[first] == 0 else float("nan")
    return tuple(
        _row(mode, int(match), float(mac[mode, match]), float(dominant_hz[mode]), first_hz)
        for mode, match in enumerate(best)
    )


def job_text(campaign_location: str, dossier_location: str, endpoint: str | None, table_path: str) -> str:
    """Return the job file of the demo as YAML.

    Parameters
    ----------
    campaign_location, dossier_location : str
        Where the shards are and where the dossier goes.
    endpoint : str or None
        S3 endpoint of the locations that are on S3; ``None`` for the usual chain.
    table_path : str
        The channel table, as the job file should name it.
    """
    return f"""\
# Tarnmoor footbridge: invented data, see what must come out of it with `shardfold demo`.
campaign: tarnmoor
source:
  location: {json.dumps(campaign_location)}
  layout: vector          # one column holds the whole deck
  time: t
  values: deck
  channels: {{table: {json.dumps(table_path)}}}
  settle: 0 s             # the shards were written a moment ago, and nobody writes any more
{_storage(campaign_location, endpoint)}dossier:
  location: {json.dumps(dossier_location)}
{_storage(dossier_location, endpoint)}modes:
  rank: 3                 # three bending shapes stand clear of the noise
"""


def _row(mode: int, match: int, mac: float, found_hz: float, first_hz: float) -> Closeness:
    order = int(ORDERS[match])
    ratio = found_hz / first_hz if first_hz > 0 else float("nan")
    return Closeness(mode + 1, order, mac, found_hz, float(natural_hz()[match]), ratio, order**2)


def _storage(location: str, endpoint: str | None) -> str:
    if endpoint is None or not location.startswith("s3://"):
        return ""
    return f"  storage: {{endpoint: {json.dumps(endpoint)}, region: us-east-1}}\n"


def _quarters(shards: int, seed: int) -> Iterator[tuple[str, NDArray[np.int64], NDArray[np.float32]]]:
    """Yield key, times (n,) in microseconds since the epoch and values (n, m) in mm, quarter by quarter."""
    x = positions()
    shapes = np.column_stack([beam_shapes(x), _bow_shape(x)]).T.astype(np.float32)
    sag = _sag(x).astype(np.float32)
    series = np.column_stack([_modal_series(shards * SHARD_SAMPLES, seed), _bow_series(shards * SHARD_SAMPLES)])
    step_us = 1_000_000 // RATE_HZ
    for shard in range(shards):
        rows = slice(shard * SHARD_SAMPLES, (shard + 1) * SHARD_SAMPLES)
        begin = START + timedelta(microseconds=rows.start * step_us)
        times = int(begin.timestamp()) * 1_000_000 + step_us * np.arange(SHARD_SAMPLES, dtype=np.int64)
        deck = series[rows].astype(np.float32) @ shapes
        deck += sag
        yield f"{begin:%Y}/tarnmoor-{begin:%Y%m%dT%H%M}.parquet", times, _tracked(deck, seed, shard)


def _tracked(deck: NDArray[np.float32], seed: int, shard: int) -> NDArray[np.float32]:
    """Return what the tracker reports: noise added, rounded to its resolution (in place)."""
    noise = _random(seed, _NOISE, shard).standard_normal(deck.shape, dtype=np.float32)
    noise *= np.float32(NOISE_MM)
    deck += noise
    deck /= np.float32(RESOLUTION_MM)
    np.rint(deck, out=deck)
    deck *= np.float32(RESOLUTION_MM)
    return deck


def _sag(x: Floats) -> Floats:
    """Return the dead-load sag in mm: x^4 - 2 L x^3 + L^3 x, scaled to its value in the middle."""
    s = x / SPAN_M
    return SAG_MM * (16.0 / 5.0) * (s**4 - 2.0 * s**3 + s)


def _bow_shape(x: Floats) -> Floats:
    """Return the parabola of a uniform temperature gradient through the depth, 1 in the middle."""
    s = x / SPAN_M
    return 4.0 * s * (1.0 - s)


def _bow_series(samples: int) -> Floats:
    """Return the thermal bow in the middle in mm (upwards, so negative): a warming morning and slow clouds."""
    hours = np.arange(samples) / (3600.0 * RATE_HZ)
    return -BOW_MM * (np.sin(np.pi * hours / 12.0) + 0.12 * np.sin(2.0 * np.pi * hours / 0.7))


def _modal_series(samples: int, seed: int) -> Floats:
    """Return the three modal displacements in mm, shape (n, 3), already swinging at the first sample."""
    total = samples + _RUN_IN_SAMPLES
    wind = _random(seed, _WIND).standard_normal((total, ORDERS.size))
    walkers = _walker_forces(total, seed)
    series = np.empty((total, ORDERS.size))
    for i, hz in enumerate(natural_hz()):
        b, a = _oscillator(2.0 * np.pi * hz)
        wind_force = wind[:, i] * (WIND_RMS_MM[i] / _rms_of_unit_noise(b, a))
        series[:, i] = lfilter(b, a, wind_force + walkers[:, i])
    return series[_RUN_IN_SAMPLES:]


def _oscillator(omega: float) -> tuple[Floats, Floats]:
    """Return the recurrence (b, a) of q'' + 2 zeta omega q' + omega^2 q = f for a force held between samples.

    The exact discretisation: zero-order hold of 1 / (s^2 + 2 zeta omega s + omega^2), for instance Astrom and
    Wittenmark, Computer-Controlled Systems, table 2.1 (citation from memory; a test sets it against the matrix
    exponential).
    """
    decay, step = DAMPING_RATIO * omega, 1.0 / RATE_HZ
    damped = omega * np.sqrt(1.0 - DAMPING_RATIO**2)
    fade, c, s = np.exp(-decay * step), np.cos(damped * step), np.sin(damped * step)
    b1 = 1.0 - fade * (c + decay / damped * s)
    b2 = fade**2 + fade * (decay / damped * s - c)
    return np.array([0.0, b1, b2]) / omega**2, np.array([1.0, -2.0 * fade * c, fade**2])


def _rms_of_unit_noise(b: Floats, a: Floats) -> float:
    """Return the stationary rms of the recurrence driven by unit white noise: the norm of its impulse response."""
    impulse = np.zeros(1 << 15)
    impulse[0] = 1.0
    return float(np.linalg.norm(lfilter(b, a, impulse)))


def _walker_forces(samples: int, seed: int) -> Floats:
    """Return modal forces of passing walkers over the modal mass, in mm/s^2, shape (n, 3).

    Everyone is a weight that moves over the deck at constant speed and swings with the pace.
    """
    random = _random(seed, _WALKERS)
    force = np.zeros((samples, ORDERS.size))
    modal_mass_kg = MASS_KG_PER_M * SPAN_M / 2.0
    arrival_s = random.exponential(3600.0 / WALKERS_PER_HOUR)
    while arrival_s < samples / RATE_HZ:
        speed_m_s, pace_hz = random.normal(1.35, 0.12), random.normal(1.9, 0.08)
        weight_n, forwards = WALKER_N * random.normal(1.0, 0.15), random.random() < 0.5
        first = int(np.ceil(arrival_s * RATE_HZ))
        since_s = np.arange(first, min(samples, int((arrival_s + SPAN_M / speed_m_s) * RATE_HZ))) / RATE_HZ - arrival_s
        x = speed_m_s * since_s if forwards else SPAN_M - speed_m_s * since_s
        load_n = weight_n * (1.0 + WALKER_SWING * np.sin(2.0 * np.pi * pace_hz * since_s))
        force[first : first + since_s.size] += (1000.0 * load_n / modal_mass_kg)[:, None] * beam_shapes(x)
        arrival_s += random.exponential(3600.0 / WALKERS_PER_HOUR)
    return force


def _random(*key: int) -> np.random.Generator:
    return np.random.Generator(np.random.PCG64(np.random.SeedSequence(key)))


def _parquet(times: NDArray[np.int64], deck: NDArray[np.float32]) -> bytes:
    """Return one shard as Parquet: ``t`` (timestamp[us, UTC]) and ``deck`` (fixed_size_list of float32)."""
    vectors = pa.FixedSizeListArray.from_arrays(pa.array(deck.reshape(-1)), CHANNELS)
    stamps = pa.array(times).cast(pa.timestamp("us", tz="UTC"))
    schema = pa.schema([pa.field("t", stamps.type, nullable=False), _field("deck", vectors.type, "mm")])
    out = pa.BufferOutputStream()
    with pq.ParquetWriter(out, schema, compression="zstd", compression_level=1, use_dictionary=False) as writer:
        writer.write_table(pa.Table.from_arrays([stamps, vectors], schema=schema), row_group_size=ROW_GROUP_SAMPLES)
    return bytes(out.getvalue())


def _field(name: str, kind: Any, unit: str) -> Any:
    return pa.field(name, kind, metadata={"unit": unit})
