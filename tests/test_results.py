"""A result is found by the end of its location, whatever buckets and folders above it are called."""

from __future__ import annotations

import pytest

from shardfold.results import split_location


@pytest.mark.parametrize("dossier", ["s3://results/bridge/spring", "s3://b/results/x", "/data/results/d", "/d", "d"])
def test_only_the_end_of_a_location_names_the_result(dossier: str) -> None:
    assert split_location(f"{dossier}/latest") == (dossier, "")
    assert split_location(f"{dossier}/") == (dossier, "")
    folder = "results/000012-ab12cd34/"
    for written in (f"{dossier}/{folder}", f"{dossier}/{folder}".rstrip("/")):
        assert split_location(written) == (dossier, folder)
