"""What must not be printed as if it meant something: in the table, in the manifest, and by ``shardfold show``.

Each test makes the campaign that tempts to it. ``show`` is read as people read it, JSON as a strict reader does.
"""

from __future__ import annotations

import json
import re
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from campaigns import even_times, job_text, write_vector
from terminal import Answer, shardfold

from shardfold.results import Result, open_result
from shardfold.store import open_store

CHANNELS, WIDTH = 120, 20
FIGURES = ("singular_value", "rms", "energy_fraction", "energy_cumulative", "rms_at_peak", "dominant_hz")
ANGLES = (
    "angle_bound_deg", "mac_at_least", "coefficient_angle_bound_deg", "sampling_angle_deg", "north_angle_deg",
)  # fmt: skip
EXACT: dict[str, Any] = {"summary": "exact", "width": "auto"}
ROUTES: dict[str, tuple[int, dict[str, Any]]] = {
    "probe": (CHANNELS, {}),
    "identity": (36, {"summary": "whole"}),
    "exact": (36, EXACT),
}
MODE, SHARE, TOTAL, ACCURACY, MAC, SAMPLING, GROUP, VERDICT = range(8)


def field(values: Any, samples: int, channels: int = CHANNELS, noise: float = 0.0, seed: int = 4) -> np.ndarray:
    """Return (channels, samples): independent normal coefficients on orthonormal patterns, in white noise."""
    rng = np.random.Generator(np.random.PCG64(seed))
    values = np.asarray(values)
    patterns = np.linalg.qr(rng.standard_normal((channels, len(values))))[0]
    white = noise * rng.standard_normal((channels, samples))
    return np.asarray((patterns * values) @ rng.standard_normal((len(values), samples)) + white)


def refuse(constant: str) -> None:
    raise AssertionError(f"{constant} in JSON")


def strictly(text: str) -> Any:
    """Return a JSON document that holds neither NaN nor infinity."""
    return json.loads(text, parse_constant=refuse)


class Desk:
    """A campaign in a folder, its job, and what the command says of its result."""

    def __init__(self, folder: Path, matrix: np.ndarray, row_group: int = 40, **blocks: Any) -> None:
        self.folder, self.job = folder, folder / "job.yaml"
        store, times = open_store(f"{folder}/campaign"), even_times(matrix.shape[1])
        write_vector(store, matrix, times, shards=2, row_group=row_group)
        design = {"width": WIDTH, "leaf": "10 s"} | blocks.pop("design", {})
        modes = {"rank": 4, "tolerance": "5 deg"} | blocks.pop("modes", {})
        text = job_text(
            f"{folder}/campaign", f"{folder}/dossier", "vector", design=design, modes=modes,
            engine={"workers": "serial"}, **blocks,
        )  # fmt: skip
        self.job.write_text(text)

    def run(self, *arguments: str) -> Answer:
        return shardfold("run", self.job, *arguments)

    def result(self) -> Result:
        """Run the job and open what it published."""
        answer = self.run()
        assert answer.status == 0, answer.err
        return open_result(answer.out.splitlines()[-1])


def quality(result: Result) -> dict[str, Any]:
    return dict(result.manifest["quality"])


def rows(result: Result) -> list[dict[str, Any]]:
    return list(result.mode_table.to_pylist())


def shown(result: Result) -> list[list[str]]:
    """Return the cells of each mode that ``show`` prints; cells are at least two blanks apart."""
    answer = shardfold("show", result.location)
    assert answer.status == 0, answer.err
    lines = [line for line in answer.out.splitlines() if re.match(r" *\d+  ", line)]
    return [re.split(r" {2,}", line.strip()) for line in lines]


def assert_blank(result: Result, numbers: list[int], names: tuple[str, ...]) -> None:
    """Assert that some columns of some modes, counted from 1, are empty in the table and in the manifest."""
    accuracy = quality(result)["accuracy"]
    for number in numbers:
        row = rows(result)[number - 1]
        for figures in (row, accuracy[number - 1]):
            assert {name: figures[name] for name in names if figures.get(name) is not None} == {}


@pytest.mark.parametrize("reads", [1, 2])
def test_singular_values_under_the_rounding_floor_are_blank(reads: int, tmp_path: Path) -> None:
    result = Desk(tmp_path, field([1.0, 1e-2, 1e-4, 1e-11], 800), modes={"reads": reads}).result()
    assert quality(result)["modes"] == 3
    assert quality(result)["singular_values"][3] is None
    assert_blank(result, [4], (*FIGURES, *ANGLES, "peak_channel", "group", "verdict", "remedy"))
    assert shown(result)[3] == ["4", "under floor", "-", "-", "-", "-", "-", "-", "-"]
    assert "mode_04" in result.modes.column_names
    assert result.modes.column("mode_04").null_count == CHANNELS
    assert np.isfinite(np.array([c.to_numpy() for c in result.rebuild().columns[1:]])).all()
    assert "under the rounding floor and left blank: 4" in result.next_step


