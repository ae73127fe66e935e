"""What retention lets go leaves by itself, and what one person may fill is bounded."""

from collections.abc import AsyncIterator, Mapping
from dataclasses import replace
from random import Random
from typing import Any

import pytest
import redis
import tomli_w

from service.engine import Engine
from service.store import keys
from service.store.pieces import stamp
from service.store.records import read_record
from tests.engines import DAY_MS, ranked, running, send
from tests.oracle import Oracle, assert_same_feed
from tests.worlds import random_policy

NOW_MS = 1_777_885_200_000
RETENTION_MS = 30 * DAY_MS
LIFE_MS = RETENTION_MS + DAY_MS
POLICY = random_policy(Random(3)) | {
    "freshness": {"curve": "half_life", "half_life": "1h"},
    "affinity": {
        "stranger": 0.5,
        "follow": 1.0,
        "friend": 2.0,
        "ceiling": 9.0,
        "half_life": "1h",
        "gain": {"like": 0.3},
    },
    "weights": {"post": 1.0, "post.note": 1.5, "like": 0.5, "share": 2.0},
}
"""A half-life of an hour: what is older than retention is worth less than 2^-720, forgotten or not."""


@pytest.fixture
async def engine(redis_db: str) -> AsyncIterator[Engine]:
    async with running(redis_db, tomli_w.dumps(POLICY)) as engine:
        yield engine


def limit(
    engine: Engine, *, row_edges: int = 1_000, ties: int = 1_000, seen_posts: int = 1_000, other_events: int = 1_000
) -> None:
    """Let the store keep less for one person."""
    engine.store.limits = replace(
        engine.store.limits, row_edges=row_edges, ties=ties, seen_posts=seen_posts, other_events=other_events
    )
    engine.store._set_up()


def post(number: int, at_ms: int, actor: str = "mina") -> dict[str, Any]:
    return {"id": f"p{number}", "type": "post", "at": at_ms, "actor": actor, "post": f"bed {number}", "form": "note"}


def like(number: int, at_ms: int, actor: str = "ada", on: str = "bed 0") -> dict[str, Any]:
    return {"id": f"l{number}", "type": "interaction", "at": at_ms, "actor": actor, "post": on, "kind": "like"}


def tie(number: int, at_ms: int, target: str, relation: str = "follow", actor: str = "joel") -> dict[str, Any]:
    return {"id": f"t{number}", "type": "tie", "at": at_ms, "actor": actor, "target": target, "relation": relation}


def seen(number: int, at_ms: int, *posts: str) -> dict[str, Any]:
    return {"id": f"s{number}", "type": "seen", "at": at_ms, "actor": "joel", "posts": list(posts)}


async def outcomes(engine: Engine, events: list[dict[str, Any]], now_ms: int) -> list[str]:
    return [verdict.outcome for verdict in await send(engine, events, now_ms)]


async def kept(engine: Engine, name: str, person: str) -> bytes:
    value: bytes | None = await engine.store.connection.read("GET", keys.key(name, engine.store.hasher.hash(person)))
    return value or b""


async def edge_count(engine: Engine, person: str) -> int:
    """Count the edges of a row, beside which ids and authors stand."""
    row = await kept(engine, "row", person)
    assert len(row) == 2 * len(await kept(engine, "ids", person)) == 2 * len(await kept(engine, "who", person))
    return len(row) // 16


def assert_passing(url: str, names: Mapping[str, int]) -> None:
    """Check that every key of these names has a life, up to the given one."""
    with redis.Redis.from_url(url) as client:
        for key in client.scan_iter(count=1000):
            longest_ms = names.get(key.partition(b":")[0].decode())
            if longest_ms:
                assert 0 < client.pttl(key) <= longest_ms, key


