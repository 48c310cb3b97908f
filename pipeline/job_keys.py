"""Which keys a job file may hold, read off the models: paths, the keys below each, and values that are listed words.

So that messages, the blank sections of a file and the documentation cannot fall behind the models.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any, Literal, get_args, get_origin

from pydantic import BaseModel

from shardfold.job_faults import nearest, one_of

Path = tuple[str, ...]


@dataclass(frozen=True)
class Key:
    """What is known of one key: the keys below it, and its values where these are listed words."""

    below: tuple[str, ...] = ()
    words: tuple[str, ...] = ()


def keys_of(model: type[BaseModel], hidden: type[BaseModel]) -> dict[Path, Key]:
    """Return every key of a model, depth first, the root as the empty path.

    Parameters
    ----------
    model : type
        The settings of a whole job.
    hidden : type
        A model that stands for a plain value in the file, so that its keys are none of the file's.
    """
    return {(): Key(_names(model)), **dict(_walk(model, (), hidden))}


def meant(path: Path, keys: dict[Path, Key]) -> str:
    """Return which known key may have been meant by an unknown one, as a remedy."""
    siblings = keys[path[:-1]].below if path[:-1] in keys else ()
    word, colon, value = path[-1].partition(":")
    if colon and word in siblings:
        return f"a blank must follow the colon: {word}: {value}"
    elsewhere = [".".join(known) for known in keys if known[-1:] == path[-1:]]
    near = nearest(path[-1], siblings)
    if not elsewhere and near:
        elsewhere = [".".join((*path[:-1], near))]
    last = nearest(path[-1], {known[-1] for known in keys if known}, likeness=0.8)
    elsewhere = elsewhere or [".".join(known) for known in keys if known[-1:] == (last,)]
    if elsewhere:
        return f"did you mean {one_of(elsewhere)}?"
    return f"known here: {', '.join(siblings)}" if siblings else ""


def _walk(model: type[BaseModel], path: Path, hidden: type[BaseModel]) -> Iterator[tuple[Path, Key]]:
    for name, annotation in zip(_names(model), _annotations(model), strict=True):
        inner = [part for part in _models(annotation) if part is not hidden]
        below = tuple(dict.fromkeys(key for part in inner for key in _names(part)))
        yield (*path, name), Key(below, _words(annotation))
        for part in inner:
            yield from _walk(part, (*path, name), hidden)


def _names(model: type[BaseModel]) -> tuple[str, ...]:
    return tuple(field.alias or name for name, field in model.model_fields.items())


def _annotations(model: type[BaseModel]) -> list[Any]:
    return [field.annotation for field in model.model_fields.values()]


def _models(annotation: Any) -> list[type[BaseModel]]:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return [annotation]
    return [model for part in get_args(annotation) for model in _models(part)]


def _words(annotation: Any) -> tuple[str, ...]:
    """Return the listed words of an annotation, wherever they stand in it."""
    if get_origin(annotation) is Literal:
        return tuple(str(word).lower() if isinstance(word, bool) else str(word) for word in get_args(annotation))
    return tuple(word for part in get_args(annotation) for word in _words(part))
