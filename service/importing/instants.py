"""Read many times at once: the common forms as columns of digits, all others one by one."""

from collections.abc import Sequence
from typing import Final

import numpy as np
from numpy.typing import NDArray

from service import times

WRONG: Final = -1
"""Stands where a value is no time."""

_FORMS: Final = (b"0000-00-00T00:00:00Z", b"0000-00-00T00:00:00.000Z")
_ZERO: Final = ord("0")


def read_times(values: Sequence[object]) -> NDArray[np.int64]:
    """Read times as `service.times.parse_time` does.

    Args:
        values: text or integers, or anything.

    Returns:
        Unix milliseconds, `WRONG` where a value is no time.

    >>> read_times(["1970-01-01T00:00:01Z", 7, "2026-02-30T00:00:00Z", None]).tolist()
    [1000, 7, -1, -1]

    """
    result = np.full(len(values), WRONG, np.int64)
    by_length: dict[int, list[int]] = {}
    for place, value in enumerate(values):
        if type(value) is int:
            result[place] = value if times.MIN_MS <= value <= times.MAX_MS else WRONG
        else:
            by_length.setdefault(len(value) if isinstance(value, str) else 0, []).append(place)
    for form in _FORMS:
        places = by_length.pop(len(form), [])
        texts = [str(values[place]) for place in places]
        result[places] = _read_form(texts, form)
    for places in by_length.values():
        for place in places:
            result[place] = _one(values[place])
    return result


def _one(value: object) -> int:
    try:
        return times.parse_time(value)
    except times.TimeError:
        return WRONG


def _read_form(texts: Sequence[str], form: bytes) -> NDArray[np.int64]:
    """Read texts that are as long as a form and most probably have it."""
    joined = "".join(texts)
    if not texts or not joined.isascii():
        return np.array([_one(text) for text in texts], np.int64)
    table = np.frombuffer(joined.encode(), np.uint8).reshape(len(texts), len(form))
    pattern = np.frombuffer(form, np.uint8)
    digits = table.astype(np.int64) - _ZERO
    fixed = pattern != _ZERO
    right = (table[:, fixed] == pattern[fixed]).all(axis=1)
    right &= ((digits[:, ~fixed] >= 0) & (digits[:, ~fixed] <= 9)).all(axis=1)  # noqa: PLR2004  decimal digits
    read, whole = _compose(digits)
    read[~(right & whole)] = WRONG
    for place in np.flatnonzero(read == WRONG).tolist():
        read[place] = _one(texts[place])
    return read


def _compose(digits: NDArray[np.int64]) -> tuple[NDArray[np.int64], NDArray[np.bool_]]:
    """Put the digits together, and say of which rows a time comes out that needs no second look."""

    def number(first: int, end: int) -> NDArray[np.int64]:
        return np.asarray(digits[:, first:end] @ 10 ** np.arange(end - first - 1, -1, -1))

    year, month, day = number(0, 4), number(5, 7), number(8, 10)
    hour, minute, second = number(11, 13), number(14, 16), number(17, 19)
    whole = (year >= 1970) & (year <= 9999) & (month >= 1) & (month <= 12)  # noqa: PLR2004  the calendar's own
    whole &= (hour < 24) & (minute < 60) & (second < 60)  # noqa: PLR2004  the clock's own
    months = ((np.where(whole, year, 1970) - 1970) * 12 + np.where(whole, month, 1) - 1).astype("M8[M]")
    days = months.astype("M8[D]") + (day - 1)
    whole &= (day >= 1) & (days.astype("M8[M]") == months)
    seconds = days.astype(np.int64) * 86_400 + hour * 3_600 + minute * 60 + second
    millis = number(20, 23) if digits.shape[1] == len(_FORMS[1]) else 0
    return seconds * 1000 + millis, whole