async def test_the_edge_of_retention(engine: Engine) -> None:
    """An event exactly as old as retention is applied; one a millisecond older is expired and changes nothing."""
    edge_ms = NOW_MS - RETENTION_MS
    events = [post(0, edge_ms), like(0, edge_ms), tie(0, edge_ms, "mina"), seen(0, edge_ms, "bed 0")]
    assert await outcomes(engine, events, NOW_MS) == ["applied"] * 4
    feed = await ranked(engine, "joel", NOW_MS)
    older = [event | {"at": edge_ms - 1, "id": f"{event['id']} older", "actor": "walt"} for event in events]
    older += [{"id": "w", "type": "withdraw", "at": edge_ms - 1, "actor": "walt", "post": "bed 0"}]
    older += [{"id": "e", "type": "erase", "at": edge_ms - 1, "actor": "mina"}]
    older += [{"id": "r", "type": "retract", "at": edge_ms - 1, "actor": "ada", "event": "l0"}]
    assert await outcomes(engine, older, NOW_MS) == ["expired"] * 7
    assert await ranked(engine, "joel", NOW_MS) == feed
    assert not (await engine.export("walt", NOW_MS))["known"]


async def test_repeats_are_known_as_long_as_they_could_count(engine: Engine) -> None:
    """Within retention a repeat is a duplicate, after it the event is expired: at no time does it count twice."""
    events = [post(0, NOW_MS), like(0, NOW_MS), tie(0, NOW_MS, "mina"), seen(0, NOW_MS, "bed 0")]
    assert await outcomes(engine, events, NOW_MS) == ["applied"] * 4
    for day in range(1, 31):
        now_ms = NOW_MS + day * DAY_MS
        assert await outcomes(engine, events, now_ms) == ["duplicate"] * 4
        fresh = [post(day, now_ms), like(day, now_ms), tie(day, now_ms, f"plot {day}"), seen(day, now_ms, "bed 0")]
        assert await outcomes(engine, fresh, now_ms) == ["applied"] * 4
    assert await outcomes(engine, events, NOW_MS + RETENTION_MS + 1) == ["expired"] * 4


async def test_lists_lose_their_oldest_entries(engine: Engine, redis_db: str) -> None:
    """Over 100 days, what a person's lists hold is what came within retention, and every list has a life."""
    for day in range(100):
        now_ms = NOW_MS + day * DAY_MS
        events = [like(day, now_ms), post(day, now_ms), seen(day, now_ms, f"bed {day}"), tie(day, now_ms, "mina")]
        events += [{"id": f"r{day}", "type": "retract", "at": now_ms, "actor": "ada", "event": f"never {day}"}]
        assert await outcomes(engine, events, now_ms) == ["applied"] * 5
    assert await edge_count(engine, "ada") == 31
    assert await edge_count(engine, "mina") == 31
    for name, person in (("seen", "joel"), ("undo", "ada"), ("heard", "ada"), ("heard", "mina")):
        assert len(await kept(engine, name, person)) == 31 * 16, name
    assert len(await kept(engine, "heard", "joel")) == 2 * 31 * 16
    assert len(await kept(engine, "posts", "mina")) == 100 * 16
    lists = dict.fromkeys(("row", "ids", "who", "seen", "heard", "undo", "post", "wait", "erased"), LIFE_MS)
    assert_passing(redis_db, lists | {"posts": 13 * LIFE_MS})


async def test_a_life_is_kept_where_nothing_is_added(engine: Engine, redis_db: str) -> None:
    """Repeats that only make old edges leave do not let the row stay for good."""
    await send(engine, [like(0, NOW_MS), like(1, NOW_MS + DAY_MS), post(2, NOW_MS, "ada")], NOW_MS + DAY_MS)
    assert await outcomes(engine, [like(1, NOW_MS + DAY_MS)], NOW_MS + RETENTION_MS + 1) == ["duplicate"]
    assert await edge_count(engine, "ada") == 2  # the post's edge came after like 1, so it leaves after it
    assert_passing(redis_db, dict.fromkeys(("row", "ids", "who"), LIFE_MS))


