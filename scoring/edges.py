"""Edges as arrays: 16 bytes each, the post's hash and a stamp of time and kind code."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

EDGE = np.dtype([("post", "<u8"), ("stamp", "<u8")])
"""How a row holds an edge: hash of the post; time in ms (48 bits) above the code (16 bits)."""

CREATION = 1 << 14
"""Flag on the code of a creation edge."""

RETRACTED = 1 << 15
"""Flag on the code of an edge that was taken back."""

MARKER = CREATION - 1
"""The code of an entry that is no edge: it holds the time up to which the row's person was erased."""

_TIME_SHIFT = np.uint64(16)
_CODE_MASK = np.uint64(CREATION - 1)
_RETRACTED = np.uint64(RETRACTED)
_MARKER = np.uint64(MARKER)


@dataclass(frozen=True, slots=True)
class EdgeRows:
    """The edges of several rows, one after the other.

    Attributes:
        post: Hash of each edge's post, shape (n,), uint64.
        stamp: Time and code of each edge, shape (n,), uint64.
        row: Which row each edge is of, shape (n,).
    """

    post: NDArray[np.uint64]
    stamp: NDArray[np.uint64]
    row: NDArray[np.intp]

    def time_ms(self) -> NDArray[np.float64]:
        """Return each edge's time, Unix milliseconds, shape (n,)."""
        return times_ms(self.stamp)

    def code(self) -> NDArray[np.intp]:
        """Return each edge's kind code without flags, shape (n,)."""
        return codes(self.stamp)

    def select(self, chosen: NDArray[np.bool_]) -> "EdgeRows":
        """Return the chosen edges."""
        return EdgeRows(self.post[chosen], self.stamp[chosen], self.row[chosen])


def join_rows(rows: Sequence[bytes]) -> EdgeRows:
    """Decode rows as they are stored.

    Args:
        rows: One packed row for each person.

    Returns:
        All entries of all rows, retracted ones and markers among them.
    """
    packed = np.frombuffer(b"".join(rows), dtype=EDGE)
    counts = np.array([len(row) // EDGE.itemsize for row in rows], dtype=np.intp)
    return EdgeRows(packed["post"], packed["stamp"], np.repeat(np.arange(len(rows)), counts))


def live(rows: EdgeRows) -> EdgeRows:
    """Return the edges that count: neither retracted nor markers."""
    dead = ((rows.stamp & _RETRACTED) != 0) | ((rows.stamp & _CODE_MASK) == _MARKER)
    return rows.select(~dead) if dead.any() else rows


def erasures(rows: EdgeRows) -> dict[int, int]:
    """Return for each row with a marker the time up to which its person was erased, Unix milliseconds."""
    marked = np.flatnonzero((rows.stamp & _CODE_MASK) == _MARKER)
    return {int(rows.row[at]): int(rows.stamp[at] >> _TIME_SHIFT) for at in marked}


def times_ms(stamps: NDArray[np.uint64]) -> NDArray[np.float64]:
    """Return the time in each stamp, Unix milliseconds, of the same shape."""
    return (stamps >> _TIME_SHIFT).astype(np.float64)


def codes(stamps: NDArray[np.uint64]) -> NDArray[np.intp]:
    """Return the kind code in each stamp, without flags, of the same shape."""
    return (stamps & _CODE_MASK).astype(np.intp)
