"""Instants as text and as exact seconds. Reference: RFC 3339; `datetime` for whole microseconds."""

from datetime import UTC, datetime, timedelta, timezone
from fractions import Fraction

import pytest
from hypothesis import given
from hypothesis import strategies as st

from chanbank.recordings.timestamp import InstantRule, format_instant, parse_instant, resolution


@given(
    st.datetimes(
        min_value=datetime(1, 1, 1), max_value=datetime(9999, 12, 31), timezones=st.just(UTC)
    )
)
def test_against_the_standard_library(instant):
    text = instant.isoformat().replace("+00:00", "Z")
    seconds = parse_instant(text)
    assert seconds == Fraction(
        (instant - datetime(1970, 1, 1, tzinfo=UTC)) // timedelta(microseconds=1), 10**6
    )
    assert datetime.fromisoformat(format_instant(seconds)) == instant


@given(st.integers(-(10**22), 10**22))
def test_picoseconds_survive(ticks):
    assert parse_instant(format_instant(Fraction(ticks, 10**12))) == Fraction(ticks, 10**12)


def test_every_digit_counts():
    assert parse_instant("1970-01-01T00:00:00.1234567890123456789Z") == Fraction(
        1234567890123456789, 10**19
    )
    assert resolution("1970-01-01T00:00:00.250Z") == Fraction(1, 1000)
    assert resolution("1970-01-01T00:00:00Z") == 1
    assert format_instant(Fraction(1, 3)) == "1970-01-01T00:00:00.333333333333Z"
    assert format_instant(Fraction(-1, 4)) == "1969-12-31T23:59:59.75Z"


def test_a_leap_second_is_the_first_second_of_the_next_minute():
    assert format_instant(parse_instant("2016-12-31T23:59:60.5Z")) == "2017-01-01T00:00:00.5Z"


@pytest.mark.parametrize(
    "text", ["", "noon", "2031-02-30T00:00:00Z", "2031-05-04 09:30:00Z", "2031-05-04T24:00:00Z",
             "2031-05-04T09:30:61Z", "2031-05-04T09:30:00+00:00", "2031-05-04"],
)  # fmt: skip
def test_what_is_refused(text):
    with pytest.raises(ValueError, match="datetime must be an RFC 3339 instant"):
        parse_instant(text)


def test_datetimes_need_a_time_zone():
    rule = InstantRule()
    zone = timezone(timedelta(hours=2))
    assert (
        rule.check("datetime", datetime(2031, 5, 4, 11, 30, 0, 250000, zone))
        == "2031-05-04T09:30:00.25Z"
    )
    with pytest.raises(ValueError, match="time zone"):
        rule.check("datetime", datetime(2031, 5, 4))
