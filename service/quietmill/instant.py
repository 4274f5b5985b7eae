"""Instants as integer microseconds UTC: read from RFC 3339 text or from a number, written as RFC 3339 text.

Pure: no clock is read here. Everything is exact and rounds half to even, whatever the number of digits. Instants
reach from the first microsecond of the year 1 to the last of the year 9999, as RFC 3339 can write them.
"""

import re
from datetime import UTC, datetime, timedelta
from decimal import MAX_EMAX, MAX_PREC, MIN_EMIN, ROUND_HALF_EVEN, Context, Decimal
from functools import lru_cache
from math import isnan, ulp
from typing import Final

__all__ = [
    "FIRST",
    "LAST",
    "MICROSECONDS_PER_SECOND",
    "MILLISECONDS_FROM",
    "UNITS",
    "format_time",
    "from_float",
    "from_number",
    "parse_time",
]

MICROSECONDS_PER_SECOND: Final = 1_000_000

FIRST: Final = -62_135_596_800_000_000
"""0001-01-01T00:00:00Z."""

LAST: Final = 253_402_300_799_999_999
"""9999-12-31T23:59:59.999999Z."""

UNITS: Final = {"s": 6, "ms": 3, "us": 0, "ns": -3}
"""Units of a time that is a number, and by which power of ten they become microseconds."""

MILLISECONDS_FROM: Final = 10**11
"""From here on a number without a unit counts milliseconds: as seconds it would lie beyond the year 5100, as
milliseconds it lies in 1973."""

_EXACT: Final = Context(prec=MAX_PREC, Emax=MAX_EMAX, Emin=MIN_EMIN, rounding=ROUND_HALF_EVEN)
_BOUND: Final = 10**21
"""Beyond every instant in every unit."""

_EPOCH: Final = datetime(1970, 1, 1, tzinfo=UTC)
_RFC_3339: Final = re.compile(
    r"([0-9]{4}-[0-9]{2}-[0-9]{2}[Tt ](?:[01][0-9]|2[0-3]):[0-5][0-9]):([0-5][0-9]|60)(?:\.([0-9]+))?"
    r"([Zz]|[+-](?:[01][0-9]|2[0-3]):[0-5][0-9])"
)


def parse_time(text: str) -> int:
    """Return the instant that an RFC 3339 time with its offset names, in microseconds UTC.

    A space may stand for the `T`, as the RFC allows; a leap second is the first second of the next day. Raises
    `ValueError` with what is wrong.

    >>> parse_time("1970-01-01T01:00:00.25+01:00")
    250000
    """
    match = _RFC_3339.fullmatch(text)
    if match is None:
        raise ValueError(f"must be an RFC 3339 time with an offset, such as 2026-03-02T08:14:30Z, is {text[:80]!r}")
    minute, second, fraction, offset = match.groups()
    seconds = _seconds(minute, offset) + int(second)
    if second == "60" and seconds % 86_400:
        raise ValueError(f"must have its second 60 at the end of a UTC day, is {text[:80]!r}")
    instant = seconds * MICROSECONDS_PER_SECOND
    if fraction:
        # A whole second is an even number of microseconds, so the fraction may be rounded by itself.
        instant += int(fraction.ljust(6, "0")) if len(fraction) <= 6 else _shifted(Decimal(f"0.{fraction}"), 6)
    return _checked(instant, text)


