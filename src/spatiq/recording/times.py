"""Instants of SigMF metadata: RFC 3339 text with any number of fractional digits, kept exactly."""

from __future__ import annotations

import datetime as dt
import re
from dataclasses import dataclass, field
from fractions import Fraction

_FORM = re.compile(
    r"(\d{4})-(\d\d)-(\d\d)([Tt ]) ?(\d\d):(\d\d):(\d\d)(?:\.(\d{1,40}))?"
    r" ?(Z|z|UTC|[+-]\d\d:?\d\d)?",
    re.ASCII,
)
_EPOCH = dt.datetime(1970, 1, 1, tzinfo=dt.UTC)


@dataclass(frozen=True, order=True)
class Instant:
    """A point of UTC.

    Attributes:
        seconds: exact seconds since 1970-01-01T00:00:00Z, leap seconds not counted.
        digits: fractional digits that were stated; sets how it is printed.
    """

    seconds: Fraction
    digits: int = field(default=6, compare=False)

    def __str__(self) -> str:
        """RFC 3339 text in UTC, with the stated number of fractional digits (rounded down)."""
        units = self.seconds * 10**self.digits
        whole, part = divmod(units.numerator // units.denominator, 10**self.digits)
        text = (_EPOCH + dt.timedelta(seconds=whole)).strftime("%Y-%m-%dT%H:%M:%S")
        # strftime does not pad the year on every platform.
        text = text.rjust(19, "0")
        return f"{text}.{part:0{self.digits}d}Z" if self.digits else f"{text}Z"

    def later(self, samples: int, sample_rate: float) -> Instant:
        """This instant plus a number of sample periods; printed to the nanosecond or finer."""
        return Instant(self.seconds + samples / Fraction(sample_rate), max(self.digits, 9))


@dataclass(frozen=True)
class ParsedTime:
    """Result of reading a time: the instant (None when it cannot be placed in UTC) and a remark."""

    instant: Instant | None
    remark: str = ""


def parse_time(text: str) -> ParsedTime:
    """Read a time as RFC 3339 writes it, second 60 included, and the usual near misses.

    A space in place of "T" and an offset in place of "Z" are accepted with a remark. A time without
    zone is a remark and no instant: which clock it was read from is unknown.

    Raises:
        ValueError: not such a text, or no such date or time of day.
    """
    found = _FORM.fullmatch(text)
    if found is None:
        raise ValueError("not an RFC 3339 time")
    year, month, day, join, hour, minute, second, fraction, zone = found.groups()
    leap = second == "60"
    moment = dt.datetime(
        int(year), int(month), int(day), int(hour), int(minute), 59 if leap else int(second)
    )
    if zone is None:
        return ParsedTime(None, "has no time zone; start time left unknown")
    shift = dt.timedelta(0)
    if zone not in ("Z", "z", "UTC"):
        hours, minutes = int(zone[1:3]), int(zone[-2:])
        if hours > 23 or minutes > 59:
            raise ValueError("no such offset from UTC")
        shift = dt.timedelta(hours=hours, minutes=minutes) * (-1 if zone[0] == "-" else 1)
    since = moment.replace(tzinfo=dt.UTC) - _EPOCH - shift
    seconds = since.days * 86400 + since.seconds
    if leap and seconds % 86400 != 86399:
        raise ValueError("second 60 is only at the end of a UTC day")
    exact = Fraction(seconds + leap)
    if fraction:
        exact += Fraction(int(fraction), 10 ** len(fraction))
    instant = Instant(exact, len(fraction or ""))
    if not _EPOCH.min.year <= year_of(instant) <= 9999:
        raise ValueError("outside years 1..9999 in UTC")
    strict = join in "Tt" and zone in ("Z", "z") and "  " not in text
    return ParsedTime(instant, "" if strict else "is not RFC 3339 with T and Z; read all the same")


def year_of(instant: Instant) -> int:
    """UTC year of an instant; 10000 or 0 when it falls outside the calendar."""
    days = instant.seconds // 86400
    try:
        return (_EPOCH + dt.timedelta(days=days)).year
    except OverflowError:
        return 10000 if days > 0 else 0
