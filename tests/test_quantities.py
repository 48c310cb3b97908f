"""Durations, sizes, instants and angles: exact numbers from text, and refusals that say what to write."""

from __future__ import annotations

import contextlib
import math
import pickle
from datetime import UTC, datetime, timedelta
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from job_texts import ANGLE

from shardfold.quantities import (
    BYTE_UNITS,
    DURATION_UNITS,
    RuleBroken,
    format_angle,
    format_bytes,
    format_duration,
    parse_angle,
    parse_bytes,
    parse_duration,
    parse_instant,
)


@pytest.mark.parametrize(
    ("text", "duration_ns"),
    [
        ("125 ms", 125_000_000),
        ("10 min", 600 * 10**9),
        ("1 h", 3600 * 10**9),
        ("30 d", 30 * 86400 * 10**9),
        ("2 us", 2000),
        ("1.5 s", 1_500_000_000),
        ("0 s", 0),
        ("7 ns", 7),
        ("10min", 600 * 10**9),
        (" .5 ms ", 500_000),
        ("12.42 h", 44_712 * 10**9),
        ("106751 d", 106_751 * 86400 * 10**9),
    ],
)
def test_durations_are_whole_nanoseconds(text, duration_ns):
    """Units as in SI, min, h and d; 106751 d is the longest whole number of days that 63 bits hold."""
    assert parse_duration(text) == duration_ns


def test_decimal_fractions_do_not_pass_through_floats():
    """0.1 + 0.2 is the classic: as float64 seconds 0.3 is 299999999.99999999 ns away from a whole number."""
    assert parse_duration("0.3 s") == parse_duration("0.1 s") + parse_duration("0.2 s")
    assert parse_duration("9007199254.740993 s") == 9_007_199_254_740_993_000  # 2**53 + 1 us, no float64


@pytest.mark.parametrize(
    ("value", "remedy"),
    [
        ("10", 'the unit is missing: write "10 s" or "10 min"'),
        (10, 'the unit is missing: write "10 s" or "10 min"'),
        (0.125, 'the unit is missing: write "0.125 s" or "0.125 min"'),
        ("10 minutes", 'write "10 min"'),
        ("10 m", 'write "10 min"'),
        ("3 Sec", 'write "3 s"'),
        ("5 µs", 'write "5 us"'),
        ("5 MS", 'write "5 ms"'),
        ("2 weeks", "weeks is not one of the units"),
        ("-1 s", "it cannot be negative"),
        ("8 Hz", 'give the time from one to the next instead of the rate: "125 ms"'),
        ("1 kHz", 'give the time from one to the next instead of the rate: "1 ms"'),
        ("30 Hz", "give the time from one to the next instead of the rate"),
        ("0 Hz", "give the time from one to the next instead of the rate"),
        ("5°", "° is not one of the units"),
        ("10:00", ""),
        ("PT10M", ""),
        ("1e3 s", ""),
        ("", ""),
        (None, ""),
        (True, ""),
        (["1 s"], ""),
    ],
)
def test_what_is_no_duration_is_refused_with_the_nearest_that_is_one(value, remedy):
    """The rule names all units; the remedy is the text to write, where one can be told."""
    with pytest.raises(RuleBroken) as caught:
        parse_duration(value)
    assert "a number and a unit (ns, us, ms, s, min, h or d)" in caught.value.rule
    assert caught.value.remedy == remedy


@pytest.mark.parametrize(
    ("text", "nearest"),
    [("0.6 ns", "1 ns"), ("33.3333333333 ms", "33333333 ns"), ("1.00000000000000000000000000001 s", "1 s")],
)
def test_nothing_is_rounded_to_a_nanosecond(text, nearest):
    """But the nearest value is shown, in its shortest form."""
    with pytest.raises(RuleBroken, match=f'whole number of nanoseconds; the nearest is "{nearest}"'):
        parse_duration(text)


def test_a_duration_fits_64_bits():
    """2**63 - 1 ns is the last."""
    assert parse_duration(f"{2**63 - 1} ns") == 2**63 - 1
    with pytest.raises(RuleBroken, match=r"at most 2\*\*63 - 1 nanoseconds"):
        parse_duration(f"{2**63} ns")