def from_number(number: float | Decimal, unit: str | None = None) -> int:
    """Return the instant that a number names, in microseconds UTC.

    `unit` is one of `UNITS`; without one a number below 1e11 counts Unix seconds, and milliseconds from there on.
    Give an `int` or a `Decimal` where every digit matters: a float has lost its last ones already. Raises
    `ValueError` for what is not finite, outside the years 1 to 9999, or of an unknown unit.

    >>> from_number(1772439270), from_number(1772439270250), from_number(Decimal("0.0000025"), "s")
    (1772439270000000, 1772439270250000, 2)
    """
    if not isinstance(number, int) and isnan(number):  # as a Decimal it refuses to be compared
        raise ValueError(_out_of_range(number))
    power = _power(number, unit)
    if isinstance(number, int) and power >= 0:
        return _checked(number * 10**power, number)
    exact = Decimal(number)
    # Bounded before it is rounded: 1e999999 as an integer would fill the memory.
    if not -_BOUND < exact < _BOUND:
        raise ValueError(_out_of_range(number))
    return _checked(_shifted(exact, power), number)


def from_float(number: float, unit: str | None = None) -> int | None:
    """Return the instant of a number that was rounded to a float, if its lost digits cannot matter; else None.

    Whatever decimal text reads as this float then names the same microsecond. Where None is returned, the answer
    depends on the text itself, or is out of range: ask `from_number` with a `Decimal` of it. Until 2038 times with up
    to six digits behind the point of a second are always told.

    >>> from_float(1772439270.251234), from_float(1772439270.2512345)
    (1772439270251234, None)
    """
    power = _power(number, unit)
    if power < 0 or number == MILLISECONDS_FROM:
        return None
    scale = 10.0**power
    microseconds = number * scale
    if not abs(microseconds) < -FIRST:
        return None
    nearest = round(microseconds)
    # Half a unit in the last place was lost when the text was rounded, and as much again by the multiplication.
    error = (ulp(number) * scale + ulp(microseconds)) / 2
    return nearest if abs(microseconds - nearest) + error < 0.5 else None


def format_time(instant: int) -> str:
    """Return an instant as RFC 3339 text with `Z` and only the digits needed; raises `ValueError` out of range.

    >>> format_time(1_772_439_270_250_000)
    '2026-03-02T08:14:30.25Z'
    """
    minute, rest = divmod(_checked(instant, instant), 60 * MICROSECONDS_PER_SECOND)
    second, fraction = divmod(rest, MICROSECONDS_PER_SECOND)
    if not fraction:
        return f"{_minute(minute)}{second:02}Z"
    return f"{_minute(minute)}{second:02}." + f"{fraction:06}".rstrip("0") + "Z"


@lru_cache(maxsize=4096)  # of all instants that are written, most lie in one of the last minutes
def _minute(minute: int) -> str:
    """Return the text of a minute, up to its seconds."""
    return (_EPOCH + timedelta(minutes=minute)).isoformat()[:17]


def _power(number: float | Decimal, unit: str | None) -> int:
    """Return by which power of ten a number becomes microseconds."""
    if unit is None:
        return 3 if number >= MILLISECONDS_FROM else 6
    if unit in UNITS:
        return UNITS[unit]
    raise ValueError(f"the unit of a time must be one of {', '.join(UNITS)}, is {unit!r}")


@lru_cache(maxsize=4096)  # of all the texts that come, most name one of the last minutes
def _seconds(minute: str, offset: str) -> int:
    """Return the Unix seconds at which a minute begins."""
    try:
        return (datetime.fromisoformat(minute + offset.upper()) - _EPOCH) // timedelta(seconds=1)
    except ValueError:
        raise ValueError(f"must be on a day of the calendar, is {minute!r}") from None


def _shifted(number: Decimal, power: int) -> int:
    """Return number x 10^power, rounded half to even, exactly."""
    return int(_EXACT.to_integral_value(_EXACT.scaleb(number, power)))


def _checked(instant: int, origin: object) -> int:
    if FIRST <= instant <= LAST:
        return instant
    raise ValueError(_out_of_range(origin))


def _out_of_range(origin: object) -> str:
    # An integer of thousands of digits has no decimal text within Python's own bound.
    shown = hex(origin)[:40] if isinstance(origin, int) and origin.bit_length() > 128 else str(origin)[:40]
    return f"must lie in the years 1 to 9999, is {shown}"