async def test_feeds_are_exact_on_both_sides_of_trimming(engine: Engine) -> None:
    """Through 90 days of events, late ones among them, feeds equal brute force over those within retention."""
    draw, arrived = Random(7), list[dict[str, Any]]()
    people = ("mina", "joel", "ada", "walt")
    for day in range(0, 90, 3):
        now_ms = NOW_MS + day * DAY_MS
        batch = [post(day, now_ms - 5, draw.choice(people))]
        for place, name in enumerate(("mina", "ada")):
            batch.append(tie(10 * day + place, now_ms, name, actor=draw.choice(["joel", "walt"])))
        for place in range(12):
            at_ms = now_ms - draw.choice([0, 60_000, 3_600_000, 5 * DAY_MS, RETENTION_MS])
            on = f"bed {draw.randrange(max(0, day - 9), day + 1, 3)}"
            batch.append(like(100 * day + place, at_ms, draw.choice(people), on))
        back = draw.choice([event for event in batch if event["type"] == "interaction"])
        batch.append({"id": f"r{day}", "type": "retract", "at": now_ms, "actor": back["actor"], "event": back["id"]})
        assert set(await outcomes(engine, batch, now_ms)) == {"applied"}
        arrived = [event for event in arrived + batch if event["type"] == "tie" or now_ms - event["at"] <= RETENTION_MS]
        oracle = Oracle(arrived, POLICY)
        for reader in ("joel", "walt"):
            expected = [(name, score) for name, score in oracle.feed(reader, None, now_ms) if (score or 0) > 1e-12]
            actual = [(name, score) for name, score in await ranked(engine, reader, now_ms) if (score or 0) > 1e-12]
            assert_same_feed(expected, actual)


async def test_a_full_row_refuses_and_empties_with_time(engine: Engine) -> None:
    """Past the most edges of one person, interactions and posts are rejected with the limit, until old ones leave."""
    limit(engine, row_edges=5)
    events = [like(number, NOW_MS + number) for number in range(3)] + [post(number, NOW_MS, "ada") for number in (3, 4)]
    assert await outcomes(engine, events, NOW_MS) == ["applied"] * 5
    for more in (like(9, NOW_MS), post(9, NOW_MS, "ada")):
        [verdict] = await send(engine, [more], NOW_MS)
        assert verdict.outcome == "rejected"
        assert verdict.reason == (
            "actor: this person has reached what is kept for one person: "
            "1000 ties and, within retention, 5 edges and 1000 other events"
        )
        others = more | {"actor": "walt", "id": f"w{more['id']}", "post": more["id"]}
        assert await outcomes(engine, [others], NOW_MS) == ["applied"]
    assert await outcomes(engine, [like(0, NOW_MS)], NOW_MS) == ["duplicate"]
    back = {"id": "r", "type": "retract", "at": NOW_MS, "actor": "ada", "event": "l1"}
    assert await outcomes(engine, [back, tie(1, NOW_MS, "mina", actor="ada")], NOW_MS) == ["applied"] * 2
    later_ms = NOW_MS + RETENTION_MS + DAY_MS
    assert await outcomes(engine, [post(10, later_ms, "ada"), like(10, later_ms)], later_ms) == ["applied"] * 2


@pytest.mark.parametrize("make", [post, like], ids=["posts", "likes"])
async def test_a_row_of_one_sort_empties_too(engine: Engine, make: Any) -> None:
    """Someone who does nothing but post, or nothing but like, meets the limit per retention, not for ever."""
    limit(engine, row_edges=3)
    for round_ms in (0, RETENTION_MS + 1, 2 * RETENTION_MS + 2):
        now_ms = NOW_MS + round_ms
        events = [make(round_ms + number, now_ms, "ada") for number in range(4)]
        assert [verdict.outcome for event in events for verdict in await send(engine, [event], now_ms)] == [
            *["applied"] * 3,
            "rejected",
        ]


