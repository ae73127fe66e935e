"""A process that ends between any two commands of an event's application loses nothing and does nothing twice."""

import asyncio
import random
import signal
import subprocess
import sys
from collections.abc import Sequence
from typing import Any

import orjson
import pytest
from structlog.testing import capture_logs

from service.engine import Engine
from service.errors import StoreRefused
from service.settings import BUILT_IN_POLICY
from service.store import keys
from service.store.calls import Call
from service.store.connection import Connection
from tests.engines import assert_as_oracle, flush, make_engine, ranked, running, send
from tests.worlds import World, random_world


class Killed(BaseException):
    """The process ended here."""


def end_after(monkeypatch: pytest.MonkeyPatch, commands: int) -> None:
    """Let a number of writing commands through, then end, as SIGKILL would between two commands."""
    whole, left = Connection._pipeline, [commands]

    async def cut(self: Connection, calls: Sequence[Call]) -> list[Any]:
        if left[0] >= len(calls):
            left[0] -= len(calls)
            return await whole(self, calls)
        if left[0]:
            await whole(self, calls[: left[0]])
        raise Killed

    monkeypatch.setattr(Connection, "_pipeline", cut)


async def ended_early(engine: Engine, world: World, events: list[dict[str, Any]], commands: int) -> bool:
    """Apply events in a process that ends after some commands; False where it came to its end."""
    with pytest.MonkeyPatch.context() as patch:
        end_after(patch, commands)
        try:
            await send(engine, events, world.now_ms)
        except Killed:
            return True
    return False


@pytest.mark.parametrize("seed", [3, 8])
async def test_a_batch_cut_off_anywhere_can_be_sent_again(redis_db: str, seed: int) -> None:
    """For every point between two commands: the batch sent again ends in the feeds of an undisturbed run."""
    world = random_world(seed, people=4, posts=5, events=14)
    oracle, points = world.oracle(), 0
    while True:
        flush(redis_db)
        async with running(redis_db, world.policy_toml) as engine:
            cut = await ended_early(engine, world, world.events, points)
        async with running(redis_db, world.policy_toml) as engine:
            await send(engine, world.events, world.now_ms)
            await assert_as_oracle(engine, world, oracle)
            assert await engine.store.finish_open_entries(world.now_ms + 1) == 0
        if not cut:
            break
        points += 1
    assert points > 60


@pytest.mark.parametrize("seed", [5])
async def test_what_a_crash_left_open_is_finished_without_a_resend(redis_db: str, seed: int) -> None:
    """For every point: after the sweep each event is wholly in or wholly out, and a resend settles the rest."""
    world = random_world(seed, people=4, posts=4, events=12)
    points = 0
    while True:
        flush(redis_db)
        async with running(redis_db, world.policy_toml) as engine:
            cut = await ended_early(engine, world, world.events, points)
        async with running(redis_db, world.policy_toml) as engine:
            await engine.store.finish_open_entries(world.now_ms + 1)
            assert await engine.store.finish_open_entries(world.now_ms + 1) == 0
            await send(engine, world.events, world.now_ms)
            await assert_as_oracle(engine, world, world.oracle())
        if not cut:
            break
        points += 1
    assert points > 50


async def test_the_sweep_alone_makes_an_event_whole(redis_db: str) -> None:
    """An interaction cut off after its row was written counts in the crowd once the sweep has passed."""
    world = random_world(1, people=3, posts=2, events=0)
    flush(redis_db)
    now_ms = world.now_ms
    events = [
        {"id": "f", "type": "tie", "at": now_ms, "actor": "joel", "target": "mina", "relation": "follow"},
        {"id": "p", "type": "post", "at": now_ms, "actor": "mina", "post": "bed", "form": "note"},
    ]
    like = {"id": "l", "type": "interaction", "at": now_ms, "actor": "ada", "post": "bed", "kind": "share"}
    async with running(redis_db, world.policy_toml) as engine:
        await send(engine, events, now_ms)
        assert await ended_early(engine, world, [like], 1 + 1)  # the kind's code, then the row
    async with running(redis_db, world.policy_toml) as engine:
        assert await engine.store.finish_open_entries(now_ms + 1) == 1
        assert [verdict.outcome for verdict in await send(engine, [like], now_ms)] == ["duplicate"]
        oracle = world.oracle().from_events([*events, like], now_ms, policy=world.policy)
        assert await ranked(engine, "joel", now_ms) == [
            (post, pytest.approx(score)) for post, score in oracle.feed("joel", None, now_ms)
        ]


