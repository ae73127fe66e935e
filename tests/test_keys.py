"""The store holds only the keys that service/store/keys.py lists, as it says, and a script touches one hash slot."""

import asyncio
import re
from collections.abc import Sequence
from dataclasses import dataclass
from random import Random
from typing import Any

import pytest
import redis
from redis.crc import key_slot

from service.engine import Engine
from service.feed.types import FeedRequest
from service.store import keys, scripts
from service.store.calls import Call, log_exposure, trim_board
from service.store.connection import Connection
from service.store.ids import bucket
from tests.bulk_loads import import_apart
from tests.engines import DAY_MS, running, send
from tests.worlds import World, random_schedule, random_world

LIFE_MS = 31 * DAY_MS
LASTING = -1
TAG = re.compile(rb"\{[^}]+\}")
LONGEST_MS = {"page": 600_000, "posts": 13 * LIFE_MS}


@dataclass(frozen=True)
class Listed:
    """A row of the table of keys."""

    name: str
    form: str
    type: str
    lifetime: str

    @property
    def pattern(self) -> re.Pattern[bytes]:
        """What such a key looks like, byte by byte."""
        form = re.escape(self.form.encode()).replace(rb"\{b\}", rb"\{(?P<bucket>\d{1,3})\}")
        form = form.replace(rb"\{s\}", rb"\{\d{1,2}\}")
        return re.compile(form + (rb"(?P<hash>.{8})" if self.form.endswith(":") else b""), re.DOTALL)

    def lives_as_listed(self, life_ms: int) -> bool:
        """Say whether what is left of a key's life can be what the table says."""
        passing = 0 < life_ms <= LONGEST_MS.get(self.name, LIFE_MS)
        if self.name == "name":
            return passing or life_ms == LASTING
        return (
            passing if re.match(r"retention|as the row|13 lifetimes|10 minutes", self.lifetime) else life_ms == LASTING
        )


def table() -> dict[str, Listed]:
    """Read the table in the docstring."""
    rows = re.findall(
        r"^\| `([^`]+)`[^|]*\| ([^|]+) \| [^|]+(?:\|[^|]+)?\| ([^|]+) \|$", keys.__doc__ or "", re.MULTILINE
    )
    types = {"integer": "string", "sorted set": "zset"}
    return {
        form.partition(":")[0]: Listed(form.partition(":")[0], form, types.get(kind, kind), lifetime)
        for form, kind, lifetime in rows
    }


def stored(url: str) -> dict[bytes, tuple[str, int]]:
    """List every key with its type and what is left of its life in milliseconds, -1 for good."""
    with redis.Redis.from_url(url) as client:
        names: list[Any] = list(client.scan_iter(count=1000))
        return {name: (client.type(name).decode(), client.pttl(name)) for name in names}


async def fill(engine: Engine, world: World) -> None:
    """Do everything that writes keys."""
    await engine.put_policy("allotments", world.policy_toml)
    for batch in random_schedule(Random(1), world.events):
        await send(engine, batch, world.now_ms)
    for reader in world.people:
        page = await engine.feed(FeedRequest(reader, k=1), world.now_ms)
        while page.next:
            page = await engine.feed(FeedRequest(reader, k=1, cursor=page.next), world.now_ms)
    await engine.store.run([log_exposure(bytes(8), b"{}")])
    await engine.store.run([trim_board(slot, 2) for slot in engine.store.board_slots])


def check_key(name: bytes, kind: str, life_ms: int, listed: dict[str, Listed]) -> None:
    row = listed[name.partition(b":")[0].decode()]
    found = row.pattern.fullmatch(name)
    assert found, name
    assert kind == row.type, name
    assert row.lives_as_listed(life_ms), (name, row.lifetime, life_ms)
    if "hash" in found.groupdict():
        assert int(found["bucket"]) == bucket(found["hash"]), name


def test_the_table_lists_every_builder() -> None:
    """The table has a row for each name that keys.py builds, and for nothing else."""
    single = {"seq", "outbox", "applied", "board", "floor", "changes", "changed", "kinds", "meta", "policies"} | {
        "exposures"
    }
    assert set(table()) == set(keys._PREFIX) | single


@pytest.mark.parametrize("seed", [1, 2, 3])
async def test_every_key_is_as_the_table_says(redis_db: str, seed: int) -> None:
    """After a rich world each key has a listed pattern, type and lifetime, and nearly every row has keys."""
    world, listed = random_world(seed, people=9, posts=14, events=400), table()
    async with running(redis_db, world.policy_toml) as engine:
        await fill(engine, world)
    found = stored(redis_db)
    for name, (kind, life_ms) in found.items():
        check_key(name, kind, life_ms, listed)
    unseen = set(listed) - {name.partition(b":")[0].decode() for name in found}
    assert "outbox" in unseen, "nothing is outstanding"
    assert unseen <= {"outbox", "wait", "page"}  # no page where no reader has more than two


async def test_one_script_touches_one_slot(redis_db: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """All keys of a script's call lie in one hash slot of a cluster, by their one hash tag."""
    world, recorded = random_world(4, people=9, posts=14, events=300), list[Call]()
    whole = Connection._pipeline

    async def record(self: Connection, calls: Sequence[Call]) -> list[Any]:
        recorded.extend(calls)
        return await whole(self, calls)

    monkeypatch.setattr(Connection, "_pipeline", record)
    async with running(redis_db, world.policy_toml) as engine:
        await fill(engine, world)
    await asyncio.to_thread(import_apart, redis_db, world, random_world(5).events, 100)
    ran = {call.script.name: call for call in recorded if call.script}
    assert sorted(ran) == scripts.names()
    for call in recorded:
        assert len({key_slot(key) for key in call.keys}) == (1 if call.script else 0), call
        assert len({TAG.findall(key)[0] for key in call.keys if key != keys.KINDS}) <= 1, call
