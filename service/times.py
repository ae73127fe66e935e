"""Times at the edge: RFC 3339 text and Unix milliseconds."""

import re
from datetime import UTC, date, datetime, timedelta
from functools import lru_cache

ALLOWED = (
    "an RFC 3339 time with an offset, such as 2026-05-04T09:00:00Z, or an integer of Unix milliseconds, "
    "from 1970-01-01T00:00:00Z to 9999-12-31T23:59:59.999Z"
)
MIN_MS = 0
MAX_MS = 253_402_300_799_999

_RFC3339 = re.compile(
    r"(\d{4})-(\d\d)-(\d\d)[Tt]"
    r"([01]\d|2[0-3]):([0-5]\d):([0-5]\d|60)(?:\.(\d+))?"
    r"(?:[Zz]|([+-])([01]\d|2[0-3]):([0-5]\d))",
    re.ASCII,
)
_EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
_EPOCH_DAY = date(1970, 1, 1).toordinal()
_DAY_MINUTES = 24 * 60
_LEAP_SECOND = 60


class TimeError(ValueError):
    """Text or a number that is no time."""


def parse_rfc3339(text: str) -> int:
    """Parse an RFC 3339 time (Klyne and Newman, RFC 3339, 2002) to Unix milliseconds.

    Lower-case `t` and `z`, an offset of `-00:00` and any number of decimals are legal; what is finer
    than a millisecond is cut off. A leap second, which only the last minute of a UTC day can hold, is
    the second after it.

    Args:
        text: the time, with an offset.

    Returns:
        Unix milliseconds; negative before 1970.

    Raises:
        TimeError: the text is not such a time.

    >>> parse_rfc3339("1985-04-12T23:20:50.52Z")
    482196050520

    """
    match = _RFC3339.fullmatch(text)
    if match is None:
        raise TimeError(text)
    year, month, day, hour, minute, second, fraction, sign, offset_hour, offset_minute = match.groups()
    try:
        days = date(int(year), int(month), int(day)).toordinal() - _EPOCH_DAY
    except ValueError as no_such_day:
        raise TimeError(text) from no_such_day
    minutes = days * _DAY_MINUTES + int(hour) * 60 + int(minute)
    if sign is not None:
        ahead = int(offset_hour) * 60 + int(offset_minute)
        minutes -= ahead if sign == "+" else -ahead
    seconds = int(second)
    if seconds == _LEAP_SECOND and minutes % _DAY_MINUTES != _DAY_MINUTES - 1:
        raise TimeError(text)
    millis = int(fraction[:3].ljust(3, "0")) if fraction else 0
    return (minutes * 60 + seconds) * 1000 + millis


def parse_time(value: object) -> int:
    """Take a time as callers send it: RFC 3339 text or an integer of Unix milliseconds.

    Args:
        value: text or an integer; True and False are no integers here.

    Returns:
        Unix milliseconds from `MIN_MS` to `MAX_MS`.

    Raises:
        TimeError: it is neither, or lies outside of the years 1970 to 9999.

    """
    if isinstance(value, str):
        at_ms = parse_rfc3339(value)
    elif isinstance(value, int) and not isinstance(value, bool):
        at_ms = value
    else:
        raise TimeError(str(value))
    if not MIN_MS <= at_ms <= MAX_MS:
        raise TimeError(str(value))
    return at_ms


def parse_time_text(text: str) -> int:
    """Take a time from where everything is text, such as a query or a command line.

    >>> parse_time_text("1777885200000") == parse_time_text("2026-05-04T09:00:00Z")
    True
    """
    if text.isascii() and text.isdigit() and len(text) <= len(str(MAX_MS)):
        return parse_time(int(text))
    return parse_time(text)


def format_ms(at_ms: int) -> str:
    """Write Unix milliseconds as RFC 3339 in UTC.

    >>> format_ms(1777885200000)
    '2026-05-04T09:00:00.000Z'
    """
    days, in_day = divmod(at_ms, 86_400_000)
    seconds, millis = divmod(in_day, 1000)
    minutes, second = divmod(seconds, 60)
    return f"{_date(days)}T{minutes // 60:02}:{minutes % 60:02}:{second:02}.{millis:03}Z"


@lru_cache(maxsize=4096)
def _date(days: int) -> str:
    """Write a date, given as days since 1970; most times that are written fall on few dates."""
    return (_EPOCH + timedelta(days=days)).date().isoformat()