async def test_a_batch_fills_a_row_to_its_limit(engine: Engine) -> None:
    """Within one batch the first are applied and the rest rejected; sent again, these are still rejected."""
    limit(engine, row_edges=4)
    batch = [like(number, NOW_MS) for number in range(6)]
    assert await outcomes(engine, batch, NOW_MS) == ["applied"] * 4 + ["rejected"] * 2
    assert await outcomes(engine, batch, NOW_MS) == ["duplicate"] * 4 + ["rejected"] * 2
    assert await edge_count(engine, "ada") == 4


async def test_too_many_ties(engine: Engine) -> None:
    """Past the most ties a new one is rejected; those that stand may change, and no feed changes by a refusal."""
    limit(engine, ties=2)
    assert (
        await outcomes(engine, [tie(0, NOW_MS, "mina"), tie(1, NOW_MS, "ada"), post(0, NOW_MS)], NOW_MS)
        == ["applied"] * 3
    )
    [verdict] = await send(engine, [tie(2, NOW_MS, "walt")], NOW_MS)
    assert verdict.outcome == "rejected"
    assert "2 ties" in (verdict.reason or "")
    before = await ranked(engine, "joel", NOW_MS)
    assert [name for name, _ in before] == ["bed 0"]
    assert (await engine.export("walt", NOW_MS))["tied_by"] == []
    assert await outcomes(engine, [tie(3, NOW_MS + 1, "ada", "friend")], NOW_MS) == ["applied"]
    assert await outcomes(engine, [tie(4, NOW_MS + 1, "mina", "mute")], NOW_MS) == ["applied"]
    assert await ranked(engine, "joel", NOW_MS) == []


async def test_ties_taken_back_make_room(engine: Engine) -> None:
    """Only relations that stand count against the most ties; the traces of `none` are bounded and leave in time."""
    limit(engine, ties=2)
    for number in range(200):
        at_ms = NOW_MS + number * DAY_MS
        made = [tie(number, at_ms, f"plot {number}"), tie(1000 + number, at_ms + 1, f"plot {number}", "none")]
        assert await outcomes(engine, [*made, tie(2000 + number, at_ms, "mina")], at_ms) == ["applied"] * 3
    assert await outcomes(engine, [tie(3000, at_ms, "ada")], at_ms) == ["applied"]
    assert await outcomes(engine, [tie(3001, at_ms, "walt")], at_ms) == ["rejected"]
    assert len((await engine.export("joel", at_ms))["ties"]) <= 64 + 2 * 2


async def test_seen_posts_are_bounded(engine: Engine) -> None:
    """Of more seen posts than are kept the newest stay, on equal times those with the greater hashes."""
    limit(engine, seen_posts=3)
    await send(
        engine, [seen(0, NOW_MS - 1, "a"), seen(1, NOW_MS, "b", "c", "d", "e"), seen(2, NOW_MS + 1, "f")], NOW_MS
    )
    newest = [*sorted(map(engine.store.hasher.hash, "bcde"))[-2:], engine.store.hasher.hash("f")]
    times_ms = (NOW_MS, NOW_MS, NOW_MS + 1)
    entries = [each + stamp(at_ms, 0) for each, at_ms in zip(newest, times_ms, strict=True)]
    assert await kept(engine, "seen", "joel") == b"".join(entries)


async def test_an_old_post_lives_while_it_is_talked_about(engine: Engine, redis_db: str) -> None:
    """A post beyond retention is still shown while somebody followed comments on it, up to 12 lifetimes."""
    await send(engine, [post(0, NOW_MS), tie(0, NOW_MS, "ada"), like(0, NOW_MS)], NOW_MS)
    post_key = keys.key("post", engine.store.hasher.hash("bed 0"))
    for month in range(1, 13):
        now_ms = NOW_MS + month * RETENTION_MS
        assert await outcomes(engine, [like(month, now_ms)], now_ms) == ["applied"]
        [(name, score)] = await ranked(engine, "joel", now_ms)
        assert name == "bed 0"
        assert score == pytest.approx(0.5 * POLICY["affinity"]["follow"])
        with redis.Redis.from_url(redis_db) as client:
            left_ms = NOW_MS + 12 * LIFE_MS - now_ms
            assert min(left_ms, LIFE_MS) - 60_000 < client.pttl(post_key) <= min(left_ms, LIFE_MS)


