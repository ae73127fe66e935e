"""What counts most for everybody, and feeds of some forms and topics only, against brute force."""

from typing import Any

import pytest

from service.engine import Engine
from service.errors import CursorInvalid
from service.feed import board
from service.feed.types import ExplainRequest, FeedRequest, PopularAnswer, PopularRequest
from service.settings import BUILT_IN_POLICY
from tests.engines import ranked, running, send
from tests.oracle import Oracle, assert_same_feed
from tests.worlds import World, random_world

FORMS = (("photo",), ("note", "video"), ("none-such",))
TOPICS = (("beans",), ("süß",), ("leeks", "süß"))


async def popular(engine: Engine, world: World, **asked: Any) -> PopularAnswer:
    request = PopularRequest(**({"k": 200} | asked))
    return await engine.popular(request, world.now_ms)


def listed(answer: PopularAnswer) -> list[tuple[str, float | None]]:
    return [(item.post, item.score) for item in answer.items]


def chosen(oracle: Oracle, feed: Any, forms: tuple[str, ...], topics: tuple[str, ...]) -> list[tuple[str, Any]]:
    """Leave only posts of the forms and topics, both where both are given."""
    return [
        (post, score)
        for post, score in feed
        if not forms or oracle.posts[post].form in forms
        if not topics or set(oracle.posts[post].topics) & set(topics)
    ]


@pytest.mark.parametrize("seed", range(8))
async def test_popular_posts_are_brute_forces(redis_db: str, seed: int) -> None:
    """For nobody and for every reader, now and later, whole or of some forms and topics, in random worlds."""
    world = random_world(seed + 300, people=6, posts=12, events=150)
    async with running(redis_db, world.policy_toml) as engine:
        await send(engine, world.events, world.now_ms)
        oracle = world.oracle()
        for reader in (None, *world.people):
            for t_ms in (world.now_ms, world.now_ms + 86_400_000):
                answer = await popular(engine, world, reader=reader, as_of_ms=t_ms)
                assert answer.complete
                assert_same_feed(oracle.popular(t_ms, reader), listed(answer))
        for forms, topics in zip(FORMS, TOPICS, strict=True):
            everything = oracle.popular(world.now_ms)
            for one in ({"forms": forms}, {"topics": topics}, {"forms": forms, "topics": topics}):
                expected = chosen(oracle, everything, one.get("forms", ()), one.get("topics", ()))
                assert_same_feed(expected, listed(await popular(engine, world, **one)))


@pytest.mark.parametrize("seed", range(4))
async def test_feeds_of_some_forms_and_topics_are_brute_forces(redis_db: str, seed: int) -> None:
    """A feed of some forms or topics is the whole feed without all others, ranked and newest first."""
    world = random_world(seed + 400, people=5, posts=12, events=120)
    async with running(redis_db, world.policy_toml) as engine:
        await send(engine, world.events, world.now_ms)
        oracle = world.oracle()
        for reader in world.people:
            whole, newest = (oracle.feed(reader, None, world.now_ms, order) for order in ("ranked", "newest"))
            for forms, topics in zip(FORMS, TOPICS, strict=True):
                assert_same_feed(
                    chosen(oracle, whole, forms, ()), await ranked(engine, reader, world.now_ms, forms=forms)
                )
                assert_same_feed(
                    chosen(oracle, whole, (), topics), await ranked(engine, reader, world.now_ms, topics=topics)
                )
                both = await ranked(engine, reader, world.now_ms, forms=forms, topics=topics, order="newest")
                assert both == chosen(oracle, newest, forms, topics)


