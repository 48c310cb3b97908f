"""One fault of a job and its wording: spot, key, rule, value got, remedy; nearest known words; what may never be shown.

No parser, no models: the faults of YAML text, of single values and of relations between keys all take this form.
"""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass, replace
from difflib import get_close_matches

NOT_SHOWN = "a value that is not shown"

_SECRET_WORDS = (
    "secret", "password", "passwd", "passphrase", "token", "credential", "accesskey", "apikey", "privatekey",
    "sessionkey", "accountkey",
)  # fmt: skip
_SECRETS_OF_STORAGE = {"key", "keyid", "id", "user", "username", "pass", "pwd", "login", "auth"}
_SECRET_VALUE = re.compile(
    r"""://[^/?\#\s]*@                                  # user:password@ before the host
      | ://[^/:@\[\s]+:(?!\d*(?:/|$))                   # the same with a slash in the password, or without a host
      | (?<![A-Z0-9])(?:AKIA|ASIA)[0-9A-Z]{16}(?![A-Z0-9])  # an access key id
      | [?&](?:X-Amz-\w+|AWSAccessKeyId|Signature|sig|token|password|secret\w*)=
    """,
    re.VERBOSE | re.IGNORECASE,
)


@dataclass(frozen=True, order=True)
class Spot:
    """Where something stands: on a line of a file, or in an argument (counted by ``argument``), which come last.

    Lines and columns count from 1. The column keeps the faults of a line in order and is shown only where ``exact``.
    """

    argument: int
    line: int
    column: int
    name: str
    exact: bool = False

    @classmethod
    def file(cls, name: str) -> Spot:
        """Return the start of a file."""
        return cls(0, 1, 1, name)

    @classmethod
    def option(cls, name: str, number: int = 1) -> Spot:
        """Return the spot of a command-line argument; ``number`` keeps several in order."""
        return cls(number, 0, 0, name)

    def at(self, line: int, column: int, *, exact: bool = False) -> Spot:
        """Return another spot of the same file; an argument has no lines."""
        return self if self.argument else replace(self, line=line, column=column, exact=exact)

    def __str__(self) -> str:
        shown = () if self.argument else (self.line, self.column) if self.exact else (self.line,)
        return ":".join([self.name, *map(str, shown)])


@dataclass(frozen=True, order=True)
class Fault:
    """One broken rule: where, which key, the rule, the value got (if it may be shown), what to do."""

    spot: Spot
    key: str
    rule: str
    got: str = ""
    remedy: str = ""

    def __str__(self) -> str:
        text = ": ".join([str(self.spot), *([self.key] if self.key else []), self.rule])
        text += f" (got {self.got})" if self.got else ""
        return text + (f"; {self.remedy}" if self.remedy else "")


def looks_secret(path: tuple[str, ...]) -> bool:
    """Return whether a key is one that credentials are given under, so that its value must not be shown."""
    if not path:
        return False
    name = re.sub(r"[^a-z0-9]", "", path[-1].lower())
    return any(word in name for word in _SECRET_WORDS) or ("storage" in path[:-1] and name in _SECRETS_OF_STORAGE)


def holds_secret(text: str) -> bool:
    """Return whether a value looks as if it carried credentials: in a URL, in a signed query, or as a key id."""
    return _SECRET_VALUE.search(text) is not None


def nearest(word: str, known: Iterable[str], likeness: float = 0.6) -> str:
    """Return the known word that is most like this one (1 is the same), nothing if none is near."""
    by_lower = {name.lower(): name for name in known}
    found = get_close_matches(word.lower(), by_lower, n=1, cutoff=likeness)
    return by_lower[found[0]] if found else ""


def one_of(words: Iterable[str]) -> str:
    """Return "a, b or c"."""
    listed = list(words)
    return " or ".join([", ".join(listed[:-1]), listed[-1]] if len(listed) > 1 else listed)
