"""What a worker remembers between reads is never older than what was acknowledged."""

import asyncio
import random
from typing import Any

import pytest

from service.feed.cache import OVERHEAD, Follower, Recent, WorkerCache
from service.store.calls import log_changes
from tests.engines import DAY_MS, assert_as_oracle, make_engine, ranked, running, send
from tests.oracle import Oracle
from tests.worlds import random_schedule, random_world

A, B, C = b"aaaaaaaa", b"bbbbbbbb", b"cccccccc"


def answers(newest: int, *entries: tuple[int, bytes, bytes]) -> list[Any]:
    """What the store answers to a follower's commands."""
    listed = [(b"%d-0" % number, [b"people", people, b"posts", posts]) for number, people, posts in entries]
    return [b"%d" % newest, listed]


def test_a_follower_begins_by_knowing_nothing() -> None:
    """The first look forgets everything and stands at the newest entry."""
    follower = Follower()
    assert follower.take(follower.position, answers(7, (1, A, b""))) is None
    assert follower.position == 7


def test_a_follower_hears_of_each_change_once() -> None:
    """Entries since the position are given, people and posts alike; answers that arrive late add nothing."""
    follower = Follower()
    follower.take(-1, answers(7))
    assert follower.take(7, answers(9, (8, A + B, b""), (9, b"", C))) == {A, B, C}
    assert follower.take(7, answers(8, (8, A + B, b""))) == set()
    assert follower.position == 9


@pytest.mark.parametrize(
    "late",
    [
        pytest.param(answers(10, (9, A, b""), (10, A, b"")), id="an entry was trimmed"),
        pytest.param(answers(900), id="all were trimmed"),
        pytest.param(answers(3), id="the store was emptied"),
        pytest.param(answers(20, *((number, A, b"") for number in range(8, 12))), id="more than one look"),
    ],
)
def test_a_follower_that_was_left_behind_begins_anew(late: list[Any]) -> None:
    """Where the entries do not follow on without a gap, everything is to be forgotten."""
    follower = Follower()
    follower.take(-1, answers(7))
    ticket = follower.ticket()
    assert follower.take(7, late) is None
    assert follower.position == int(late[0])
    assert not follower.unchanged_since(ticket, B)


def test_a_fetch_that_a_change_overtook_is_not_remembered() -> None:
    """Only what has not changed since a fetch began may be kept from it."""
    cache = WorkerCache(10_000, 10_000)
    cache.take(-1, answers(1))
    ticket = cache.follower.ticket()
    cache.take(1, answers(2, (2, A, b"")))
    cache.keep(cache.rows, ticket, [(A, b"old"), (B, b"same")])
    assert (cache.rows.get(A), cache.rows.get(B)) == (None, b"same")
    cache.keep(cache.rows, cache.follower.ticket(), [(A, b"new")])
    assert cache.rows.get(A) == b"new"


def test_what_was_not_used_lately_goes_first() -> None:
    """A mapping forgets what was not asked for since half of its size came in, and never holds more than its size."""
    held: Recent[bytes] = Recent(4 * (OVERHEAD + 4), len)
    held.put(A, b"aaaa")
    held.put(B, b"bbbb")
    held.put(C, b"cccc")
    assert held.get_all([A, B, C, b"dddddddd"]) == [b"aaaa", b"bbbb", b"cccc", None]
    held.put_all([(bytes([n] * 8), b"xxxx") for n in range(2)])
    assert (held.get(C), held.get(b"\0" * 8)) == (None, b"xxxx")
    for n in range(100):
        held.put(bytes([n] * 8), b"yyyy")
        assert len(held) <= 4
    assert held.get(bytes([99] * 8)) == b"yyyy"