async def test_a_short_board_is_not_called_complete(redis_db: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """Where posts beyond the listed could stand among the best, the answer does not claim to be complete."""
    monkeypatch.setattr(board, "LISTED", 2)
    now_ms = 1_777_885_200_000
    posts = [
        {"id": f"p{n}", "type": "post", "at": now_ms - n, "actor": "mina", "post": f"bed {n}", "form": "note"}
        for n in range(6)
    ]
    world = random_world(1, people=3, posts=2, events=1)
    async with running(redis_db, world.policy_toml) as engine:
        await send(engine, posts, now_ms)
        answer = await engine.popular(PopularRequest(k=5), now_ms)
        assert (len(answer.items), answer.complete) == (2, False)
        like = {"id": "l", "type": "interaction", "at": now_ms, "actor": "joel", "post": "bed 5", "kind": "share"}
        await send(engine, [like], now_ms)
        answer = await engine.popular(PopularRequest(k=1), now_ms + 1_000)
        assert ([item.post for item in answer.items], answer.complete) == (["bed 5"], True)


async def test_a_cursor_is_good_for_its_own_forms_and_topics_only(redis_db: str) -> None:
    """Pages go on with the same forms and topics, in any order; with others the cursor is refused."""
    now_ms = 1_777_885_200_000
    events = [{"id": "t", "type": "tie", "at": now_ms, "actor": "joel", "target": "mina", "relation": "follow"}]
    events += [
        {
            "id": f"p{n}",
            "type": "post",
            "at": now_ms - n,
            "actor": "mina",
            "post": f"bed {n}",
            "form": ("note", "photo", "video")[n % 3],
            "topics": ["beans"],
        }
        for n in range(9)
    ]
    world = random_world(1, people=3, posts=2, events=1)
    async with running(redis_db, world.policy_toml) as engine:
        await send(engine, events, now_ms)
        asked = {"k": 4, "budget_ms": 60_000.0, "explore": False, "topics": ("beans",)}
        first = await engine.feed(FeedRequest("joel", forms=("note", "photo"), **asked), now_ms)
        rest = FeedRequest("joel", forms=("photo", "note"), cursor=first.next, **asked)
        second = await engine.feed(rest, now_ms)
        posts = [item.post for page in (first, second) for item in page.items]
        assert sorted(posts) == sorted(f"bed {n}" for n in range(9) if n % 3 != 2)
        for other in ({"forms": ("note",)}, {"forms": ()}, {"forms": ("note", "photo"), "topics": ()}):
            with pytest.raises(CursorInvalid, match="forms or topics"):
                await engine.feed(FeedRequest("joel", cursor=first.next, **(asked | other)), now_ms)


@pytest.mark.parametrize("seed", range(6))
async def test_the_reason_is_the_strongest_edge_of_somebody_known(redis_db: str, seed: int) -> None:
    """With `why`, each post has the edge whose product is greatest among those the explanation lists."""
    world = random_world(seed + 500, people=6, posts=9, events=120)
    async with running(redis_db, world.policy_toml) as engine:
        await send(engine, world.events, world.now_ms)
        oracle = world.oracle()
        for reader in world.people:
            request = FeedRequest(reader, k=200, budget_ms=60_000.0, explore=False, why=True)
            for item in (await engine.feed(request, world.now_ms)).items:
                parts = [one for one in oracle.parts(reader, item.post, world.now_ms) if one["source"] != "crowd"]
                greatest = max((one["product"] for one in parts), default=0.0)
                if greatest <= 0.0:
                    assert item.why is None
                    continue
                assert item.why is not None
                assert item.why.product == pytest.approx(greatest, rel=1e-9)
                assert item.why.age_ms == max(0, world.now_ms - item.why.at_ms)
                told = (item.why.actor, item.why.kind, item.why.at_ms)
                assert told in [(one["actor"], one["kind"], one["at"]) for one in parts if one["product"] > 0.0]
                assert item.why.relation == oracle.relation(reader, item.why.actor)


async def test_a_hidden_post_is_dropped_until_the_hiding_is_taken_back(redis_db: str) -> None:
    """`hide` drops the post and lowers its author until `retract` restores both; newest first knows no profile."""
    now_ms = 1_777_885_200_000
    hours_ago = now_ms - 3_600_000
    events = [
        {"id": "t", "type": "tie", "at": hours_ago, "actor": "joel", "target": "mina", "relation": "friend"},
        *(
            {"id": f"p{n}", "type": "post", "at": hours_ago, "actor": "mina", "post": f"bed {n}", "form": "note"}
            for n in (1, 2)
        ),
    ]
    hide = {"id": "h", "type": "interaction", "at": now_ms, "actor": "joel", "post": "bed 1", "kind": "hide"}
    async with running(redis_db, BUILT_IN_POLICY.read_text()) as engine:
        await send(engine, events, now_ms)
        before = dict(await ranked(engine, "joel", now_ms))
        await send(engine, [hide], now_ms)
        after = dict(await ranked(engine, "joel", now_ms))
        assert set(before) == {"bed 1", "bed 2"}
        assert set(after) == {"bed 2"}
        assert after["bed 2"] == pytest.approx((before["bed 2"] or 0.0) / 2, rel=1e-9)  # affinity 2 - 1
        assert [post for post, _ in await ranked(engine, "joel", now_ms, order="newest")] == ["bed 1", "bed 2"]
        explained = await engine.explain(ExplainRequest("joel", "bed 1"), now_ms)
        assert [(one.name, one.value) for one in explained.factors] == [("seen", 1.0), ("hidden", 0.0)]
        assert explained.score == 0.0
        await send(engine, [{"id": "r", "type": "retract", "at": now_ms, "actor": "joel", "event": "h"}], now_ms)
        assert dict(await ranked(engine, "joel", now_ms)) == before
