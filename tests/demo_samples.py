"""Small feeds and weeks that the tests of the demo share."""

import functools

from service.demo import chronicle
from service.demo.answers import Feed, Item
from service.demo.chronicle import Chronicle

NOW_MS = 1_777_885_200_000
HOUR_MS = 3_600_000


@functools.cache
def week(people: int = 300, seed: int = 3, now_ms: int = NOW_MS) -> Chronicle:
    """A community's week, made once for all tests."""
    return chronicle.write(people, seed, now_ms)


def item(post: str, score: float, age_h: float = 1.0, form: str = "photo") -> Item:
    """A post of a feed; its author is what comes before the first dash."""
    return Item(post, post.partition("-")[0], form, NOW_MS - round(age_h * HOUR_MS), score)


def feed(*items: Item, total_ms: float = 2.5) -> Feed:
    """A feed of these posts."""
    return Feed(NOW_MS, complete=True, items=list(items), stages_ms={"total": total_ms})
