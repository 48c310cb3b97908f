"""Every object key of a dossier is built and parsed here, and nowhere else.

::

    design.json                           what is fixed for the dossier's life
    channels/0001.parquet                 the channel table, versioned, append-only
    probes/01.npy                         the frozen probe of each read
    leaves/01/p000000000001234/NAME.cell  read number, leaf, digest of the cell's inputs
    tree/01/NAME.sum                      sums of leaves, named by what they sum
    ledger/000000000012.json              numbered commits; the highest is the truth
    results/000012-ab12cd34/              ledger number and first digits of the result id
"""

from __future__ import annotations

import re

DESIGN = "design.json"
LEAVES, TREE, LEDGER, RESULTS = "leaves/", "tree/", "ledger/", "results/"
MANIFEST = "manifest.json"

_COMMIT = re.compile(r"^ledger/(\d{12})\.json$")
_CELL = re.compile(r"^leaves/(\d{2})/([pm])(\d{15})/([0-9a-f]{40})\.cell$")
_NODE = re.compile(r"^tree/(\d{2})/([0-9a-f]{40})\.sum$")
_MANIFEST = re.compile(r"^results/(\d{6,})-([0-9a-f]{8})/manifest\.json$")


def channels_key(version: int) -> str:
    """Return the key of a version of the channel table."""
    return f"channels/{version:04d}.parquet"


def probe_key(read: int) -> str:
    """Return the key of the frozen probe of a read (1, 2, ...)."""
    return f"probes/{read:02d}.npy"


def cell_key(read: int, leaf: int, name: str) -> str:
    """Return the key of a cell."""
    return f"{LEAVES}{read:02d}/{'m' if leaf < 0 else 'p'}{abs(leaf):015d}/{name}.cell"


def parse_cell(key: str) -> tuple[int, int, str] | None:
    """Return (read, leaf, name) of a cell's key, or ``None`` for any other key."""
    found = _CELL.match(key)
    if found is None:
        return None
    return int(found[1]), int(found[3]) * (-1 if found[2] == "m" else 1), found[4]


def node_key(read: int, name: str) -> str:
    """Return the key of a sum of leaves."""
    return f"{TREE}{read:02d}/{name}.sum"


def parse_node(key: str) -> tuple[int, str] | None:
    """Return (read, name) of the key of a sum, or ``None`` for any other key."""
    found = _NODE.match(key)
    return None if found is None else (int(found[1]), found[2])


def commit_key(number: int) -> str:
    """Return the key of a ledger commit."""
    return f"{LEDGER}{number:012d}.json"


def parse_commit(key: str) -> int | None:
    """Return the number of a ledger commit's key, or ``None`` for any other key."""
    found = _COMMIT.match(key)
    return None if found is None else int(found[1])


def result_prefix(number: int, result_id: str) -> str:
    """Return the folder of a result, with a closing slash."""
    return f"{RESULTS}{number:06d}-{result_id[:8]}/"


def parse_manifest(key: str) -> tuple[int, str] | None:
    """Return (ledger number, folder) of a manifest's key; a folder without one is no result."""
    found = _MANIFEST.match(key)
    return None if found is None else (int(found[1]), key[: -len(MANIFEST)])


def part_name(index: int) -> str:
    """Return the name, within a result, of one part of the coefficients."""
    return f"coefficients/part-{index:06d}.parquet"
