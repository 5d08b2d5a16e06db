"""Instants as SigMF writes them, exact to the last digit."""

import re
from datetime import UTC, datetime, timedelta
from fractions import Fraction

from chanbank._checks import Rule, wrong_type, wrong_value

__all__ = ["InstantRule", "format_instant", "parse_instant", "resolution"]

_ACCEPTED = 'an RFC 3339 instant in UTC, such as "2031-05-04T09:30:00.25Z"'
_PATTERN = re.compile(r"(\d{4})-(\d\d)-(\d\d)[Tt](\d\d):(\d\d):(\d\d)(?:\.(\d+))?[Zz]")
_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
_DIGITS = 12


def parse_instant(text, name="datetime"):
    """Seconds since 1970-01-01T00:00:00Z as a Fraction.

    A leap second (":60") is counted as the first second of the next minute, as POSIX time does.
    """
    if not isinstance(text, str):
        raise wrong_type(name, _ACCEPTED, text)
    match = _PATTERN.fullmatch(text)
    if match is None:
        raise wrong_value(name, _ACCEPTED, text)
    year, month, day, hour, minute, second = (int(part) for part in match.groups()[:6])
    try:
        start = datetime(year, month, day, hour, minute, min(second, 59), tzinfo=UTC)
    except ValueError:
        raise wrong_value(name, _ACCEPTED, text) from None
    if second > 60:
        raise wrong_value(name, _ACCEPTED, text)
    whole = (start - _EPOCH) // timedelta(seconds=1) + (1 if second == 60 else 0)
    digits = match.group(7) or ""
    return whole + Fraction(int(digits or 0), 10 ** len(digits))


def resolution(text):
    """The step of the last digit given, in seconds."""
    digits = _PATTERN.fullmatch(text).group(7) or ""
    return Fraction(1, 10 ** len(digits))


def format_instant(seconds):
    """The instant `seconds` (exact) after 1970 as text, to the picosecond."""
    ticks = round(Fraction(seconds) * 10**_DIGITS)
    whole, fraction = divmod(ticks, 10**_DIGITS)
    text = (_EPOCH + timedelta(seconds=whole)).strftime("%Y-%m-%dT%H:%M:%S")
    digits = f"{fraction:0{_DIGITS}d}".rstrip("0")
    return f"{text.zfill(19)}{'.' + digits if digits else ''}Z"


class InstantRule(Rule):
    """An instant as text or as an aware `datetime.datetime`; canonical: the text."""

    accepted = _ACCEPTED + ", or a datetime with a time zone"

    def check(self, name, value):
        if isinstance(value, datetime):
            if value.tzinfo is None:
                raise wrong_value(name, self.accepted, value)
            return format_instant(Fraction((value - _EPOCH) // timedelta(microseconds=1), 10**6))
        parse_instant(value, name)
        return value

    def violations(self):
        return [(3, TypeError), ("noon", ValueError), (datetime(2031, 5, 4), ValueError)]
