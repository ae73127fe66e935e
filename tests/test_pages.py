"""Pages that follow a cursor."""

import itertools
import math
import random
from collections import Counter
from collections.abc import AsyncIterator
from typing import Any

import pytest

from service.engine import Engine
from service.errors import CursorExpired, CursorInvalid
from service.feed import ranker
from service.feed.types import FeedAnswer, FeedRequest
from service.settings import BUILT_IN_POLICY
from service.store import keys
from tests.engines import running, send

NOW_MS = 1_777_885_200_000
MINUTE_MS = 60_000
POSTS = [f"bed-{number}" for number in range(25)]


def event(identity: str, event_type: str, actor: str, at_ms: int = NOW_MS - MINUTE_MS, **more: Any) -> dict[str, Any]:
    return {"id": identity, "type": event_type, "at": at_ms, "actor": actor, **more}


def post(name: str, author: str, minutes_ago: int, **more: Any) -> dict[str, Any]:
    return event(f"post-{name}", "post", author, NOW_MS - minutes_ago * MINUTE_MS, post=name, **more)


@pytest.fixture
async def engine(redis_db: str) -> AsyncIterator[Engine]:
    """Joel follows mina, ada and lin, who published 25 posts between them."""
    async with running(redis_db, BUILT_IN_POLICY.read_text()) as engine:
        authors = ("mina", "ada", "lin")
        events = [event(f"tie-{name}", "tie", "joel", target=name, relation="follow") for name in authors]
        events += [post(name, authors[place % 3], 10 + 30 * place) for place, name in enumerate(POSTS)]
        await send(engine, events, NOW_MS)
        yield engine


async def page(engine: Engine, cursor: str | None = None, **asked: Any) -> FeedAnswer:
    request = FeedRequest("joel", **({"k": 10, "budget_ms": 60_000.0, "cursor": cursor} | asked))
    return await engine.feed(request, NOW_MS)


def posts_of(answer: FeedAnswer) -> list[str]:
    return [item.post for item in answer.items]


async def test_pages_hold_every_post_once_in_order(engine: Engine) -> None:
    """Three pages of ten give the 25 posts, each once; as they differ in age only, the newest come first."""
    first = await page(engine)
    second = await page(engine, first.next)
    third = await page(engine, second.next)
    assert posts_of(first) + posts_of(second) + posts_of(third) == POSTS
    assert third.next is None
    assert {answer.as_of_ms for answer in (first, second, third)} == {NOW_MS}
    assert all(answer.complete for answer in (first, second, third))


async def test_a_page_read_again_is_the_same(engine: Engine) -> None:
    """A cursor read twice gives the same posts, although a better one has arrived in between."""
    first = await page(engine)
    second = await page(engine, first.next)
    await send(engine, [post("late", "mina", 1, form="video")], NOW_MS)
    again = await page(engine, first.next)
    assert posts_of(again) == posts_of(second)
    assert again.next == second.next


async def test_what_arrives_in_between_repeats_and_skips_nothing(engine: Engine) -> None:
    """A post that climbs above the first page is not served twice; one that falls is still served."""
    first = await page(engine)
    await send(
        engine,
        [
            event("share", "interaction", "ada", NOW_MS, post=POSTS[20], kind="share"),
            event("again", "interaction", "ada", NOW_MS, post=POSTS[0], kind="share"),
            post("late", "mina", 1),
        ],
        NOW_MS,
    )
    second = await page(engine, first.next)
    third = await page(engine, second.next)
    assert posts_of(second)[0] == POSTS[20]
    served = posts_of(first) + posts_of(second) + posts_of(third)
    assert sorted(served) == sorted([*POSTS, "late"])


async def test_what_may_no_longer_be_seen_leaves_later_pages(engine: Engine) -> None:
    """A withdrawn post and the posts of someone muted meanwhile are not on the next page."""
    first = await page(engine)
    await send(
        engine,
        [
            event("w", "withdraw", "moderator", post=POSTS[12]),
            event("m", "tie", "joel", NOW_MS, target="ada", relation="mute"),
        ],
        NOW_MS,
    )
    second = await page(engine, first.next)
    left = [name for place, name in enumerate(POSTS) if place >= 10 and place % 3 != 1 and place != 12]
    assert posts_of(second) == left[:10]


async def test_a_page_served_before_drops_what_may_no_longer_be_seen(engine: Engine) -> None:
    """A page that is read again leaves out a post withdrawn since."""
    first = await page(engine)
    second = await page(engine, first.next)
    await send(engine, [event("w", "withdraw", "moderator", post=POSTS[12])], NOW_MS)
    assert posts_of(await page(engine, first.next)) == [name for name in posts_of(second) if name != POSTS[12]]


async def test_newest_first_has_pages_too(engine: Engine) -> None:
    """Pages by posting time hold every post once, without scores."""
    first = await page(engine, order="newest")
    second = await page(engine, first.next, order="newest")
    third = await page(engine, second.next, order="newest")
    assert posts_of(first) + posts_of(second) + posts_of(third) == POSTS
    assert [item.score for item in first.items] == [None] * 10


