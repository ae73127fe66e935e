"""Durations as people write them: a number and a unit, held in milliseconds."""

import re
from decimal import Decimal
from fractions import Fraction

UNITS_MS = {"s": 1_000, "m": 60_000, "h": 3_600_000, "d": 86_400_000}
"""Milliseconds in a second, a minute, an hour and a day."""

ALLOWED = "a duration is a number above 0 with one of the units s, m, h or d, like 12h or 1.5d, and is at least 1 ms"

# So many digits keep every duration finite, and write every double of at least 1 ms in seconds.
_DURATION = re.compile(r"([0-9]{1,12}(?:\.[0-9]{1,20})?)([smhd])")


def parse_ms(text: str) -> float:
    """Read a duration.

    Args:
        text: A number and a unit (s, m, h, d), for example ``12h`` or ``1.5d``.

    Returns:
        The duration in milliseconds, at least 1, rounded once from its exact value.

    Raises:
        ValueError: If the text is no duration, or one shorter than a millisecond.

    >>> parse_ms("12h"), parse_ms("1.5d")
    (43200000.0, 129600000.0)
    """
    found = _DURATION.fullmatch(text)
    if found is None:
        raise ValueError(ALLOWED)
    duration_ms = float(Fraction(found[1]) * UNITS_MS[found[2]])
    if duration_ms < 1:
        raise ValueError(ALLOWED)
    return duration_ms


def format_ms(duration_ms: float) -> str:
    """Write a duration in the largest unit that divides it, else in seconds.

    Args:
        duration_ms: Milliseconds, positive and finite.

    Returns:
        Text that `parse_ms` reads as the same number.

    >>> format_ms(129_600_000), format_ms(86_400_000), format_ms(2_500)
    ('36h', '1d', '2.5s')
    """
    for unit in ("d", "h", "m", "s"):
        if duration_ms % UNITS_MS[unit] == 0:
            return f"{int(duration_ms) // UNITS_MS[unit]}{unit}"
    return f"{Decimal(repr(float(duration_ms))).scaleb(-3):f}".rstrip("0") + "s"
