"""Small sound jobs to break, and what the reader of a broken one is told."""

from __future__ import annotations

import pytest

from shardfold.errors import JobInvalid
from shardfold.job import parse_job

WIDE = """\
campaign: skelbeck
source:
  location: s3://skelbeck/raw/
  layout: wide
  time: t
dossier:
  location: s3://skelbeck-results/spring/
"""
ARRAY = WIDE.replace("layout: wide", "layout: array").replace("time: t", "time: {from_name: '(\\d+)', step: 125 ms}")
DURATION = 'must be a duration: a number and a unit (ns, us, ms, s, min, h or d), such as "10 min"'
SIZE = 'must be a size: a number and a unit (B, kB, MB, GB, TB, KiB, MiB, GiB or TiB), such as "2 GiB"'
ANGLE = 'must be an angle: a number and a unit (deg or rad), such as "5 deg"'
RANK = "must be noise_edge, {energy: SHARE}, {angle: ANGLE} or a whole number, 1 or more"
BACKGROUND = "design.background={trend: true, cycles: [12.42 h, 3.6 s]}"


def faults_of(text: str, *overrides: str, endpoint: str | None = None) -> list[str]:
    """Return what the reader of a broken job is told, one line for each fault."""
    with pytest.raises(JobInvalid) as caught:
        parse_job(text, "bridge.yaml", overrides, endpoint=endpoint)
    first, *lines = str(caught.value).splitlines()
    assert lines == list(caught.value.faults)
    assert first == f"bridge.yaml: the job has {len(lines)} fault{'s' if len(lines) > 1 else ''}"
    return lines


def with_line(line: str) -> str:
    """Return the job ``WIDE`` with something more below ``source:``, from line 3 on."""
    return WIDE.replace("source:\n", f"source:\n{line}\n")
