"""The commented jobs in ``configs/``: sound as they are and with every line turned on, and truthful about defaults."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
import yaml

from shardfold.errors import JobInvalid
from shardfold.job import Job, known_keys, load_job, parse_job

FOLDER = Path(__file__).resolve().parents[1] / "configs"
FILES = sorted(FOLDER.glob("*.yaml"))
COMMENTED = re.compile(r"^( *)# (\w+: .*|\w+:)(?= +# \[)")
LINE = re.compile(r"^( *)(?:# )?(\w+):(?: [^#]*)? # \[(.*?)\] (\S.*)$")
WORDS = {"none": "null", "all": "null"}
APART = {  # lines that only another layout or place can have, so that they stand in another file
    "wide": {"source.values", "source.orient", "source.time.from_name", "source.time.step", "source.time.start"},
    "vector": {"source.orient", "source.time.from_name", "source.time.step", "source.time.start", "engine.address"},
    "array": {"source.values", "source.time.start"},
}
CHOICES = {"source.time", "modes.rank"}  # one of several kinds of value, some of which hold keys
NEEDS = {  # what a default needs of other keys: a table for another scale, declared terms to be removed
    "design.scale": {},
    "design.background.trend": {"modes.remove": "[mean]"},
    "design.background.cycles": {"modes.remove": "[mean]"},
}
STORAGE = re.compile(r"(source|dossier)\.(storage(\.\w+)?|shared)")


def turned_on(text: str) -> str:
    """Return a job with every line that is commented out turned on."""
    return "\n".join(COMMENTED.sub(r"\1\2", line) for line in text.splitlines()) + "\n"


def documented(text: str) -> dict[str, tuple[str, str]]:
    """Return (what stands in brackets, what is said) of every key, by dotted key."""
    found, path = {}, []
    for line in turned_on(text).splitlines():
        key = re.match(r"^( *)(\w+):", line)
        if key is None:
            continue
        path = [*path[: len(key[1]) // 2], key[2]]
        if said := LINE.match(line):
            found[".".join(path)] = (said[3], said[4])
    return found


def without(text: str, dotted: str) -> str:
    """Return a job without one key."""
    values = yaml.safe_load(text)
    *sections, last = dotted.split(".")
    inner = values
    for section in sections:
        inner = inner[section] or {}
    inner.pop(last, None)
    return yaml.safe_dump(values)


def same_settings(one: Job, other: Job) -> bool:
    """Return whether two jobs mean the same."""
    blank = {"text_digest": "", "overrides": (), "path": None}
    return one.model_copy(update=blank) == other.model_copy(update=blank)


@pytest.fixture(params=FILES, ids=[path.stem for path in FILES])
def config(request):
    """One of the files."""
    return request.param


def test_there_is_one_file_for_each_layout():
    """Named after it."""
    assert [path.stem for path in FILES] == ["array", "vector", "wide"]
    assert all(load_job(path).source.layout == path.stem for path in FILES)


def test_a_file_is_sound_as_it_is_and_with_every_line_turned_on(config):
    """What is commented out may be turned on in any mix; here all of it."""
    text = config.read_text()
    assert turned_on(text).count(" # [") == text.count("# [")
    on, off = parse_job(turned_on(text), config.name, path=config), load_job(config)
    assert (on.campaign, on.design, on.modes, on.engine) == (off.campaign, off.design, off.modes, off.engine)


def test_every_key_is_shown(config):
    """But for those of another layout or of another kind of place; together the files show all."""
    shown = set(documented(config.read_text()))
    leaves = {key for key in known_keys() if not any(other.startswith(f"{key}.") for other in known_keys())}
    leaves = (leaves | CHOICES) - {"modes.rank.energy", "modes.rank.angle"}
    missing = {key for key in leaves - shown if not STORAGE.fullmatch(key)} - APART[config.stem]
    assert not missing
    assert shown <= set(known_keys())
    everything = " ".join(path.read_text() for path in FILES)
    assert [key for key in leaves if not re.search(rf"\b{key.split('.')[-1]}: ", everything)] == []


def test_what_stands_in_brackets_is_true(config):
    """A required key cannot be left out; for all others leaving out and writing the default are the same."""
    text = turned_on(config.read_text())
    for key, (default, said) in documented(text).items():
        assert len(said) > 10, key
        rest = without(text, key)
        if default == "required":
            with pytest.raises(JobInvalid, match=rf"{key}: is needed|source.time: must be the name"):
                parse_job(rest, "rest")
        else:
            needs = [f"{other}={value}" for other, value in NEEDS.get(key, {"design.scale": "none"}).items()]
            written = f"{key}={default if key == 'design.scale' else WORDS.get(default, default)}"
            left_out, spelled = parse_job(rest, "x", needs), parse_job(rest, "x", [*needs, written])
            assert same_settings(left_out, spelled), key


def test_the_files_hold_to_what_they_preach(config):
    """No credential, and no line wider than a screen."""
    text = config.read_text()
    assert max(map(len, text.splitlines())) <= 120
    assert not re.search(r"(?i)(secret|password|token)\w*:|://[^/\s]*@", text)