def test_modes_at_noise_have_no_angle_and_no_group(tmp_path: Path) -> None:
    result = Desk(tmp_path, field([3.0, 2.0], 800, noise=0.02), modes={"rank": 5}).result()
    assert [row["verdict"] for row in rows(result)[2:]] == ["at noise"] * 3
    assert_blank(result, [3, 4, 5], (*ANGLES, "group", "remedy"))
    for row in shown(result)[2:]:
        assert row[ACCURACY : VERDICT + 1] == ["-", "-", "-", "-", "at noise"]
    assert "at noise: 3-5" in result.next_step


def test_more_modes_than_samples_are_refused(tmp_path: Path) -> None:
    answer = Desk(tmp_path, field([3.0, 2.0, 1.0], 10), modes={"rank": 12}).run()
    assert answer.status == 2
    answer.says("more modes are asked for than there are samples", "at most the number of samples, 10")
    assert not list((tmp_path / "dossier").rglob("*.parquet"))


@pytest.mark.parametrize("route", ["probe", "exact"])
@pytest.mark.parametrize("samples", [12, 14])
def test_hardly_more_samples_than_modes_are_short_data_whatever_the_bounds(
    route: str, samples: int, tmp_path: Path
) -> None:
    channels, design = ROUTES[route]
    matrix = field(1 / np.arange(1.0, 37.0), samples, channels)
    result = Desk(tmp_path, matrix, design=design, modes={"rank": 12}).result()
    verdicts = {row["verdict"] for row in rows(result)}
    assert "short data" in verdicts
    assert not verdicts & {"resolved", "unresolved"}
    assert_blank(result, list(range(1, 13)), ("sampling_angle_deg", "north_angle_deg"))
    assert quality(result)["effective_samples"] is None
    assert "more measurement" in result.next_step
    assert not any("about" in (row["remedy"] or "") for row in rows(result) if row["verdict"] == "short data")


@pytest.mark.parametrize("route", ["probe", "identity", "exact"])
def test_a_table_of_zeros_is_refused(route: str, tmp_path: Path) -> None:
    channels, design = ROUTES[route]
    constant = np.repeat(np.random.Generator(np.random.PCG64(1)).standard_normal((channels, 1)) * 1e3, 400, axis=1)
    answer = Desk(tmp_path, constant, design=design).run()
    assert answer.status == 2
    answer.says("there is nothing to decompose", "every channel is constant to rounding", "modes.remove")
    assert shardfold("show", tmp_path / "dossier" / "latest").status == 2


def test_a_constant_channel_has_no_share_and_is_called_so(tmp_path: Path) -> None:
    matrix = field([3.0, 2.0, 1.0], 800, noise=0.01)
    matrix[7] = 273.15
    result = Desk(tmp_path, matrix).result()
    channel = result.channel_summary.to_pylist()[7]
    assert (channel["note"], channel["captured_fraction"]) == ("constant", None)
    assert {row["note"] for row in result.channel_summary.to_pylist()} == {"constant", ""}
    assert np.abs(np.array([result.modes.column(f"mode_0{n}")[7].as_py() for n in (1, 2, 3)])).max() < 1e-9


SHORT = {"few samples": (160, "1 s"), "too few leaves": (1600, "1 min"), "one leaf": (400, "1 min")}


@pytest.mark.parametrize("name", SHORT)
def test_a_tiny_bound_stands_beside_short_data_where_sampling_cannot_be_told(name: str, tmp_path: Path) -> None:
    samples, leaf = SHORT[name]
    matrix = field([4.0, 2.0, 1.0], samples, 36, noise=0.05)
    design = {**EXACT, "leaf": leaf}
    result = Desk(tmp_path, matrix, 8, design=design, modes={"rank": 3, "tolerance": "2 deg"}).result()
    for row, cells in zip(rows(result), shown(result), strict=True):
        assert row["angle_bound_deg"] < 0.001
        assert (cells[ACCURACY], cells[VERDICT], row["verdict"]) == ("<0.001", "short data", "short data")
        sampled = row["sampling_angle_deg"]
        assert sampled is None or sampled > 2.0
        assert cells[SAMPLING] == "-" if sampled is None else float(cells[SAMPLING].strip(">")) > 2.0
        assert row["remedy"] is not None
    assert "resolved" not in {row["verdict"] for row in rows(result)}
    assert result.next_step.startswith("0 of 3 modes are resolved")


