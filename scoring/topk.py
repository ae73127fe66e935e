"""Exact top k without looking at everything.

The Threshold Algorithm (Fagin, Lotem and Naor, "Optimal aggregation algorithms for middleware", PODS 2001) in the form
that a feed needs: every candidate has a known upper bound, its score costs a look-up. Candidates are looked up in order
of their bounds, in growing batches, until no bound that is left reaches the k-th score.
"""

import math
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

TIE_BITS = 33
"""Scores that agree in this many leading bits, about ten digits, are a tie: sums differ in their last bits by the
order in which edges came, and no order may show in a feed."""

_SLACK = 1.0 + 1e-9


def tie_key(score: float) -> float:
    """Round a score to the digits that count in an order.

    >>> tie_key(5.25), tie_key(0.1 + 0.2) == tie_key(0.3)
    (5.25, True)
    """
    mantissa, exponent = math.frexp(score)
    return math.ldexp(round(mantissa * 2.0**TIE_BITS), exponent - TIE_BITS)


class ByBound:
    """Candidates in falling order of their bounds; only the front is sorted until more is asked for.

    Args:
        bounds: Upper bound of each candidate, shape (n,).
        front: How many to sort at first.

    >>> order = ByBound(np.array([1.0, 3.0, 2.0]), front=1)
    >>> order.take(0, 1), order.take(1, 5), order.bound(2)
    (array([1]), array([2, 0]), 1.0)
    """

    def __init__(self, bounds: NDArray[np.float64], front: int) -> None:
        self._bounds = bounds
        self._places = np.empty(0, dtype=np.intp)
        self._rest = np.arange(len(bounds))
        self._sort(front)

    def __len__(self) -> int:
        return len(self._bounds)

    def take(self, start: int, count: int) -> NDArray[np.intp]:
        """Return the places of up to `count` candidates from the `start`-th on."""
        self._reach(start + count)
        return self._places[start : start + count]

    def bound(self, at: int) -> float:
        """Return the `at`-th greatest bound."""
        self._reach(at + 1)
        return float(self._bounds[self._places[at]])

    def _reach(self, count: int) -> None:
        if count > len(self._places) and len(self._rest):
            self._sort(max(count, 4 * len(self._places)) - len(self._places))

    def _sort(self, count: int) -> None:
        """Sort the next `count`; those sorted before keep their places, or equal bounds would change theirs."""
        falling = -self._bounds[self._rest]
        if count < len(falling):
            split = np.argpartition(falling, count)
            chosen, left = split[:count], split[count:]
        else:
            chosen, left = np.arange(len(falling)), np.empty(0, dtype=np.intp)
        ordered = chosen[np.argsort(falling[chosen])]
        self._places = np.concatenate((self._places, self._rest[ordered]))
        self._rest = self._rest[left]


def settled(kth_score: float, next_bound: float) -> bool:
    """Say whether a candidate with this bound can neither beat nor tie the k-th score.

    >>> settled(2.0, 1.9), settled(2.0, 2.0)
    (True, False)
    """
    return next_bound * _SLACK < kth_score


def order_key(score: float, posted_ms: int, post_id: str) -> tuple[float, int, bytes]:
    """Return what ranked posts are sorted by, ascending: score falling, newest first, then the id's bytes."""
    return (-tie_key(score), -posted_ms, post_id.encode())


def kth_greatest(scores: Sequence[float], k: int) -> float:
    """Return the k-th greatest score, -inf where there are fewer.

    >>> kth_greatest([3.0, 1.0, 2.0], 2), kth_greatest([3.0], 2)
    (2.0, -inf)
    """
    return float(np.partition(np.asarray(scores), -k)[-k]) if len(scores) >= k else -math.inf
