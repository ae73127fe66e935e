"""The reduction: from the edges of a reader's circle to one number for each candidate.

    score(V, P) = Σ over the circle's edges e on P: affinity(e) · weight(e) · f(e)
                + stranger · (crowd(P) - Σ over the circle's edges e on P: weight(e) · g(e))

where f is the policy's freshness and g what the bank makes of it: crowd(P) counts every edge of P with g, so the
circle's share is taken out of it again exactly.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scoring.affinity import FOLLOW, FRIEND, Circle
from scoring.edges import EdgeRows
from scoring.ranking import Ranking


@dataclass(frozen=True, slots=True)
class Candidates:
    """Posts with an edge by someone the reader follows or befriended.

    Attributes:
        post: Hashes, shape (n,), uint64, ascending.
        known: What the circle's edges add to each post's score, shape (n,).
        share: The circle's share in each post's crowd, shape (n,).
        newest_ms: Time of the newest edge by someone followed or befriended, shape (n,), Unix milliseconds.
    """

    post: NDArray[np.uint64]
    known: NDArray[np.float64]
    share: NDArray[np.float64]
    newest_ms: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class EdgeTerms:
    """The factors of each edge's product, each of shape (n,)."""

    affinity: NDArray[np.float64]
    weight: NDArray[np.float64]
    freshness: NDArray[np.float64]
    crowd_freshness: NDArray[np.float64]


def edge_terms(edges: EdgeRows, circle: Circle, ranking: Ranking, t_ms: int) -> EdgeTerms:
    """Return the factors of each edge's product.

    Args:
        edges: Live edges; `row` is the place of the actor in the circle.
        circle: The reader's circle.
        ranking: The compiled policy.
        t_ms: The time of the feed, Unix milliseconds.
    """
    age_ms = t_ms - edges.time_ms()
    freshness = ranking.freshness(age_ms)
    crowd_freshness = freshness if ranking.fit.exact else ranking.crowd_freshness(age_ms)
    return EdgeTerms(circle.affinity[edges.row], ranking.weights_of(edges.code()), freshness, crowd_freshness)


def by_ties(edges: EdgeRows, circle: Circle) -> NDArray[np.bool_]:
    """Say which edges are by someone the reader follows or befriended, shape (n,)."""
    chosen: NDArray[np.bool_] = np.isin(circle.relation, (FOLLOW, FRIEND))[edges.row]
    return chosen


def by_hash(hashes: NDArray[np.uint64]) -> NDArray[np.intp]:
    """Return the places of hashes in rising order, shape (n,).

    Two passes of a radix sort put the upper 32 bits in order, in half the time of a comparing sort; the rare
    different hashes that share them are noticed and sorted out.

    >>> by_hash(np.array([3 << 40, 1 << 50, 1, 3 << 40], dtype=np.uint64))
    array([2, 0, 3, 1])
    """
    upper = (hashes >> np.uint64(32)).astype(np.uint32)
    order = np.argsort((upper & np.uint32(0xFFFF)).astype(np.uint16), kind="stable")
    order = order[np.argsort((upper[order] >> np.uint32(16)).astype(np.uint16), kind="stable")]
    ordered = hashes[order]
    return order if np.all(ordered[:-1] <= ordered[1:]) else np.argsort(hashes, kind="stable")


def places_in(ordered: NDArray[np.uint64], wanted: NDArray[np.uint64]) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Find hashes in an ordered list.

    Args:
        ordered: Rising, shape (n,).
        wanted: Shape (m,).

    Returns:
        For those of `wanted` that are in the list: their places in it, and their places in `wanted`.

    >>> places_in(np.array([2, 5, 9], dtype=np.uint64), np.array([9, 4, 2], dtype=np.uint64))
    (array([2, 0]), array([0, 2]))
    """
    if not len(ordered):
        return np.empty(0, np.intp), np.empty(0, np.intp)
    place = np.minimum(np.searchsorted(ordered, wanted), len(ordered) - 1)
    found = np.flatnonzero(ordered[place] == wanted)
    return place[found], found


def reduce_edges(edges: EdgeRows, circle: Circle, ranking: Ranking, t_ms: int) -> Candidates:
    """Reduce the circle's edges to candidates.

    Args:
        edges: Live edges; `row` is the place of the actor in the circle.
        circle: The reader's circle.
        ranking: The compiled policy.
        t_ms: The time of the feed, Unix milliseconds.
    """
    if not len(edges.post):
        return Candidates(edges.post, np.empty(0), np.empty(0), np.empty(0))
    order = by_hash(edges.post)
    post = edges.post[order]
    starts = np.flatnonzero(np.concatenate(([True], post[1:] != post[:-1])))
    terms = edge_terms(edges, circle, ranking, t_ms)
    counted_ms = np.where(by_ties(edges, circle), edges.time_ms(), -np.inf)
    newest_ms = np.maximum.reduceat(counted_ms[order], starts)
    eligible = newest_ms > -np.inf
    known = np.add.reduceat((terms.affinity * terms.weight * terms.freshness)[order], starts)
    share = np.add.reduceat((terms.weight * terms.crowd_freshness)[order], starts)
    return Candidates(post[starts][eligible], known[eligible], share[eligible], newest_ms[eligible])


def sum_by(place: NDArray[np.intp], values: NDArray[np.float64], count: int) -> NDArray[np.float64]:
    """Add values up by place.

    Args:
        place: Where each value goes, 0 to count - 1, shape (n,).
        values: Finite, shape (n,).
        count: Number of places.

    Returns:
        Sums, shape (count,).

    >>> sum_by(np.array([0, 2, 0]), np.array([1.0, 2.0, 3.0]), 3)
    array([4., 0., 2.])
    """
    return np.bincount(place, values, count).astype(np.float64, copy=False)


def remainder(crowd: NDArray[np.float64], share: NDArray[np.float64]) -> NDArray[np.float64]:
    """Take the circle's share out of the crowd: what is left is 0 or more, rounding errors do not count as a crowd.

    >>> remainder(np.array([0.3, 5.0]), np.array([0.1 + 0.2, 1.0]))
    array([0., 4.])
    """
    left = crowd - share
    left[left < 1e-12 * crowd] = 0.0
    return np.maximum(left, 0.0)
