"""A short reason for each post of a page: the edge by someone the reader knows that adds most to its score."""

from collections.abc import Sequence

import numpy as np

from scoring.affinity import FOLLOW, FRIEND
from scoring.edges import EdgeRows
from scoring.reduce import edge_terms
from service.feed.types import Reason
from service.feed.view import View
from service.store import keys
from service.store.connection import Connection

_RELATIONS = {FOLLOW: "follow", FRIEND: "friend"}


async def names_of(connection: Connection, people: Sequence[int]) -> dict[int, str]:
    """Give the ids of people by their hashes, '' where the store holds none.

    Raises:
        StoreUnavailable: the store does not answer.

    """
    distinct = sorted(set(people))
    if not distinct:
        return {}
    hashes = [person.to_bytes(8, "little") for person in distinct]
    names = await connection.mget(keys.keys("name", hashes))
    return {person: name.decode() if name else "" for person, name in zip(distinct, names, strict=True)}


async def reasons(
    view: View, posts: Sequence[bytes], kinds: Sequence[str], connection: Connection, t_ms: int
) -> dict[bytes, Reason]:
    """Give the reason for each post that has one; a post that only the crowd brought has none.

    Args:
        view: what the feed was ranked from.
        posts: hashes.
        kinds: name of each kind code.
        connection: to the store, for the actors' ids.
        t_ms: the time of the feed, Unix milliseconds.

    Raises:
        StoreUnavailable: the store does not answer.

    """
    best = _strongest(view, posts, t_ms)
    people = view.circle.person[best.edges.row].tolist()
    names = await names_of(connection, people)
    relations = view.circle.relation[best.edges.row].tolist()
    rows = zip(
        best.edges.post.tolist(),
        people,
        relations,
        best.edges.code().tolist(),
        best.edges.time_ms().tolist(),
        best.product,
        strict=True,
    )
    return {
        post.to_bytes(8, "little"): Reason(
            actor=names[person],
            kind=kinds[code],
            at_ms=int(at_ms),
            age_ms=max(0, t_ms - int(at_ms)),
            relation=_RELATIONS.get(relation, "none"),
            product=product,
        )
        for post, person, relation, code, at_ms, product in rows
    }


class _Best:
    """One edge a post, with what it adds."""

    def __init__(self, edges: EdgeRows, product: list[float]) -> None:
        self.edges = edges
        self.product = product


def _strongest(view: View, posts: Sequence[bytes], t_ms: int) -> _Best:
    edges = view.edges()
    edges = edges.select(np.isin(edges.post, np.frombuffer(b"".join(posts), dtype="<u8")))
    terms = edge_terms(edges, view.circle, view.ranking, t_ms)
    product = terms.affinity * terms.weight * terms.freshness
    # By post; within a post the greatest product first, then the newest edge, then the actor's hash.
    order = np.lexsort((edges.row, -edges.time_ms(), -product, edges.post))
    ordered = edges.post[order]
    first = np.ones(len(order), dtype=bool)
    first[1:] = ordered[1:] != ordered[:-1]
    chosen = order[first]
    chosen = chosen[product[chosen] > 0.0]
    picked = EdgeRows(edges.post[chosen], edges.stamp[chosen], edges.row[chosen])
    return _Best(picked, product[chosen].tolist())
