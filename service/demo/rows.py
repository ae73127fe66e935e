"""Compares a feed with the one before it: who moved, who is new, who is gone."""

from dataclasses import dataclass

from service.demo.answers import Feed, Item


@dataclass(frozen=True, slots=True)
class Row:
    """A post in sight.

    Args:
        rank: place, from 1.
        was_rank: place in the feed before; None where it was not there.
        was_score: score in the feed before; None where it was not there.
        item: the post.
        age_ms: at the time of the feed, milliseconds.

    """

    rank: int
    was_rank: int | None
    was_score: float | None
    item: Item
    age_ms: int

    @property
    def title(self) -> str:
        """The post's name without its author's."""
        return self.item.post.removeprefix(f"{self.item.author}-")

    @property
    def climb(self) -> int:
        """How many places it has climbed; negative where it fell, 0 where it was not there before."""
        return 0 if self.was_rank is None else self.was_rank - self.rank


@dataclass(frozen=True, slots=True)
class Departure:
    """A post that has left sight; `rank` is its place now, None where it left the feed."""

    post: str
    was_rank: int
    rank: int | None


def rows(feed: Feed, k: int, before: Feed | None = None) -> list[Row]:
    """List the first k posts of a feed, each beside its place in the feed before; without one, beside itself."""
    before = before or feed
    return [
        Row(rank, before.rank(item.post), before.score(item.post), item, max(0, feed.as_of_ms - item.posted_ms))
        for rank, item in enumerate(feed.items[:k], 1)
    ]


def departures(before: Feed, after: Feed, k: int) -> list[Departure]:
    """List the posts that were among the first k and are not any more."""
    left = [Departure(item.post, was_rank, after.rank(item.post)) for was_rank, item in enumerate(before.items[:k], 1)]
    return [one for one in left if one.rank is None or one.rank > k]