class Meanwhile:
    """Writes between pages: reactions, new posts, withdrawals, and authors who block the reader and unblock again."""

    def __init__(self, engine: Engine, rng: random.Random) -> None:
        self._engine = engine
        self._rng = rng
        self._number = 0
        self.standing = dict(zip(POSTS, itertools.cycle(("mina", "ada", "lin")), strict=False))
        self.blocking: set[str] = set()

    def visible(self) -> set[str]:
        """List what joel may see now."""
        return {name for name, author in self.standing.items() if author not in self.blocking}

    async def write(self) -> None:
        """Write one to three of them; later ones of one person have later times."""
        for _ in range(self._rng.randrange(1, 4)):
            await self._rng.choice((self._react, self._react, self._publish, self._withdraw, self._block))()

    async def _send(self, event_type: str, actor: str, **more: Any) -> None:
        self._number += 1
        at_ms = NOW_MS - 100_000 + self._number
        await send(self._engine, [event(f"m{self._number}", event_type, actor, at_ms, **more)], NOW_MS)

    async def _react(self) -> None:
        kind = self._rng.choice(("like", "share", "comment"))
        await self._send("interaction", "lin", post=self._rng.choice(list(self.standing)), kind=kind)

    async def _publish(self) -> None:
        name, author = f"new-{self._number}", self._rng.choice(("mina", "ada", "lin"))
        await self._send("post", author, post=name)
        self.standing[name] = author

    async def _withdraw(self) -> None:
        if len(self.standing) > 20:
            name = self._rng.choice(list(self.standing))
            await self._send("withdraw", self.standing.pop(name), post=name)

    async def _block(self) -> None:
        author = self._rng.choice(("mina", "ada"))
        relation = "none" if author in self.blocking else "block"
        await self._send("tie", author, target="joel", relation=relation)
        self.blocking ^= {author}


@pytest.mark.parametrize("order", ["ranked", "newest"])
async def test_random_interleavings_repeat_and_skip_nothing(engine: Engine, order: Any) -> None:
    """In 250 sessions an order, whatever is written between pages: nothing stands on two of them, nothing is shown that
    may not be seen at the time, and all that could be seen at the time of every page is there.
    """
    rng = random.Random(4)
    meanwhile = Meanwhile(engine, rng)
    for _ in range(250):
        served: list[str] = []
        always, cursor, pages = meanwhile.visible(), None, 0
        while pages == 0 or cursor:
            answer = await page(engine, cursor, k=rng.choice((3, 7, 20)), order=order)
            assert set(posts_of(answer)) <= meanwhile.visible()
            always &= meanwhile.visible()
            served += posts_of(answer)
            cursor, pages = answer.next, pages + 1
            await meanwhile.write()
        assert len(set(served)) == len(served)
        assert always <= set(served)


async def test_a_foreign_or_changed_cursor_is_refused(engine: Engine) -> None:
    """A cursor works for its reader, order and policy only, and not when a character is changed."""
    cursor = (await page(engine)).next
    assert cursor is not None
    changed = ("A" if cursor[30] != "A" else "B").join((cursor[:30], cursor[31:]))
    for request in (
        FeedRequest("mina", cursor=cursor),
        FeedRequest("joel", cursor=cursor, order="newest"),
        FeedRequest("joel", cursor=cursor, policy="other"),
        FeedRequest("joel", cursor=changed),
        FeedRequest("joel", cursor="not a cursor"),
        FeedRequest("joel", cursor="é"),
        FeedRequest("joel", cursor=""),
    ):
        with pytest.raises(CursorInvalid, match="cursor"):
            await engine.feed(request, NOW_MS)


async def test_pages_that_are_no_longer_kept_are_said_to_be(engine: Engine) -> None:
    """Ten minutes after the last page its cursor is expired; until then its key has that lifetime."""
    first = await page(engine)
    assert await engine.store.connection.read("KEYS", "page:*") == []
    assert len((await page(engine, first.next)).items) == 10
    cursor = (await page(engine, first.next)).next
    stored = await engine.store.connection.read("KEYS", "page:*")
    assert len(stored) == 1
    assert 590_000 < await engine.store.connection.read("PTTL", stored[0]) <= 600_000
    await engine.store.connection.read("DEL", stored[0])
    with pytest.raises(CursorExpired, match="no longer kept"):
        await page(engine, cursor)
    assert keys.key("page", stored[0][-8:]) == stored[0]
    request = FeedRequest("joel", k=10, budget_ms=60_000.0, cursor=first.next)
    assert len((await engine.feed(request, NOW_MS + 10 * MINUTE_MS)).items) == 10
    with pytest.raises(CursorExpired, match="no longer kept"):
        await engine.feed(request, NOW_MS + 10 * MINUTE_MS + 1)


