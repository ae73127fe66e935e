"""Marks of posts on the boards: a number for each half-life that orders posts by their decayed count at any time."""

from collections.abc import Sequence
from ctypes import c_double

import numpy as np
from numpy.typing import NDArray

from scoring.bank import Bank
from scoring.compiled import check, lengths, numbers, passes


def marks(values: Sequence[bytes], bank: Bank, slots: Sequence[int], now_ms: int) -> NDArray[np.float64]:
    """Compute the marks of posts.

    Args:
        values: n posts, as stored.
        bank: Of the store.
        slots: Places in the bank of the half-lives wanted, m of them.
        now_ms: Any time near that of the posts' edges, Unix milliseconds; it cancels out.

    Returns:
        log2(decayed count at now) + now / half-life, NaN for a post without edges, shape (n, m).

    Raises:
        BrokenValueError: A value is shorter than it says.
    """
    half_lives = numbers(np.array([bank.half_lives_ms[slot] for slot in slots]))
    places = np.array(slots, dtype="<i8").tobytes()
    found = (c_double * (len(values) * len(slots)))()
    size = len(bank.half_lives_ms)
    status = passes.post_marks(
        len(values), b"".join(values), lengths(values), size, len(slots), places, half_lives, float(now_ms), found
    )
    check(status)
    return np.array(found, dtype=np.float64).reshape(len(values), len(slots))
