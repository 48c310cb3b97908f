"""Locations: what a written location means, whether one lies inside another, and which keys a pattern lists.

Text in, text out; no store is asked and no file is touched but to resolve symbolic links in a local path.
"""

from __future__ import annotations

import re
from pathlib import Path
from urllib.parse import urlsplit

from shardfold.quantities import RuleBroken

_SCHEME = re.compile(r"([A-Za-z][A-Za-z0-9+.-]*)://")
_SLIP = re.compile(r"(s3a?|gs|https?|file|memory|az|abfs)(:/?)(?=[^/]|$)", re.IGNORECASE)
_PART = re.compile(r"\*\*/|\*\*|\[[^\]]{2,}\]|\[[^\]!^]\]|.", re.DOTALL)
_PARTS = {"**/": "(?:.*/)?", "**": ".*", "*": "[^/]*", "?": "[^/]"}
_S3_LIKE = {"s3a", "s3n"}


def is_url(location: str) -> bool:
    """Return whether a location names a scheme; all else is a local path."""
    return _SCHEME.match(location) is not None


def is_local(location: str) -> bool:
    """Return whether a location is on the local file system."""
    return not is_url(location)


def resolve(written: str, folder: Path) -> str:
    """Return a location in its one form: S3 URLs without a closing slash, local paths absolute.

    Parameters
    ----------
    written : str
        As the job has it.
    folder : Path
        Folder of the job file; relative local paths start there.

    Raises
    ------
    RuleBroken
        If it is empty, a misspelt URL, a pattern, or holds something that is not expanded here.
    """
    text = written.strip()
    if not text or not text.isprintable():
        raise RuleBroken("must name a location", "write s3://bucket/folder/ or a local path")
    if "${" in text or "{{" in text:
        raise RuleBroken("must be written out: nothing is expanded in a job", "use --set KEY=VALUE for what changes")
    if "*" in text:
        raise RuleBroken("must be a folder, not a pattern", "patterns belong into source.match")
    if slip := _SLIP.match(text):
        path = text[slip.end() :]
        fixed = f"/{path}" if slip[1].lower() == "file" else f"{slip[1].lower()}://{path}"
        raise RuleBroken("must have two slashes after the colon of a URL", f'write "{fixed}"')
    return _resolved_url(text) if is_url(text) else _resolved_path(text, folder)


def inside(inner: str, outer: str) -> str | None:
    """Return the key of one location within another ("" if they are the same), ``None`` if it is not inside."""
    below, above = _steps(inner), _steps(outer)
    return "/".join(below[len(above) :]) if below[: len(above)] == above else None


def pattern_regex(pattern: str) -> re.Pattern[str]:
    """Return the regular expression of a pattern over keys, to be matched in full.

    ``**/`` is any depth of folders, none included; ``*``, ``?``, ``[abc]`` and ``[!abc]`` stay within a folder.
    """
    return re.compile("".join(_regex_part(part) for part in _PART.findall(pattern)), re.DOTALL)


def _steps(location: str) -> list[str]:
    scheme, colon, path = location.rpartition("://")
    return [scheme + colon, *(step for step in path.split("/") if step)]


def _regex_part(part: str) -> str:
    if part in _PARTS:
        return _PARTS[part]
    if len(part) == 1:
        return re.escape(part)
    body = re.sub(r"([\\\[&~|])", r"\\\1", part[1:-1]).replace("--", r"\-")
    return f"[^{body[1:]}/]" if body[0] in "!^" else f"[{body}]"


def _resolved_path(text: str, folder: Path) -> str:
    try:
        return str((folder / Path(text).expanduser()).resolve())
    except (OSError, RuntimeError, ValueError) as error:
        raise RuleBroken(f"must be a path that can be followed ({error})") from None


def _resolved_url(text: str) -> str:
    scheme, rest = text.split("://", 1)
    scheme = scheme.lower()
    if scheme in _S3_LIKE:
        raise RuleBroken("must be one of the known kinds of location", f'write "s3://{rest}"')
    if scheme == "file":
        if not rest.startswith("/"):
            raise RuleBroken("must be an absolute path after file://", "write the path alone")
        return str(Path(rest).resolve())
    if scheme == "s3" and not re.match(r"[A-Za-z0-9][\w.-]{2,62}(/|$)", rest):
        raise RuleBroken("must name a bucket of 3 to 63 characters after s3://", "write s3://bucket/folder/")
    return f"{scheme}://{rest.rstrip('/') if scheme == 's3' else rest}"


def parse_endpoint(value: object) -> str:
    """Return the address of an S3 service in its one form: http or https, host, perhaps a port, nothing more.

    Raises
    ------
    RuleBroken
        If it is anything else.
    """
    rule = "must be the address of an S3 service: http:// or https://, a host, perhaps a port"
    text = value.strip() if isinstance(value, str) else ""
    if not re.match(r"https?://", text, re.IGNORECASE):
        bare = re.fullmatch(r"[\w.-]+(:\d+)?", text) is not None
        raise RuleBroken(rule, f'write "http://{text}"' if bare else 'such as "http://127.0.0.1:9000"')
    try:
        parts = urlsplit(text)
        port = f":{parts.port}" if parts.port is not None else ""
    except ValueError:
        raise RuleBroken(rule, "the port must be a number up to 65535") from None
    if parts.path.strip("/") or parts.query or parts.fragment:
        raise RuleBroken(rule, "leave out what follows the host; bucket and folder belong into location")
    if not parts.hostname:
        raise RuleBroken(rule, "the host is missing")
    host = f"[{parts.hostname}]" if ":" in parts.hostname else parts.hostname
    return f"{parts.scheme.lower()}://{host}{port}"