async def test_a_post_edited_without_end_stays_small(engine: Engine) -> None:
    """Of 400 post events in any order the first and the newest are remembered; the post is as if all were."""
    events = [post(number, NOW_MS - number) | {"post": "bed 0"} for number in range(400)]
    events[250]["audience"] = "nobody"
    Random(1).shuffle(events)
    assert set(await outcomes(engine, [*events, tie(0, NOW_MS, "mina")], NOW_MS)) == {"applied"}
    record = read_record(await kept(engine, "post", "bed 0"))
    assert record.post_events_ms == (NOW_MS - 399, *range(NOW_MS - 254, NOW_MS + 1))
    [(name, score)] = await ranked(engine, "joel", NOW_MS)
    assert name == "bed 0"
    assert score == pytest.approx(1.5 * 2.0 ** (-399 / 3_600_000), rel=1e-12)


async def test_a_flood_ahead_of_the_clock_is_bounded(engine: Engine) -> None:
    """Thousands of edges 5 minutes ahead do not pile up in the post, and are exact once their time has come."""
    ahead_ms, people = 300_000, 2500
    await send(engine, [post(0, NOW_MS), tie(0, NOW_MS, "mina")], NOW_MS)
    likes = [like(number, NOW_MS + ahead_ms, f"plot {number}") for number in range(people)]
    assert set(await outcomes(engine, likes, NOW_MS)) == {"applied"}
    record = read_record(await kept(engine, "post", "bed 0"))
    assert len(record.edges) == 8 * 1024
    [(_, soon)] = await ranked(engine, "joel", NOW_MS)
    exact = 1.5 + 0.5 * 0.5 * people
    assert exact <= (soon or 0.0) <= exact * 2.0 ** (ahead_ms / 3_600_000)
    [(_, then)] = await ranked(engine, "joel", NOW_MS + ahead_ms)
    assert then == pytest.approx(1.5 * 2.0 ** (-ahead_ms / 3_600_000) + 0.5 * 0.5 * people, rel=1e-12)


async def test_other_events_of_one_person_are_bounded(engine: Engine) -> None:
    """Past the limit events that are no edges are refused with the reason until old ones leave; erasing works."""
    limit(engine, other_events=3)
    early = NOW_MS - RETENTION_MS + 1_000
    assert await outcomes(engine, [seen(n, early + n, f"bed {n}") for n in range(3)], NOW_MS) == ["applied"] * 3
    retract = {"id": "r1", "type": "retract", "at": NOW_MS, "actor": "joel", "event": "l1"}
    withdraw = {"id": "w1", "type": "withdraw", "at": NOW_MS, "actor": "joel", "post": "bed 1"}
    verdicts = await send(engine, [seen(9, NOW_MS, "bed 9"), tie(1, NOW_MS, "mina"), retract, withdraw], NOW_MS)
    assert [verdict.outcome for verdict in verdicts] == ["rejected"] * 4
    assert all("3 other events" in (verdict.reason or "") for verdict in verdicts)
    assert len(await kept(engine, "heard", "joel")) == 3 * 16
    later = NOW_MS + 10_000
    assert await outcomes(engine, [seen(9, later, "bed 9"), tie(1, later, "mina")], later) == ["applied"] * 2
    erase = {"id": "x1", "type": "erase", "at": later, "actor": "joel"}
    await send(engine, [seen(10, later, "bed 9"), seen(11, later, "bed 9")], later)
    assert await outcomes(engine, [erase], later) == ["applied"]
