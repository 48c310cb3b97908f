"""The demo campaign holds what it promises, seen with plain NumPy only: no sketch, no run, no reader of ours."""

from __future__ import annotations

import io
from datetime import UTC, datetime

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from scipy.signal import cont2discrete, welch

from shardfold import tarnmoor
from shardfold.channels import read_table
from shardfold.job import parse_job


class Shelf(dict[str, bytes]):
    """A store that is a dictionary."""

    def put(self, key: str, data: bytes) -> None:
        """Keep the bytes; the demo never writes a key twice."""
        assert key not in self
        self[key] = data


def deck_of(data: bytes) -> np.ndarray:
    """Return the values of one shard, samples by points, in float64."""
    column = pq.read_table(io.BytesIO(data)).column("deck").combine_chunks()
    return column.values.to_numpy().reshape(-1, tarnmoor.CHANNELS).astype(np.float64)


@pytest.fixture(scope="module")
def whole() -> tuple[Shelf, tarnmoor.Truth]:
    """Write the full campaign once."""
    shelf = Shelf()
    return shelf, tarnmoor.write_campaign(shelf)


@pytest.fixture(scope="module")
def found(whole: tuple[Shelf, tarnmoor.Truth]) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return mean squares, patterns and dominant frequencies of the full campaign, from the covariance in float64."""
    shelf, truth = whole
    mean = sum(deck_of(data).sum(axis=0) for data in shelf.values()) / truth.samples
    covariance = np.zeros((tarnmoor.CHANNELS, tarnmoor.CHANNELS))
    for data in shelf.values():
        block = deck_of(data) - mean
        covariance += block.T @ block / truth.samples
    values, vectors = np.linalg.eigh(covariance)
    modes = vectors[:, ::-1][:, :5]
    series = np.concatenate([(deck_of(data) - mean) @ modes for data in shelf.values()])
    hz, power = welch(series, tarnmoor.RATE_HZ, nperseg=4096, axis=0, detrend=False)
    return values[::-1], modes, hz[np.argmax(power, axis=0)]


def test_beam_shapes_are_orthogonal_at_the_points_and_parabola_is_nearly_the_first():
    """Midpoint sines: DST-II. Parabola against sin(pi s): MAC = 960 / pi^6, by two integrals."""
    x = tarnmoor.positions()
    shapes = tarnmoor.beam_shapes(x)
    np.testing.assert_allclose(shapes.T @ shapes, np.eye(3) * tarnmoor.CHANNELS / 2, atol=1e-10)
    parabola = tarnmoor._bow_shape(x)
    mac = (parabola @ shapes[:, 0]) ** 2 / (parabola @ parabola * (shapes[:, 0] @ shapes[:, 0]))
    assert mac == pytest.approx(960 / np.pi**6, abs=1e-5)


@pytest.mark.parametrize("hz", tarnmoor.natural_hz())
def test_oscillator_is_the_exact_discretisation(hz: float):
    """Against SciPy's zero-order hold, which goes through the matrix exponential."""
    omega = 2 * np.pi * hz
    system = ([1.0], [1.0, 2 * tarnmoor.DAMPING_RATIO * omega, omega**2])
    b, a, _ = cont2discrete(system, 1 / tarnmoor.RATE_HZ, method="zoh")
    ours_b, ours_a = tarnmoor._oscillator(omega)
    np.testing.assert_allclose(ours_b, np.ravel(b), rtol=1e-11, atol=1e-15)
    np.testing.assert_allclose(ours_a, a, rtol=1e-12)


def test_frequencies_are_one_four_nine_and_well_below_nyquist():
    """Simply supported Euler-Bernoulli beam: frequencies go with m squared."""
    hz = tarnmoor.natural_hz()
    np.testing.assert_allclose(hz / hz[0], [1, 4, 9])
    assert hz[-1] < 0.75 * tarnmoor.RATE_HZ / 2


