"""YAML that cannot be read, or that reads otherwise than it was meant: line, column and a way out."""

from __future__ import annotations

import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from job_texts import WIDE, faults_of, with_line

from shardfold.errors import JobInvalid
from shardfold.job import known_keys, parse_job

SIGN = "a value that starts with {} needs quotes: the sign has a meaning of its own in YAML; write {}"
INNER = "and put values that hold , [ ] { } or # in quotes"
OPEN_LIST = f"the list that opens with [ here is not closed; close it with ], {INNER}"
OPEN_MAPPING = f"the mapping that opens with {{ here is not closed; close it with }}, {INNER}"
QUOTED = "text follows after a closed quote or bracket; put the whole value in one pair of quotes"


@pytest.mark.parametrize(
    ("line", "told"),
    [
        ("  match: **/*.parquet", "3:10: " + SIGN.format("*", 'match: "**/*.parquet"')),
        ("  match: *.npy  # all", "3:10: " + SIGN.format("*", 'match: "*.npy"')),
        ("  match: *abc", "3:10: " + SIGN.format("*", 'match: "*abc"')),
        ("  match: [0-9]*.parquet", "3:10: " + SIGN.format("[", 'match: "[0-9]*.parquet"')),
        ("  channels: {include: [G1, *]}", "3:28: " + SIGN.format("*", '"*"')),
        ("  match: @all", "3:10: " + SIGN.format("@", 'match: "@all"')),
        ("  match: %all", "3:10: " + SIGN.format("%", 'match: "%all"')),
    ],
)
def test_a_value_that_starts_with_a_sign_is_shown_in_quotes(line, told):
    """The commonest trap of all: a pattern is an alias to YAML."""
    assert faults_of(with_line(line)) == [f"bridge.yaml:{told}"]


@pytest.mark.parametrize(
    ("line", "told"),
    [
        ("\tmatch: x", "3:1: a tab stands in the indentation, and YAML takes only blanks; replace the tab by blanks"),
        ("  match:x", "3:9: a blank must follow the colon after a key; write key: value"),
        ("   match: x", "4:3: the indentation fits no line above; align the key with its neighbours"),
        (
            "  match: x\n    settle: 1 s",
            "4:11: a key cannot stand here: the line is indented below a value, or its value holds a colon and a "
            "blank; align the key with its neighbours, or put the value in quotes",
        ),
        ("  match", "3:3: this line is neither a key with a colon nor part of a value; write key: value"),
        ('  match: "raw\\d"', "3:15: a backslash inside double quotes is an escape in YAML; use single quotes instead"),
        ("  match: 'x", "3:10: the quote that opens here is not closed; close it"),
        (
            "  channels: {include: [a, b}",
            f"3:23: {OPEN_LIST}",
        ),
        (
            "  channels: {include: [a]",
            f"3:13: {OPEN_MAPPING}",
        ),
        ("  time: {from_name: x(\\d{8}), step: 1 s}", f"3:9: {OPEN_MAPPING}"),
        (
            '  match: "x" y',
            f"3:14: {QUOTED}",
        ),
        ("  match: - x", "3:10: a list must start on a line of its own; write [a, b] on this line"),
        ("---", "3:1: a second document starts here; a job is one document; remove the line ---"),
        ("  match: \x07", "3:10: the character U+0007 is not allowed in YAML; remove it; it is often left by copying"),
    ],
)
def test_syntax_errors_have_line_column_and_a_way_out(line, told):
    """In the words of somebody who writes a job, not of a parser."""
    assert faults_of(with_line(line)) == [f"bridge.yaml:{told}"]


def test_every_line_with_a_tab_is_named():
    """An editor that writes tabs has done so on many lines."""
    faults = faults_of(WIDE.replace("  ", "\t"))
    assert [fault.split(": ")[0] for fault in faults] == [f"bridge.yaml:{n}:1" for n in (3, 4, 5, 7)]


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ("", "1: is empty; write campaign: NAME and what follows"),
        ("# nothing\n", "1: is empty; write campaign: NAME and what follows"),
        ("- campaign: x\n", "1: must hold keys and values, such as campaign: NAME (got a list)"),
        ("\nhello\n", "2: must hold keys and values, such as campaign: NAME (got a single value)"),
        ("[" * 5000, "1: is nested too deeply to be a job"),
        ("[" * 30 + "]" * 30, "1: must hold keys and values, such as campaign: NAME (got a list)"),
        ("a: " + "x" * 200_000, "1: must be at most 200000 characters (got 200003); is it a job?"),
    ],
    ids=["empty", "comment", "list", "word", "endless", "deep", "long"],
)
def test_documents_that_are_no_job(text, told):
    """One sentence each."""
    assert f"bridge.yaml:{told}" in faults_of(text)


def test_arguments_are_told_beside_a_file_that_cannot_be_read():
    """Their form is checked in any case."""
    assert faults_of("a: [", "modes.rank") == [
        "bridge.yaml:1:5: the text ends before a [ or { is closed; close it",
        "--set: must be KEY=VALUE with a dotted key, such as modes.rank=12 (got modes.rank)",
    ]


def test_aliases_that_explode_are_refused():
    """Ten levels of ten aliases would be ten thousand million values; an alias of itself would never end."""
    bomb = "a0: &a0 [x]\n" + "".join(f"a{n}: &a{n} [{', '.join([f'*a{n - 1}'] * 10)}]\n" for n in range(1, 11))
    assert sum("holds more than 20000 values, too many for a job" in fault for fault in faults_of(bomb)) == 1
    assert "bridge.yaml:8: a: must not contain itself; remove the alias" in faults_of(WIDE + "a: &a [*a]\n")


KEYS = [*known_keys(), *(key.split(".")[-1] for key in known_keys())]
SIGNS = [*"*&!%@`|>#:-?[]{},'\"\\\t\n ", "\n  ", "\n    ", ": ", "- ", "<<", "---\n", "..."]
VALUES = ["none", "auto", "wide", "array", "10 min", "1 h", "12", "null", "yes", "s3://bkt/x", "/a"]


@settings(max_examples=300, deadline=None)
@given(st.lists(st.sampled_from(KEYS + SIGNS + VALUES) | st.text(max_size=4), max_size=30).map("".join), st.booleans())
@example("source: {time: {start: 1, step: {}}}\n", False)
@example("? \n", True)
def test_any_text_is_a_job_or_is_told_why_not(text, below):
    """No other error leaves, and every fault says where."""
    faults = ("bridge.yaml:",)
    try:
        parse_job(WIDE + text if below else text, "bridge.yaml", [f"source.channels={text}"])
    except JobInvalid as error:
        faults = error.faults
    assert faults
    assert all(fault.startswith(("bridge.yaml:", "--set: ")) for fault in faults)
