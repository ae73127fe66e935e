"""Arrangement: keep posts by one author apart, where the candidates allow it."""

from collections.abc import Hashable, Sequence


def keep_apart(
    authors: Sequence[Hashable], gap: int, count: int, before: Sequence[Hashable] = (), *, more: bool = False
) -> list[int] | None:
    """Order posts so that at least `gap` others stand between two by one author.

    Each place takes the best post whose author has not stood in the `gap` places before; where there is none, the best
    post that is left.

    Args:
        authors: Author of each post, best post first.
        gap: Posts between two by one author, 0 or more.
        count: How many places to fill.
        before: Authors of the posts already served before these, last one last.
        more: Whether further, lesser posts exist that are not in the list.

    Returns:
        The places of the posts in their new order, fewer than `count` where there are no more;
        None where a post outside the list would have come before the last of them.

    >>> keep_apart(["mina", "mina", "joel", "mina", "ada"], gap=1, count=5)
    [0, 2, 1, 4, 3]
    >>> keep_apart(["mina", "mina"], gap=3, count=2), keep_apart(["mina", "mina"], gap=3, count=2, more=True)
    ([0, 1], None)
    """
    left, served = list(range(len(authors))), list(before)
    order: list[int] = []
    while len(order) < count and (left or more):
        recent = set(served[-gap:]) if gap else set()
        chosen = next((place for place in left if authors[place] not in recent), None)
        if chosen is None:
            if more:
                return None
            chosen = left[0]
        left.remove(chosen)
        order.append(chosen)
        served.append(authors[chosen])
    return order