def test_shards_have_the_vector_layout(whole: tuple[Shelf, tarnmoor.Truth]):
    """Twelve quarter-hours, one after the other without a hole, in the promised Parquet types."""
    shelf, truth = whole
    assert tuple(shelf) == truth.keys
    assert tuple(sorted(shelf)) == truth.keys
    assert truth.keys[0] == "2031/tarnmoor-20310412T0600.parquet"
    assert truth.keys[-1] == "2031/tarnmoor-20310412T0845.parquet"
    times = np.concatenate([pq.read_table(io.BytesIO(data)).column("t").cast(pa.int64()) for data in shelf.values()])
    assert times.size == truth.samples == 86_400
    assert times[0] == datetime(2031, 4, 12, 6, tzinfo=UTC).timestamp() * 1e6
    assert set(np.diff(times)) == {125_000}
    for data in shelf.values():
        footer = pq.ParquetFile(io.BytesIO(data))
        assert footer.schema_arrow.field("t").type == pa.timestamp("us", tz="UTC")
        assert footer.schema_arrow.field("deck").type == pa.list_(pa.float32(), 640)
        assert [footer.metadata.row_group(i).num_rows for i in range(3)] == [2400, 2400, 2400]
        assert footer.metadata.row_group(0).column(1).compression == "ZSTD"


def test_a_shorter_campaign_is_the_start_of_the_full_one(whole: tuple[Shelf, tarnmoor.Truth]):
    """Same seed, same bytes; another seed, other bytes."""
    shelf, truth = whole
    short, other = Shelf(), Shelf()
    tarnmoor.write_campaign(short, shards=2)
    tarnmoor.write_campaign(other, shards=1, seed=1)
    assert short == {key: shelf[key] for key in truth.keys[:2]}
    assert other[truth.keys[0]] != shelf[truth.keys[0]]


@pytest.mark.parametrize("shards", [0, 13])
def test_number_of_shards_has_bounds(shards: int):
    """The refusal names both bounds and the value."""
    with pytest.raises(ValueError, match=f"between 1 and 12, got {shards}"):
        tarnmoor.write_campaign(Shelf(), shards=shards)


def test_full_campaign_shows_the_beam(found: tuple[np.ndarray, np.ndarray, np.ndarray]):
    """Modes of largest variance match bending shapes where natural modes are lightly damped and of distinct size.

    Feeny and Kappagantu, JSV 211 (1998) 607. The thermal bow turns the first shape by less than 0.1 degree (MAC above
    1 - 3e-6), as the module says; frequencies are right to one line of a 4096-sample spectrum.
    """
    _, modes, hz = found
    rows = tarnmoor.how_close(modes[:, :3], hz[:3])
    assert [(row.mode, row.shape) for row in rows] == [(1, 1), (2, 2), (3, 3)]
    assert rows[0].mac > np.cos(np.radians(0.1)) ** 2
    assert min(row.mac for row in rows) > 0.9999
    for row in rows:
        assert row.found_hz == pytest.approx(row.beam_hz, abs=2 * tarnmoor.RATE_HZ / 4096, rel=0.005)
        assert row.ratio == pytest.approx(row.beam_ratio, rel=0.02)


def test_full_campaign_is_ordered_and_the_rest_is_weak(found: tuple[np.ndarray, np.ndarray, np.ndarray]):
    """Each mode is well below the one before; rms is what was built in; the fourth is the bow's rest, then noise."""
    values, modes, _ = found
    assert values[0] > 5 * values[1] > 25 * values[2]
    rms = np.sqrt(values[:3] / (tarnmoor.CHANNELS / 2))
    np.testing.assert_allclose(rms, tarnmoor.WIND_RMS_MM, rtol=0.1)
    noise = (tarnmoor.NOISE_MM**2 + tarnmoor.RESOLUTION_MM**2 / 12) * (1 + np.sqrt(640 / 86_400)) ** 2
    assert values[4] == pytest.approx(noise, rel=0.02)  # Marchenko-Pastur edge: from here on, noise
    assert 2 * noise < values[3] < 1e-3 * values[2]
    fifth_sine = np.sin(5 * np.pi * tarnmoor.positions() / tarnmoor.SPAN_M)
    assert (modes[:, 3] @ fifth_sine) ** 2 / (tarnmoor.CHANNELS / 2) > 0.8


def test_thermal_bow_is_a_small_part_of_the_first_mode():
    """Two per cent of its energy, and slow: all of it below a hundredth of the first natural frequency."""
    bow = tarnmoor._bow_series(tarnmoor.SHARDS * tarnmoor.SHARD_SAMPLES)
    assert 0.01 < np.var(bow) / tarnmoor.WIND_RMS_MM[0] ** 2 < 0.03
    power = np.abs(np.fft.rfft((bow - bow.mean()) * np.hanning(bow.size))) ** 2
    slow = np.fft.rfftfreq(bow.size, 1 / tarnmoor.RATE_HZ) < 0.01 * tarnmoor.FIRST_HZ
    assert power[slow].sum() > 0.999 * power.sum()