def test_no_bound_is_said_instead_of_a_number(tmp_path: Path) -> None:
    result = Desk(tmp_path, field(np.arange(1.0, 101.0) ** -0.3, 1200)).result()
    missing = [number for number, row in enumerate(rows(result), 1) if row["angle_bound_deg"] is None]
    assert missing
    assert_blank(result, missing, ("mac_at_least",))
    for number in missing:
        assert rows(result)[number - 1]["verdict"] != "resolved"
        assert shown(result)[number - 1][ACCURACY : MAC + 1] == ["no bound", "-"]


HARD: dict[str, tuple[Any, dict[str, Any]]] = {
    "under the floor": (lambda: field([1.0, 1e-3, 1e-11], 400), {"modes": {"rank": 3}}),
    "noise": (lambda: field([0.0], 400, noise=1.0), {}),
    "no bound": (lambda: field(np.arange(1.0, 101.0) ** -0.3, 400), {}),
    "one leaf": (lambda: field([2.0, 1.0], 60), {"modes": {"rank": 2}}),
    "two samples": (lambda: field([2.0, 1.0], 2), {"modes": {"rank": 1}}),
    "one channel": (lambda: field([1.0], 400, 1), {"modes": {"rank": 1}, "design": {"width": "auto"}}),
    "constant channel": (lambda: field([2.0, 1.0], 400) * (np.arange(CHANNELS)[:, None] > 0), {}),
    "deep": (
        lambda: field(10.0 ** -np.arange(0.0, 14.0, 2.0), 800, 36),
        {"modes": {"rank": 8}, "design": EXACT},
    ),
    "kept mean": (lambda: field([2.0, 1.0], 400) + 1e6, {"modes": {"remove": []}}),
    "a share": (lambda: field([2.0, 1.0], 400), {"modes": {"rank": {"energy": 1}}}),
}


@pytest.mark.parametrize("name", HARD)
def test_json_holds_neither_nan_nor_infinity_and_tables_hold_blanks(name: str, tmp_path: Path) -> None:
    make, blocks = HARD[name]
    desk = Desk(tmp_path, make(), **blocks)
    assert strictly(shardfold("check", desk.job, "--json").out)
    ran = desk.run("--json", "--quiet")
    assert ran.status == 0, ran.err
    location = strictly(ran.out)["location"]
    assert strictly(shardfold("show", location, "--json").out)["manifest"]["quality"]
    assert strictly((Path(location) / "manifest.json").read_text())
    again = shardfold("run", desk.job, "--json")
    assert strictly(again.out)["new"] is False
    result = open_result(location)
    for file in result.manifest["files"]:
        for column in result.table(file).columns:
            if str(column.type) == "double":
                assert np.isfinite(column.drop_null().to_numpy()).all(), file
    text = shardfold("show", location).out
    assert not re.search(r"\b(nan|inf|None)\b", text, re.IGNORECASE)


def test_no_figure_in_words_is_better_than_the_bound(tmp_path: Path) -> None:
    # A bound is rounded up wherever it is printed: in the table of `show`, and where a group's remedy quotes it.
    quoted = 0
    for seed in range(4):
        (tmp_path / str(seed)).mkdir()
        matrix = field([4.0, 3.9, 2.0, 1.97, *1 / np.arange(1.0, 80.0)], 640, seed=seed)
        result = Desk(tmp_path / str(seed), matrix).result()
        for row, cells in zip(rows(result), shown(result), strict=True):
            bound = row["angle_bound_deg"]
            if bound is None or bound < 0.001:
                continue
            assert float(cells[ACCURACY]) >= bound
            assert cells[MAC] == "-" or float(cells[MAC]) <= row["mac_at_least"]
            known = re.search(r"known to ([\d.]+) deg", row["remedy"] or "")
            if known:
                quoted += 1
                assert float(known[1]) >= bound, row["remedy"]
    assert quoted


def test_every_mode_called_resolved_has_three_angles_within_the_tolerance(tmp_path: Path) -> None:
    result = Desk(tmp_path, field([4.0, 2.0, 1.0, 0.05], 4000, noise=0.02), modes={"rank": 5}).result()
    verdicts = [row["verdict"] for row in rows(result)]
    assert "resolved" in verdicts
    for row in rows(result):
        angles = [row[name] for name in ("angle_bound_deg", "coefficient_angle_bound_deg", "sampling_angle_deg")]
        within = all(angle is not None and angle <= 5.0 for angle in angles)
        assert (row["verdict"] == "resolved") == (within and row["group"] is None and row["verdict"] != "weak")