@pytest.mark.parametrize(
    ("text", "size_bytes"),
    [
        ("600 MiB", 600 * 1024**2),
        ("2 GB", 2_000_000_000),
        ("2 GiB", 2 * 1024**3),
        ("1.5 kB", 1500),
        ("7 B", 7),
        ("1TiB", 1024**4),
        ("0.5 KiB", 512),
    ],
)
def test_sizes_are_whole_bytes(text, size_bytes):
    """Decimal units count in thousands, binary ones in 1024 (IEC 80000-13)."""
    assert parse_bytes(text) == size_bytes


@pytest.mark.parametrize(
    ("value", "remedy"),
    [
        (2, 'the unit is missing: write "2 MiB" or "2 GiB"'),
        ("2 Gi", 'write "2 GiB"'),
        ("2G", 'write "2 GiB"'),
        ("2 gb", 'write "2 GB"'),
        ("2 gIb", 'write "2 GiB"'),
        ("2 KB", 'write "2 kB"'),
        ("2 PB", "PB is not one of the units"),
    ],
)
def test_what_is_no_size_is_refused_with_the_nearest_that_is_one(value, remedy):
    """Suffixes of Kubernetes and Java are understood well enough to say what to write."""
    with pytest.raises(RuleBroken) as caught:
        parse_bytes(value)
    assert "B, kB, MB, GB, TB, KiB, MiB, GiB or TiB" in caught.value.rule
    assert caught.value.remedy == remedy


def test_half_a_byte_is_refused():
    """With the nearest whole number."""
    with pytest.raises(RuleBroken, match='whole number of bytes; the nearest is "2 B"'):
        parse_bytes("1.6 B")


@pytest.mark.parametrize(
    ("text", "iso"),
    [
        ("2031-04-12T06:00:00Z", "2031-04-12T06:00:00+00:00"),
        ("2031-04-12 06:00", "2031-04-12T06:00:00+00:00"),
        ("2031-04-12", "2031-04-12T00:00:00+00:00"),
        ("2031-04-12t06:00:00.125+02:00", "2031-04-12T04:00:00.125+00:00"),
        ("1969-12-31T23:59:59.5-0130", "1970-01-01T01:29:59.5+00:00"),
    ],
)
def test_instants_are_nanoseconds_since_1970(text, iso):
    """Checked against the standard library."""
    elapsed = datetime.fromisoformat(iso) - datetime(1970, 1, 1, tzinfo=UTC)
    assert parse_instant(text) == elapsed // timedelta(microseconds=1) * 1000


def test_instants_agree_with_numpy_to_the_nanosecond():
    """NumPy's datetime64[ns], before and after the epoch."""
    for text in ("2031-04-12T06:00:00.123456789", "1901-02-03T04:05:06.000000001"):
        assert parse_instant(text) == int(np.datetime64(text, "ns").astype(np.int64))


@pytest.mark.parametrize(
    ("value", "words"),
    [
        ("12.04.2031", "must be a date and time, such as 2031-04-12T06:00:00Z"),
        (1933740000, "must be a date and time"),
        ("2031-02-29", "there is no such date or time: day is out of range"),
        ("2031-04-12T24:30:00Z", "there is no such date or time: hour must be in"),
        ("1650-01-01", "must lie in the years 1678 to 2261"),
        ("2300-01-01", "must lie in the years 1678 to 2261"),
        ("2031-04-12T06:00:00.1234567891Z", "must be a date and time"),
        (None, "must be a date and time"),
    ],
)
def test_what_is_no_instant_is_refused(value, words):
    """Numbers too: seconds or milliseconds cannot be told apart."""
    with pytest.raises(RuleBroken, match=words):
        parse_instant(value)


@given(st.integers(0, 2**63 - 1))
def test_what_is_formatted_reads_back(amount):
    """For every duration and size that can be held."""
    assert parse_duration(format_duration(amount)) == amount
    assert parse_bytes(format_bytes(amount)) == amount