async def test_a_long_first_page_is_kept_by_the_store(engine: Engine, monkeypatch: pytest.MonkeyPatch) -> None:
    """Where a cursor can't hold all that its page served, the store does, and the pages go on as ever."""
    monkeypatch.setattr(ranker, "CARRIED", 9)
    first = await page(engine)
    assert len(await engine.store.connection.read("KEYS", "page:*")) == 1
    second = await page(engine, first.next)
    assert posts_of(first) + posts_of(second) == POSTS[:20]
    assert len(first.next or "") < len("x" * 8 * 10)


async def test_authors_stand_apart_across_pages(redis_db: str) -> None:
    """An author gap of one holds within a page and from one page to the next, as long as there are two authors."""
    policy = BUILT_IN_POLICY.read_text().replace("author_gap = 0", "author_gap = 1")
    async with running(redis_db, policy) as engine:
        events = [event(f"tie-{name}", "tie", "joel", target=name, relation="follow") for name in ("mina", "ada")]
        events += [post(f"m{number}", "mina", 1 + number) for number in range(5)]
        events += [post(f"a{number}", "ada", 100 + number) for number in range(5)]
        await send(engine, events, NOW_MS)
        first = await page(engine, k=5)
        second = await page(engine, first.next, k=5)
        expected = [name for number in range(5) for name in (f"m{number}", f"a{number}")]
        assert posts_of(first) + posts_of(second) == expected


async def test_randomness_agrees_between_pages_and_can_be_switched_off(redis_db: str) -> None:
    """With a temperature every page continues one drawn order; `explore` off gives the order of the scores."""
    policy = BUILT_IN_POLICY.read_text().replace("temperature = 0.0", "temperature = 2.0")
    async with running(redis_db, policy) as engine:
        events = [event("tie", "tie", "joel", target="mina", relation="follow")]
        events += [post(name, "mina", 1 + place) for place, name in enumerate(POSTS)]
        await send(engine, events, NOW_MS)
        orders = set()
        for _ in range(5):
            first = await page(engine)
            second = await page(engine, first.next)
            third = await page(engine, second.next)
            served = posts_of(first) + posts_of(second) + posts_of(third)
            assert sorted(served) == sorted(POSTS)
            orders.add(tuple(served))
        assert len(orders) == 5
        assert posts_of(await page(engine, explore=False)) == POSTS[:10]


async def test_the_first_place_is_drawn_in_proportion_to_the_scores(redis_db: str) -> None:
    """Over 2,000 sessions each post comes first as often as its score^(1/temperature) says, within 5 standard errors.

    R. Plackett, "The Analysis of Permutations", Applied Statistics 24, 1975; drawn by Gumbel noise (Kool, van Hoof and
    Welling, ICML 2019).
    """
    policy = BUILT_IN_POLICY.read_text().replace("temperature = 0.0", "temperature = 0.5")
    kinds = {"bed-1": "like", "bed-2": "comment", "bed-3": "share", "bed-4": "comment.photo"}
    async with running(redis_db, policy) as engine:
        events = [event("tie", "tie", "joel", target="mina", relation="follow")]
        events += [post(name, "lin", 60, form="note") for name in kinds]
        events += [event(f"i-{name}", "interaction", "mina", post=name, kind=kind) for name, kind in kinds.items()]
        await send(engine, events, NOW_MS)
        scores = {item.post: item.score or 0.0 for item in (await page(engine, explore=False)).items}
        chances = {name: score**2 / sum(one**2 for one in scores.values()) for name, score in scores.items()}
        first = Counter([posts_of(await page(engine, k=4))[0] for _ in range(2_000)])
        for name, chance in chances.items():
            assert abs(first[name] - 2_000 * chance) <= 5 * math.sqrt(2_000 * chance * (1 - chance)), (first, chances)


async def test_newest_first_knows_no_history(redis_db: str) -> None:
    """Two readers with equal ties and unlike histories get equal answers newest first, and unlike ranked ones."""
    async with running(redis_db, BUILT_IN_POLICY.read_text()) as engine:
        events = [
            event(f"tie-{reader}-{name}", "tie", reader, target=name, relation="follow")
            for reader in ("joel", "zoe")
            for name in ("mina", "ada")
        ]
        events += [post(f"bed-{n}", ("mina", "ada")[n % 2], n) for n in range(8)]
        events += [event(f"like-{n}", "interaction", "zoe", post=f"bed-{n}", kind="share") for n in (1, 3)]
        events += [
            event("seen", "seen", "zoe", posts=["bed-0"]),
            event("hide", "interaction", "zoe", post="bed-2", kind="hide"),
        ]
        await send(engine, events, NOW_MS)
        answers = []
        for reader in ("joel", "zoe"):
            request = FeedRequest(reader, k=10, budget_ms=60_000.0, order="newest")
            answers.append([(item.post, item.score) for item in (await engine.feed(request, NOW_MS)).items])
        assert answers[0] == answers[1] == [(f"bed-{n}", None) for n in range(8)]
        ranked = [await engine.feed(FeedRequest(one, k=10, budget_ms=60_000.0), NOW_MS) for one in ("joel", "zoe")]
        assert posts_of(ranked[0]) != posts_of(ranked[1])
