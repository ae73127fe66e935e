"""Chooses who plays each part of the story, from the feed as it stands."""

from collections import Counter
from collections.abc import Collection, Mapping
from dataclasses import dataclass

from service.demo.answers import Feed, Item
from service.demo.chronicle import Chronicle, Post
from service.demo.community import HOUR_MS, Relation

OLD_MS = 20 * HOUR_MS
LIKES = 3
# What the built-in policy says of the acts of the story.
WEIGHTS = {"note": 1.5, "photo": 3.0, "video": 6.0}
_FRIEND, COMMENT_PHOTO = 2.0, 2.0
LEARNED = LIKES * 0.1 + 0.5


@dataclass(frozen=True, slots=True)
class Fancy:
    """An author whom the reader takes a liking to.

    Args:
        author: who.
        form: of the post that the author is about to publish.
        liked: posts by the author that the reader is about to like.

    """

    author: str
    form: str
    liked: tuple[str, ...]


def old_post(feed: Feed, chronicle: Chronicle, k: int) -> Item | None:
    """Choose an old post for everyone that stands below the first k; None where there is none.

    It is the oldest that a friend's comment with a photo would lift into the upper half of what is in sight,
    or else the one with the best score.
    """

    def use(item: Item) -> tuple[bool, float]:
        lifted = place(feed, item.score + _FRIEND * COMMENT_PHOTO) <= k // 2
        return lifted, -item.posted_ms if lifted else item.score

    below = [item for item in feed.items[k:] if feed.as_of_ms - item.posted_ms > OLD_MS]
    return max((item for item in below if _is_public(chronicle.posts.get(item.post))), key=use, default=None)


def _is_public(post: Post | None) -> bool:
    return post is not None and post.audience == "everyone"


def helper(relations: Mapping[str, Relation], feed: Feed, but: Collection[str]) -> str | None:
    """Choose a friend who takes up an old post: one with no post near the top, so that the effect is the act's."""
    friends = sorted(person for person, relation in relations.items() if relation == "friend" and person not in but)
    places = {item.author: place for place, item in reversed(list(enumerate(feed.items)))}
    return max(friends, key=lambda friend: places.get(friend, len(feed.items)), default=None)


def likeable(
    feed: Feed, relations: Mapping[str, Relation], touched: Collection[str], but: Collection[str]
) -> dict[str, tuple[str, ...]]:
    """List followed authors, each with three posts in the feed that the reader has not reacted to yet."""
    posts: dict[str, list[str]] = {}
    for item in feed.items:
        if relations.get(item.author) == "follow" and item.author not in but and item.post not in touched:
            posts.setdefault(item.author, []).append(item.post)
    return {author: tuple(own[:LIKES]) for author, own in posts.items() if len(own) >= LIKES}


def fancy(feed: Feed, candidates: Mapping[str, tuple[str, ...]], affinities: Mapping[str, float], k: int) -> Fancy:
    """Choose the author and the form of a new post that climb furthest within sight once the reader cares more.

    Args:
        feed: as it stands.
        candidates: authors with the posts to like; not empty.
        affinities: how much the reader cares about each now.
        k: how many posts are in sight.

    """

    def climb(choice: Fancy) -> tuple[bool, int]:
        affinity, weight = affinities[choice.author], WEIGHTS[choice.form]
        start, end = place(feed, affinity * weight), place(feed, (affinity + LEARNED) * weight)
        return end <= k, start - end

    choices = [Fancy(author, form, liked) for author, liked in candidates.items() for form in WEIGHTS]
    return max(choices, key=climb)


def place(feed: Feed, score: float) -> int:
    """Tell the place, from 1, that a score would have in a feed."""
    return 1 + sum(item.score > score for item in feed.items)


def loudest(feed: Feed, k: int, but: Collection[str]) -> str | None:
    """Choose the author with most posts among the first k, the better placed of two; None where all are left out."""
    counts = Counter(item.author for item in feed.items[:k] if item.author not in but)
    return counts.most_common(1)[0][0] if counts else None


def best(feed: Feed, but: Collection[str]) -> Item | None:
    """Choose the best post whose author is not left out."""
    return next((item for item in feed.items if item.author not in but), None)