@given(st.integers(0, 10**9), st.integers(0, 9), st.sampled_from(sorted(DURATION_UNITS)))
def test_decimals_are_exact_or_refused(digits, places, unit):
    """Against rational arithmetic."""
    text = f"{digits // 10**places}.{digits % 10**places:0{places}d}" if places else f"{digits}"
    exact = Fraction(digits, 10**places) * DURATION_UNITS[unit]
    if exact.denominator == 1 and exact < 2**63:
        assert parse_duration(f"{text} {unit}") == exact
    else:
        with pytest.raises(RuleBroken):
            parse_duration(f"{text} {unit}")


@given(st.text(max_size=30) | st.integers() | st.floats() | st.none() | st.booleans())
def test_any_value_is_a_quantity_or_breaks_a_rule(value):
    """No other error leaves."""
    for parse, kind in ((parse_duration, int), (parse_bytes, int), (parse_instant, int), (parse_angle, float)):
        with contextlib.suppress(RuleBroken):
            assert isinstance(parse(value), kind)


@pytest.mark.parametrize(
    ("text", "angle_deg"),
    [("5 deg", 5.0), ("0.5deg", 0.5), (" .1 deg ", 0.1), ("90 deg", 90.0), ("0 deg", 0.0), ("400 deg", 400.0)],
)
def test_angles_are_degrees(text, angle_deg):
    """The float64 nearest to the decimal digits; no range of its own."""
    assert parse_angle(text) == angle_deg


@given(st.fractions(0, 7, max_denominator=10**6))
def test_radians_become_degrees(turn):
    """To rounding, against rational arithmetic with 30 digits of pi."""
    pi = Fraction("3.141592653589793238462643383280")
    got = parse_angle(f"{float(turn):.15f} rad")
    assert abs(Fraction(got) - Fraction(f"{float(turn):.15f}") * 180 / pi) <= Fraction(4 * math.ulp(got or 1e-300))


@given(st.floats(1e-12, 1e6))
def test_what_is_formatted_as_an_angle_reads_back(angle_deg):
    """To the bit, without an exponent."""
    assert parse_angle(format_angle(angle_deg)) == angle_deg
    assert "e" not in format_angle(angle_deg).removesuffix(" deg")


@pytest.mark.parametrize(
    ("value", "remedy"),
    [
        (5, 'the unit is missing: write "5 deg"'),
        ("5", 'the unit is missing: write "5 deg"'),
        (2.5, 'the unit is missing: write "2.5 deg"'),
        ("5°", 'write "5 deg"'),
        ("5 degrees", 'write "5 deg"'),
        ("5 Deg", 'write "5 deg"'),
        ("1 radian", 'write "1 rad"'),
        ("5 gon", "gon is not one of the units"),
        ("5 min", "min is not one of the units"),
        ("-5 deg", "it cannot be negative"),
        ("5e-1 deg", ""),
        ("tight", ""),
        (None, ""),
        (True, ""),
    ],
)
def test_what_is_no_angle_is_refused_with_the_nearest_that_is_one(value, remedy):
    """A number alone may be meant in degrees, which is then to be written."""
    with pytest.raises(RuleBroken) as caught:
        parse_angle(value)
    assert (caught.value.rule, caught.value.remedy) == (ANGLE, remedy)


def test_formats_are_the_shortest():
    """The largest unit that is exact."""
    assert [format_duration(n) for n in (0, 90 * 10**9, 86400 * 10**9, 1500)] == ["0 ns", "90 s", "1 d", "1500 ns"]
    assert [format_bytes(n) for n in (0, 2 * 1024**3, 2 * 10**9, 1500)] == ["0 B", "2 GiB", "2 GB", "1500 B"]
    assert [format_angle(x) for x in (5, 0.5, 12.25, 1e-5)] == ["5 deg", "0.5 deg", "12.25 deg", "0.00001 deg"]
    assert set(BYTE_UNITS) == {"B", "kB", "MB", "GB", "TB", "KiB", "MiB", "GiB", "TiB"}


def test_a_broken_rule_survives_pickling():
    """Its parts too."""
    broken = pickle.loads(pickle.dumps(RuleBroken("must be odd", "write 3")))  # noqa: S301
    assert (broken.rule, broken.remedy, str(broken)) == ("must be odd", "write 3", "must be odd; write 3")
