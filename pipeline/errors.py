"""Every error that leaves the package, grouped by what the caller should do.

::

    ShardfoldError                 70  a bug, if raised bare
    |- InputError                   2  mend the job, the arguments or the campaign, then repeat
    |  |- JobInvalid                   the job file or the arguments break a rule; carries all faults
    |  |- NothingToRead                empty match, missing bucket or folder
    |  |- DesignDiffers                the job asks for another design than the dossier was created with
    |  `- PlanRefused                  the plan breaks a limit, found before the first read
    |- ShardRefused                 3  one shard cannot be trusted; the rest goes on
    |- ServiceFailed                4  wait or mend the service, then repeat
    |  |- StorageFailed                a store did not answer, or not properly, after its retries
    |  |- VersionChanged               an object was replaced or removed after its version was noted
    |  |- AccessDenied                 credentials missing, wrong or too weak; never retried
    |  `- ClusterFailed                Ray could not be reached or lost the work
    |- RecordCorrupt                5  stored data is not what was written; needs a person
    |- WriterConflict               6  another writer changed the same shard or design differently
    `- Stopped                130/143  interrupted; safe to repeat

Nothing else lives here, and nothing here knows about storage, Ray or arrays. Ray pickles errors on their way
to the driver, so every class must survive pickling (held by a test).
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any


class ShardfoldError(Exception):
    """Base of all errors of the package.

    Parameters
    ----------
    what : str
        What went wrong, one clause.
    where : str, optional
        File, line, key, shard, channel or time.
    rule : str, optional
        The rule that was broken.
    got : str, optional
        The value that broke it.
    remedy : str, optional
        What the reader can do.
    """

    exit_status = 70

    def __init__(self, what: str, *, where: str = "", rule: str = "", got: str = "", remedy: str = "") -> None:
        super().__init__(what)
        self.what, self.where, self.rule, self.got, self.remedy = what, where, rule, got, remedy

    def __str__(self) -> str:
        return told(self.as_record())

    def __reduce__(self) -> tuple[Any, ...]:
        return (_rebuild, (type(self), self.__dict__, self.args))

    def as_record(self) -> dict[str, str]:
        """Return the parts of the message that are set, for ``--json`` and the ledger."""
        names = ("what", "where", "rule", "got", "remedy")
        return {name: getattr(self, name) for name in names if getattr(self, name)}


def told(parts: Mapping[str, str]) -> str:
    """Return the message of an error's parts (`ShardfoldError.as_record`), a line for each after the first."""
    lines = [f"{parts['where']}: {parts['what']}" if parts.get("where") else parts.get("what", "")]
    return "\n".join(lines + [f"  {label}: {parts[label]}" for label in ("rule", "got", "remedy") if parts.get(label)])


def _rebuild(kind: type[ShardfoldError], state: dict[str, Any], args: tuple[Any, ...]) -> ShardfoldError:
    error = kind.__new__(kind, *args)
    error.args = args
    error.__dict__.update(state)
    return error


class InputError(ShardfoldError):
    """The job, the arguments or the campaign break a rule that the user can mend."""

    exit_status = 2


class JobInvalid(InputError):
    """The job file or the arguments break one or more rules; ``faults`` lists them all."""

    def __init__(self, what: str, *, faults: tuple[str, ...] = (), **parts: str) -> None:
        super().__init__(what, **parts)
        self.faults = faults

    def __str__(self) -> str:
        return "\n".join([super().__str__(), *self.faults])


class NothingToRead(InputError):
    """The location does not exist or holds nothing that matches."""


class DesignDiffers(InputError):
    """The job's design is not the one the dossier was created with."""


class PlanRefused(InputError):
    """The plan breaks a limit; found from shapes before the first read."""


class ShardRefused(ShardfoldError):
    """One shard cannot be trusted. The run goes on without it and the ledger says why.

    ``rival`` names the other shard where two contradict each other, so that the one already in can stay.
    """

    exit_status = 3

    def __init__(self, what: str, *, shard: str, version: str = "", rival: str = "", **parts: str) -> None:
        parts.setdefault("where", shard)
        super().__init__(what, **parts)
        self.shard, self.version, self.rival = shard, version, rival


class ServiceFailed(ShardfoldError):
    """Storage, credentials or cluster failed after the retries of their owner."""

    exit_status = 4


class StorageFailed(ServiceFailed):
    """A store did not answer, or answered wrongly, after its retries."""


class VersionChanged(ServiceFailed):
    """An object is not, or no longer, the version that was noted. Never retried; the next run takes the new one."""


class AccessDenied(ServiceFailed):
    """Credentials are missing, wrong or too weak. Never retried."""


class ClusterFailed(ServiceFailed):
    """Ray could not be reached, or lost the work more often than allowed."""


class RecordCorrupt(ShardfoldError):
    """A stored record is not what was written: digest, length or form differ."""

    exit_status = 5


class WriterConflict(ShardfoldError):
    """Another writer changed the same shard or design differently."""

    exit_status = 6


class Stopped(ShardfoldError):
    """The run was interrupted by a signal. Repeating the command finishes the work."""

    def __init__(self, what: str, *, signal_number: int, **parts: str) -> None:
        super().__init__(what, **parts)
        self.signal_number = signal_number

    @property
    def exit_status(self) -> int:  # type: ignore[override]
        """Return 128 plus the signal number, as shells do."""
        return 128 + self.signal_number
