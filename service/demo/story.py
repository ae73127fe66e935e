"""The story: a few events arrive, one beat after another, and the feed answers."""

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

from service.demo import casting
from service.demo.answers import Feed
from service.demo.community import DAY_MS
from service.demo.reasons import age_in_words
from service.demo.scene import Scene


@dataclass(frozen=True, slots=True)
class Beat:
    """One step of the story.

    Args:
        name: in one word.
        title: in one line.
        happens: what arrives, in a sentence.
        why: what follows from it and why, in a sentence or two.
        events: what was sent, in order.
        before: the feed that `after` is compared with.
        after: the feed then.
        about: posts that the beat is about.

    """

    name: str
    title: str
    happens: str
    why: str
    events: list[dict[str, Any]]
    before: Feed
    after: Feed
    about: frozenset[str]


@dataclass(frozen=True, slots=True)
class Skipped:
    """A beat that this reader's feed has no cast for."""

    name: str
    reason: str


def tell(scene: Scene, feed: Feed) -> Iterator[Beat | Skipped]:
    """Play the beats one by one; each begins with the feed that the one before ended with.

    Args:
        scene: where.
        feed: as it stands at the beginning.

    """
    spent: set[str] = set()
    for play in BEATS:
        outcome = play(scene, feed, spent)
        yield outcome
        if isinstance(outcome, Beat):
            feed = outcome.after


def renew(scene: Scene, before: Feed, spent: set[str]) -> Beat | Skipped:
    """Let a friend comment on a post that has faded."""
    old = casting.old_post(before, scene.chronicle, scene.k)
    friend = casting.helper(scene.relations, before, {old.author} if old else ())
    if old is None or friend is None:
        return Skipped("renewal", "no friend, or no old post below the ones in sight")
    spent |= {old.author, friend}
    event = scene.happen("interaction", friend, post=old.post, kind="comment.photo")
    after = scene.feed()
    fresh = scene.newest_part(old.post, friend)
    return Beat(
        name="renewal",
        title="A neighbour takes up an old post",
        happens=f"Your friend {friend} answers {old.post}, {age_in_words(before.as_of_ms - old.posted_ms)} old, "
        "with a photo.",
        why=f"A fresh edge by a friend: affinity {fresh.affinity:.2f} x weight {fresh.weight:g} adds "
        f"{fresh.product:.2f} to the {old.score:.2f} that were left. {_moved(before, after, old.post)}",
        events=[event],
        before=before,
        after=after,
        about=frozenset([old.post]),
    )


def learn(scene: Scene, before: Feed, spent: set[str]) -> Beat | Skipped:
    """Let the reader like what somebody wrote, and see that somebody's new post climb."""
    candidates = casting.likeable(before, scene.relations, scene.touched, spent)
    if not candidates:
        return Skipped("learning", "nobody whom this reader follows has three posts to like")
    affinities = {author: scene.affinity(author, posts[0]) for author, posts in candidates.items()}
    choice = casting.fancy(before, candidates, affinities, scene.k)
    spent.add(choice.author)
    post = _next_post(scene, choice.author)
    topic = post.rpartition("-")[0].rpartition("-")[2]
    events = [scene.happen("post", choice.author, post=post, form=choice.form, topics=[topic])]
    between = scene.feed()
    events += [scene.happen("interaction", scene.reader, post=liked, kind="like") for liked in choice.liked]
    events.append(scene.happen("interaction", scene.reader, post=choice.liked[0], kind="share"))
    after = scene.feed()
    then, now = affinities[choice.author], scene.affinity(choice.author, post)
    return Beat(
        name="learning",
        title="You take a liking to someone",
        happens=f"{choice.author} posts a {choice.form}, {post}: it enters at {between.rank(post)}. "
        f"You like {casting.LIKES} older posts by {choice.author}, and share one.",
        why=f"A like adds 0.1 to how much you care about the author, a share 0.5: affinity {then:.2f} to {now:.2f}. "
        f"{_moved(between, after, post)} Whatever {choice.author} posted or reacted to gains with it.",
        events=events,
        before=between,
        after=after,
        about=frozenset([post]),
    )


def mute(scene: Scene, before: Feed, spent: set[str]) -> Beat | Skipped:
    """Let the reader mute somebody who has a post in sight."""
    author = casting.loudest(before, scene.k, spent)
    if author is None:
        return Skipped("mute", "nobody in sight who has no other part")
    spent.add(author)
    event = scene.happen("tie", scene.reader, target=author, relation="mute")
    scene.relations[author] = "mute"
    after = scene.feed()
    gone = [item.post for item in before.items if item.author == author]
    fell = sum((after.score(item.post) or 0.0) < item.score - 0.01 for item in before.items if item.author != author)
    others = f" {_posts(fell)} by others lost the points that {author} had added." if fell else ""
    return Beat(
        name="mute",
        title="You mute someone",
        happens=f"You mute {author}.",
        why=f"A mute counts from the next read on: {len(gone)} of the first {len(before.items)} posts are out at "
        f"once.{others}",
        events=[event],
        before=before,
        after=after,
        about=frozenset(gone),
    )


def withdraw(scene: Scene, before: Feed, spent: set[str]) -> Beat | Skipped:
    """Let an author take the best post away."""
    best = casting.best(before, spent) or casting.best(before, ())
    if best is None:
        return Skipped("withdrawal", "the feed is empty")
    event = scene.happen("withdraw", best.author, post=best.post)
    after = scene.feed()
    return Beat(
        name="withdrawal",
        title="An author takes a post back",
        happens=f"{best.author} withdraws {best.post}, number {before.rank(best.post)} of your feed.",
        why="A withdrawn post is in nobody's feed from the next read on, and asking why it was there answers 404.",
        events=[event],
        before=before,
        after=after,
        about=frozenset([best.post]),
    )


def fade(scene: Scene, before: Feed, _spent: set[str]) -> Beat | Skipped:
    """Read the feed as it will stand tomorrow."""
    if not before.items:
        return Skipped("tomorrow", "the feed is empty")
    after = scene.feed(as_of_ms=scene.clock() + DAY_MS)
    first = before.items[0]
    left = (after.score(first.post) or 0.0) / first.score
    return Beat(
        name="tomorrow",
        title="The same feed, tomorrow",
        happens="Nothing arrives; the feed is read with as_of 24 hours ahead.",
        why=f"Two half-lives of 12 h leave a quarter of each edge: {left:.3f} of the best score. All edges fade alike, "
        "so little moves until something fresh arrives; what you learned of people fades by half in 30 days, which "
        "may swap posts that stand close.",
        events=[],
        before=before,
        after=after,
        about=frozenset(),
    )


BEATS: tuple[Callable[[Scene, Feed, set[str]], Beat | Skipped], ...] = (renew, learn, mute, withdraw, fade)


def _next_post(scene: Scene, author: str) -> str:
    """Name the author's next post, on the topic of the latest one."""
    own = [post for post in scene.chronicle.posts.values() if post.author == author]
    topic = own[-1].topic
    return f"{author}-{topic}-{1 + sum(post.topic == topic for post in own)}"


def _moved(before: Feed, after: Feed, post: str) -> str:
    return f"It goes from {before.rank(post)} to {after.rank(post)}."


def _posts(count: int) -> str:
    return "1 post" if count == 1 else f"{count} posts"