def test_half_an_hour_is_enough_for_the_shapes(whole: tuple[Shelf, tarnmoor.Truth]):
    """Singular value decomposition of every fourth sample of two shards, as a reader with NumPy would do it."""
    shelf, truth = whole
    deck = np.concatenate([deck_of(shelf[key])[::4] for key in truth.keys[:2]])
    _, _, modes = np.linalg.svd(deck - deck.mean(axis=0), full_matrices=False)
    rows = tarnmoor.how_close(modes[:3].T, np.full(3, np.nan))
    assert [row.shape for row in rows] == [1, 2, 3]
    assert min(row.mac for row in rows) > 0.99


def test_closeness_sees_order_sign_and_strangers():
    """Rows follow the modes as given; sign and scale do not matter; the ratio hangs on the mode of the first shape."""
    shapes = tarnmoor.beam_shapes(tarnmoor.positions())
    fourth = np.sin(4 * np.pi * tarnmoor.positions() / tarnmoor.SPAN_M)
    modes = np.column_stack([-3.0 * shapes[:, 1], shapes[:, 0] + shapes[:, 1] / 3, fourth])
    rows = tarnmoor.how_close(modes, np.array([1.2, 0.3, 3.0]))
    assert [row.shape for row in rows[:2]] == [2, 1]
    assert rows[0].mac == pytest.approx(1.0)
    assert rows[1].mac == pytest.approx(0.9)  # |a|^2 : |a + b/3|^2 of orthogonal equals is 1 : 10/9
    assert rows[2].mac < 1e-20
    assert [row.ratio for row in rows] == pytest.approx([4.0, 1.0, 10.0])
    assert [row.beam_ratio for row in rows[:2]] == [4, 1]


def test_closeness_has_no_ratio_without_the_first_shape():
    """No mode matches the first shape, or its frequency is unknown: not a number, never a wrong number."""
    shapes = tarnmoor.beam_shapes(tarnmoor.positions())
    assert np.isnan(tarnmoor.how_close(shapes[:, 1:], np.array([1.28, 2.88]))[0].ratio)
    assert np.isnan(tarnmoor.how_close(shapes, np.array([np.nan, 1.28, 2.88]))[1].ratio)


def test_closeness_refuses_what_does_not_fit():
    """Modes of another campaign are refused with both shapes."""
    with pytest.raises(ValueError, match=r"shape \(640, r\).*got \(8, 3\) and \(3,\)"):
        tarnmoor.how_close(np.ones((8, 3)), np.ones(3))


def test_channel_table_names_every_point():
    """One row per point, in the order of the vectors, with unit and position, as the package reads it."""
    table = read_table(tarnmoor.channel_table(), "deck.parquet")
    assert table.names == tarnmoor.channel_names()
    assert (table.names[0], table.names[639]) == ("deck_000", "deck_639")
    assert set(table.unit) == {"mm"}
    np.testing.assert_array_equal(table.positions["x_m"], tarnmoor.positions())


def test_job_is_sound_and_only_s3_locations_get_the_endpoint():
    """Read by the package itself; awkward names survive; a local dossier needs no endpoint."""
    text = tarnmoor.job_text("s3://moor/a: b#1/", "/tmp/it's here", "http://127.0.0.1:9", "deck.parquet")
    settings = parse_job(text, "job.yaml")
    assert settings.source.location.rstrip("/") == "s3://moor/a: b#1"
    assert settings.source.storage.endpoint == "http://127.0.0.1:9"
    assert settings.dossier.location == "/tmp/it's here"
    assert settings.dossier.storage.endpoint is None
    assert (settings.source.layout, settings.source.values, settings.source.settle_ns) == ("vector", "deck", 0)
    assert settings.modes.rank == 3
    unnamed = parse_job(tarnmoor.job_text("s3://moor/c/", "s3://moor/d/", None, "deck.parquet"), "job.yaml")
    assert unnamed.source.storage.endpoint is None