def test_what_is_dropped_is_gone_from_both_generations() -> None:
    """A value put twice, before and after the generations turned, is wholly forgotten at once."""
    held: Recent[bytes] = Recent(4 * (OVERHEAD + 4), len)
    for value in (b"old0", b"old1", b"new0"):
        held.put(A, value)
    assert held.get(A) == b"new0"
    held.drop(A)
    assert (held.get(A), len(held)) == (None, 0)


def test_nothing_is_held_where_there_is_no_room() -> None:
    """With a size of 0, or a value of more than half of it, there is nothing to find."""
    for size in (0, 2 * OVERHEAD):
        held: Recent[bytes] = Recent(size, len)
        held.put(A, b"a" * 300)
        assert (held.get(A), len(held)) == (None, 0)


@pytest.mark.parametrize("seed", range(6))
@pytest.mark.parametrize("cache_bytes", [64 << 20, 700, 0])
async def test_one_worker_reads_what_another_wrote(redis_db: str, seed: int, cache_bytes: int) -> None:
    """After every answer of one engine, feeds of another that has read before are exact, whatever it remembers."""
    rng = random.Random(seed)
    world = random_world(seed + 100, people=5, posts=6, events=40)
    arrived: list[dict[str, Any]] = []
    reader = make_engine(redis_db, world.policy_toml, cache_bytes=cache_bytes)
    await reader.start(background=False)
    async with running(redis_db, world.policy_toml) as writer:
        for batch in random_schedule(rng, world.events):
            await send(writer, batch, world.now_ms)
            arrived += batch
            oracle = Oracle.from_events(arrived, world.now_ms, policy=world.policy)
            await assert_as_oracle(reader, world, oracle, rng.sample(world.people, 2))
        await assert_as_oracle(reader, world, world.oracle())
    await reader.close()


async def test_a_worker_left_far_behind_is_exact_again(redis_db: str) -> None:
    """More changes than one look takes in, or than the log keeps, cost the memory and nothing else."""
    world = random_world(9, people=5, posts=6, events=40)
    async with running(redis_db, world.policy_toml) as reader, running(redis_db, world.policy_toml) as writer:
        half = len(world.events) // 2
        await send(writer, world.events[:half], world.now_ms)
        await assert_as_oracle(
            reader, world, Oracle.from_events(world.events[:half], world.now_ms, policy=world.policy)
        )
        for _ in range(700):
            await writer.store.run([log_changes([A], [B])])
        await send(writer, world.events[half:], world.now_ms)
        await assert_as_oracle(reader, world, world.oracle())


async def test_reads_at_once_with_writes_are_never_older_than_the_answers(redis_db: str) -> None:
    """While four writers write, every read that starts after an answer shows it, on every worker."""
    policy = random_world(1, people=3, posts=2, events=1).policy_toml
    now_ms = 1_777_885_200_000
    engines = [make_engine(redis_db, policy) for _ in range(3)]
    for engine in engines:
        await engine.start(background=False)
    names = ("mina", "ada", "lin", "tom")
    ties = [
        {"id": f"t-{name}", "type": "tie", "at": now_ms - DAY_MS, "actor": "joel", "target": name, "relation": "follow"}
        for name in names
    ]
    await send(engines[0], ties, now_ms)

    async def write(name: str, rng: random.Random) -> None:
        for number in range(25):
            post = f"{name}-{number}"
            event = {"id": post, "type": "post", "at": now_ms - number, "actor": name, "post": post, "form": "note"}
            await send(rng.choice(engines), [event], now_ms)
            assert post in dict(await ranked(rng.choice(engines), "joel", now_ms))
            if number % 3 == 0:
                gone = {"id": f"w-{post}", "type": "withdraw", "at": now_ms, "actor": name, "post": post}
                await send(rng.choice(engines), [gone], now_ms)
                assert post not in dict(await ranked(rng.choice(engines), "joel", now_ms))

    await asyncio.gather(*(write(name, random.Random(name)) for name in names))
    for engine in engines:
        assert len(await ranked(engine, "joel", now_ms)) == 4 * 16
        await engine.close()
