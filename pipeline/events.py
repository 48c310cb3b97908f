"""What a run tells whoever listens: frozen records, one kind per turn of the story.

Only values live here. Nothing here prints, counts or knows who listens.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TypeAlias


@dataclass(frozen=True)
class Found:
    """The campaign has been listed: shards that can be read, younger ones left for later, refused ones."""

    shards: int
    unsettled: int
    refused: int


@dataclass(frozen=True)
class Noted:
    """Something the user should know that is not a fault."""

    text: str


@dataclass(frozen=True)
class StageStarted:
    """A stage of the run begins with so many tasks; ``bytes_to_read`` is what it will read of the campaign."""

    stage: str
    tasks: int
    bytes_to_read: int = 0
    shards: int = 0


@dataclass(frozen=True)
class TaskDone:
    """One task of the current stage is finished; ``shards`` are those whose last piece it held."""

    stage: str
    bytes_read: int = 0
    shards: int = 0


@dataclass(frozen=True)
class StageDone:
    """The current stage is finished."""

    stage: str


@dataclass(frozen=True)
class Refused:
    """A shard was refused; ``standing`` if an earlier run refused the same version for the same reason.

    The first line of ``message`` says what is wrong; rule, value and remedy follow, a line each.
    """

    shard: str
    message: str
    standing: bool


@dataclass(frozen=True)
class Committed:
    """The ledger grew by one commit."""

    number: int
    leaves: int
    shards: int


@dataclass(frozen=True)
class Published:
    """A result exists: its manifest has been written, or was there before."""

    location: str
    new: bool


Event: TypeAlias = Found | Noted | StageStarted | TaskDone | StageDone | Refused | Committed | Published
Listener: TypeAlias = Callable[[Event], None]
