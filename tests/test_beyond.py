"""Posts from beyond a reader's ties, against brute force."""

from typing import Any

import pytest
import tomli_w

from scoring.policy import parse_policy
from service.engine import Engine
from service.feed import board
from service.feed.beyond import Places
from service.feed.shortlist import Found
from service.feed.types import FeedRequest
from tests.engines import running, send
from tests.oracle import Oracle, assert_same_feed
from tests.worlds import World, random_world

NOW_MS = 1_777_885_200_000


def places(share: float, *, fill: bool = False, offset: int = 0, k: int = 10) -> Places:
    text = f'name = "x"\nweights = {{ like = 1 }}\nbeyond = {{ share = {share}, fill = {str(fill).lower()} }}\n'
    return Places(parse_policy(text), offset, k)


def found(kind: str, count: int) -> list[Found]:
    return [Found(f"{kind}{number}".encode(), b"", 1.0, 1.0) for number in range(count)]


def mixed(ties: int, beyond: int, share: float, **more: Any) -> str:
    return " ".join(one.hash.decode() for one in places(share, **more).mixed(found("t", ties), found("b", beyond)))


def test_the_share_holds_for_every_beginning() -> None:
    """Of the first n places, n times the share, rounded down, are for posts from beyond, over all pages."""
    for share in (0.0, 0.1, 0.25, 1 / 3, 0.5, 0.7, 1.0):
        marked = [places(share).beyond(place) for place in range(300)]
        assert all(sum(marked[:n]) == int(n * share + 1e-9) for n in range(300))


def test_both_kinds_in_their_places() -> None:
    """A quarter from beyond is every fourth place; on the next page the count goes on."""
    assert mixed(9, 9, 0.25, k=8) == "t0 t1 t2 b0 t3 t4 t5 b1"
    assert mixed(9, 9, 0.25, k=3, offset=2) == "t0 b0 t1"
    assert mixed(9, 9, 0.0, k=3) == "t0 t1 t2"
    assert mixed(9, 9, 1.0, k=3) == "b0 b1 b2"


def test_where_one_kind_runs_out() -> None:
    """Ties take any place; posts from beyond take more than their share only where they are to fill."""
    assert mixed(4, 1, 0.5, k=5) == "t0 b0 t1 t2 t3"
    assert mixed(2, 9, 0.25, k=8) == "t0 t1"
    assert mixed(2, 9, 0.25, k=6, fill=True) == "t0 t1 b0 b1 b2 b3"
    assert mixed(0, 9, 0.0, k=3, fill=True) == "b0 b1 b2"
    assert mixed(0, 9, 0.0, k=3) == ""
    assert places(0.25, k=8).wanted(ties=8) == 2
    assert places(0.0, k=8, fill=True).wanted(ties=3) == 5


def expected_page(world: World, oracle: Oracle, reader: str, share: float, *, fill: bool) -> list[tuple[str, Any]]:
    """Mix brute force's two lists by the rule in words."""
    ties = list(oracle.feed(reader, None, world.now_ms))
    others: list[tuple[str, Any]] = list(oracle.beyond(reader, world.now_ms))
    page: list[tuple[str, Any]] = []
    while ties or others:
        own = int((len(page) + 1) * share + 1e-9) > int(len(page) * share + 1e-9)
        if others and (own or (fill and not ties)):
            page.append(others.pop(0))
        elif ties:
            page.append(ties.pop(0))
        else:
            break
    return page


async def whole(engine: Engine, reader: str, k: int, now_ms: int) -> tuple[list[tuple[str, Any]], list[str | None]]:
    """Read a feed page by page; every page must be complete."""
    cursor, posts, sources = None, [], []
    for _ in range(100):
        request = FeedRequest(reader, k=k, budget_ms=60_000.0, explore=False, cursor=cursor)
        answer = await engine.feed(request, now_ms)
        assert answer.complete
        posts += [(item.post, item.score) for item in answer.items]
        sources += [item.source for item in answer.items]
        cursor = answer.next
        if cursor is None:
            return posts, sources
    raise AssertionError("pages without end")


@pytest.mark.parametrize("seed", range(8))
@pytest.mark.parametrize(("share", "fill"), [(0.0, True), (0.25, False), (0.5, True), (1.0, False)])
async def test_feeds_that_go_beyond_are_brute_forces(redis_db: str, seed: int, share: float, *, fill: bool) -> None:
    """For every reader, in one page and in pages of three, scores and places are those of the two lists mixed."""
    world = random_world(seed + 600, people=6, posts=12, events=120)
    policy = world.policy | {"beyond": {"share": share, "fill": fill}}
    async with running(redis_db, tomli_w.dumps(policy)) as engine:
        await send(engine, world.events, world.now_ms)
        oracle = world.oracle()
        for reader in [*world.people, "nobody knows"]:
            page = expected_page(world, oracle, reader, share, fill=fill)
            for k in (3, 200):
                actual, sources = await whole(engine, reader, k, world.now_ms)
                assert sorted(post for post, _ in actual) == sorted(post for post, _ in page)
                assert sources == ["tie" if oracle.eligible(reader, post) else "beyond" for post, _ in actual]
                for kind in ("tie", "beyond"):
                    mine = [one for one, source in zip(actual, sources, strict=True) if source == kind]
                    theirs = [one for one in page if oracle.eligible(reader, one[0]) == (kind == "tie")]
                    assert_same_feed(theirs, mine)
                assert sources == ["tie" if oracle.eligible(reader, post) else "beyond" for post, _ in page]


async def test_unlisted_posts_keep_an_answer_from_being_complete(
    redis_db: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A board that lists two of six posts can't prove the third, and says so; the first it can."""
    monkeypatch.setattr(board, "LISTED", 2)
    world = random_world(1, people=3, posts=2, events=1)
    policy = world.policy | {"beyond": {"share": 0.0, "fill": True}}
    policy["affinity"] = policy["affinity"] | {"stranger": 0.5}
    events = [
        {"id": f"p{n}", "type": "post", "at": NOW_MS - n, "actor": "mina", "post": f"bed {n}", "form": "note"}
        for n in range(6)
    ]
    events += [
        {"id": f"s{n}", "type": "interaction", "at": NOW_MS, "actor": f"friend {n}", "post": "bed 5", "kind": "share"}
        for n in range(3)
    ]
    async with running(redis_db, tomli_w.dumps(policy)) as engine:
        await send(engine, events, NOW_MS)
        for k, complete in ((1, True), (3, False)):
            answer = await engine.feed(FeedRequest("joel", k=k, budget_ms=60_000.0, explore=False), NOW_MS + 2_000)
            assert (answer.items[0].post, answer.complete) == ("bed 5", complete)
