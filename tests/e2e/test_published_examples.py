"""Published worked examples of principal components come out digit by digit through the pipeline on object storage.

No data set has times, so samples are known by shard and row. Sources stand beside the figures; [M] marks one quoted
from memory and confirmed by computing.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.csv as pa_csv
import pytest
from campaigns import Found, job_text, put_table, run_job, write_array, write_vector
from sklearn.datasets import load_digits, load_iris

from shardfold.store import Store, open_store

US_ARRESTS = Path(__file__).parents[1] / "data" / "us_arrests.csv"
COMMENT_LINES = 3


@pytest.fixture
def campaign(folder: Any) -> Store:
    return open_store(f"{folder.location}/campaign", folder.endpoint)


def run(folder: Any, layout: str, rank: int, *, design: dict[str, Any] | None = None, **source: Any) -> Found:
    blocks = {"source": {"time": "none", **source}, "modes": {"rank": rank}, "design": design or {}}
    text = job_text(f"{folder.location}/campaign", f"{folder.location}/dossier", layout, folder.endpoint, **blocks)
    return run_job(text)


def test_us_arrests_with_a_scale_per_channel(folder: Any, campaign: Store) -> None:
    # James, Witten, Hastie, Tibshirani, An Introduction to Statistical Learning, lab 10.4 (2nd edition 12.5.1).
    table = pa_csv.read_csv(US_ARRESTS, pa_csv.ReadOptions(skip_rows=COMMENT_LINES)).drop_columns(["state"])
    deviations = [float(np.std(column.to_numpy(), ddof=1)) for column in table.columns]
    channels = {"channel": pa.array(table.column_names), "scale": pa.array(deviations)}
    assert [str(kind) for kind in table.schema.types] == ["double", "int64", "int64", "double"]
    put_table(open_store(folder.location, folder.endpoint), "channels.parquet", channels)
    for number, start in enumerate(range(0, 50, 17)):
        part = table.slice(start, 17)
        put_table(campaign, f"states-{number}.parquet", dict(zip(part.column_names, part.columns, strict=True)))
    found = run(folder, "wide", 4, design={"scale": "table"}, channels={"table": f"{folder.location}/channels.parquet"})
    assert found.result.modes.column("channel").to_pylist() == ["murder", "assault", "urban", "rape"]
    shares = [0.62006039, 0.24744129, 0.08914080, 0.04335752]
    np.testing.assert_allclose(found.column("energy_fraction"), shares, atol=1e-8)
    np.testing.assert_allclose(found.values / np.sqrt(49), [1.5748783, 0.9948694, 0.5971291, 0.4164494], atol=1e-7)
    # Modes stand in the channel's unit; the published loadings are of scaled channels.
    loadings = found.modes[:, 0] / deviations
    np.testing.assert_allclose(loadings, [0.5358995, 0.5831836, 0.2781909, 0.5434321], atol=1e-7)
    matrix = np.array([column.to_numpy() for column in table.columns])
    np.testing.assert_allclose(found.mean + found.modes @ found.coefficients, matrix, rtol=1e-12)
    np.testing.assert_allclose(found.result.channel_summary.column("std").to_numpy(), deviations, rtol=1e-13)


def test_iris(folder: Any, campaign: Store) -> None:
    # R, prcomp(iris[1:4]), and the documentation of scikit-learn [M]. The data are those of scikit-learn since 0.20.
    matrix = load_iris().data.T
    write_vector(campaign, matrix, shards=5, row_group=11)
    found = run(folder, "vector", 4)
    np.testing.assert_allclose(
        found.column("energy_fraction"), [0.92461872, 0.05306648, 0.01710261, 0.00521218], atol=1e-8
    )
    np.testing.assert_allclose(found.values / np.sqrt(149), [2.0562689, 0.4926162, 0.2796596, 0.1543862], atol=1e-7)
    np.testing.assert_allclose(found.mean + found.modes @ found.coefficients, matrix, atol=1e-12)


@pytest.mark.parametrize("orient", ["samples_by_channels", "channels_by_samples"])
def test_digits_with_channels_that_never_vary(folder: Any, campaign: Store, orient: str) -> None:
    # Explained variance ratios as scikit-learn prints them for its digits [M]; 1797 images of 64 pixels, as bytes.
    matrix = load_digits().data.T.astype(np.uint8)
    constant = matrix.min(axis=1) == matrix.max(axis=1)
    assert constant.sum() == 3
    write_array(campaign, matrix, orient=orient, shards=4)
    found = run(folder, "array", 6, orient=orient)
    shares = [0.14890594, 0.13618771, 0.11794594, 0.08409979, 0.05782415, 0.0491691]
    np.testing.assert_allclose(found.column("energy_fraction"), shares, atol=1e-8)
    assert np.abs(found.modes[constant]).max() < 1e-14
    summary = found.result.channel_summary
    assert [note == "constant" for note in summary.column("note").to_pylist()] == constant.tolist()
    share = summary.column("captured_fraction")
    assert [value is None for value in share.to_pylist()] == constant.tolist()
    varying = matrix[~constant] - matrix[~constant].mean(axis=1, keepdims=True)
    missed = varying - (found.modes @ found.coefficients)[~constant]
    captured = 1 - (missed**2).sum(axis=1) / (varying**2).sum(axis=1)
    np.testing.assert_allclose(share.to_numpy()[~constant], captured, atol=1e-12)