KILLED_RUN = """
import asyncio, os, signal, sys, orjson
from service.store.connection import Connection
from tests.engines import make_engine, send
world = orjson.loads(sys.stdin.buffer.read())
whole, left = Connection._pipeline, [int(sys.argv[1])]

async def cut(self, calls):
    if left[0] < len(calls):
        if left[0]:
            await whole(self, calls[: left[0]])
        os.kill(os.getpid(), signal.SIGKILL)
    left[0] -= len(calls)
    return await whole(self, calls)

async def main():
    engine = make_engine(world["url"], world["policy"])
    await engine.start(background=False)
    Connection._pipeline = cut
    await send(engine, world["events"], world["now_ms"])

asyncio.run(main())
"""


def ending_of(job: bytes, commands: int) -> int:
    """Run the job in a process of its own and give its exit status."""
    return subprocess.run([sys.executable, "-c", KILLED_RUN, str(commands)], input=job, check=False).returncode


@pytest.mark.parametrize("commands", [2, 19, 41, 60])
async def test_a_real_sigkill_loses_nothing(redis_db: str, commands: int) -> None:
    """A process killed by SIGKILL in the middle of a batch is made good by sending the batch again."""
    world = random_world(21, people=4, posts=5, events=16)
    job = {"url": redis_db, "policy": world.policy_toml, "events": world.events, "now_ms": world.now_ms}
    assert ending_of(orjson.dumps(job), commands) == -signal.SIGKILL
    async with running(redis_db, world.policy_toml) as engine:
        await send(engine, world.events, world.now_ms)
        await assert_as_oracle(engine, world, world.oracle())


async def test_workers_that_send_the_same_events_at_once_count_them_once(redis_db: str) -> None:
    """Four engines apply the same events in different orders at the same time; feeds are those of one pass."""
    world = random_world(33, people=6, posts=8, events=150)
    engines = [make_engine(redis_db, world.policy_toml) for _ in range(4)]
    for engine in engines:
        await engine.start(background=False)

    async def work(number: int, engine: Engine) -> None:
        events = list(world.events)
        random.Random(number).shuffle(events)
        for at in range(0, len(events), 17):
            await send(engine, events[at : at + 17], world.now_ms)

    await asyncio.gather(*(work(number, engine) for number, engine in enumerate(engines)))
    for engine in engines:
        await assert_as_oracle(engine, world, world.oracle())
        await engine.close()


NOW_MS = 1_777_885_200_000
PAIR = [
    {"id": f"p-{actor}", "type": "post", "at": NOW_MS, "actor": actor, "post": f"bed of {actor}", "form": "note"}
    for actor in ("mina", "joel")
]


async def test_an_entry_that_cannot_be_finished_keeps_no_other_open(redis_db: str) -> None:
    """Where the store refuses one entry's effects, the others are finished, and the log says what the server said."""
    tie = {"id": "t", "type": "tie", "at": NOW_MS, "actor": "ada", "target": "joel", "relation": "follow"}
    async with running(redis_db, BUILT_IN_POLICY.read_text()) as engine:
        await send(engine, [tie], NOW_MS)
        with pytest.MonkeyPatch.context() as patch:
            end_after(patch, 3)  # the kind, and both events taken
            with pytest.raises(Killed):
                await send(engine, PAIR, NOW_MS)
        spoilt = keys.key("post", engine.store.hasher.hash("bed of mina"))
        await engine.store.connection.read("SADD", spoilt, "not a post")
        with capture_logs() as logs:
            assert await engine.store.finish_open_entries(NOW_MS) == 1
        assert {one["event"] for one in logs} == {"store_refused", "entry_left_open"}
        assert all("WRONGTYPE" in one["reason"] for one in logs)
        assert [post for post, _ in await ranked(engine, "ada", NOW_MS)] == ["bed of joel"]
        await engine.store.connection.read("DEL", spoilt)
        assert await engine.store.finish_open_entries(NOW_MS) == 1
        assert await engine.store.finish_open_entries(NOW_MS) == 0


async def test_a_refused_command_is_told_without_its_keys(redis_db: str) -> None:
    """The caller learns that the store refused, and the kind of its error; the event stays sendable."""
    async with running(redis_db, BUILT_IN_POLICY.read_text()) as engine:
        heard = keys.key("heard", engine.store.hasher.hash("mina"))
        await engine.store.connection.read("SADD", heard, "not a list")
        with pytest.raises(StoreRefused, match=r"^the store refused a command: WRONGTYPE;"):
            await send(engine, PAIR, NOW_MS)
        await engine.store.connection.read("DEL", heard)
        assert [one.outcome for one in await send(engine, PAIR, NOW_MS)] == ["applied", "duplicate"]
