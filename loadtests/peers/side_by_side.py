"""All ways over one world: checked equal first, then timed in turns."""

import statistics
import time
from collections.abc import Awaitable, Callable
from typing import Any

import redis

from loadtests.peers import postgres, served
from loadtests.peers.ways import Top, Way, floor, know_by, plain_python, redis_alone
from loadtests.peers.world import READER, TOP, Columns, Shape, columns, load, started
from loadtests.reference import events
from service.embedded import EmbeddedServer
from service.engine import Engine
from service.feed.types import FeedRequest

FLOOR, COLD, WARM = "floor", "waxwane, cold rows", "waxwane, warm rows"
SLOW = frozenset({"plain Python", "PostgreSQL, one SELECT", "Redis alone, ZUNIONSTORE"})
"""Ways that take so long that a turn of theirs has fewer reads."""

A_TURN, A_SLOW_TURN = 20, 4
"""Reads of a way before the next has its turn; the first of a turn, which finds another's memory, is not counted."""


def close_enough(one: Top, other: Top) -> bool:
    """Say whether two answers agree: the same scores to 1e-9 in the same order, the same posts where scores differ."""
    if (
        len(one) != len(other)
        or len({post for post, _ in one}) < len(one)
        or len({post for post, _ in other}) < len(other)
    ):
        return False
    for (post, score), (twin, value) in zip(one, other, strict=True):
        if abs(score - value) > 1e-9 * abs(score):
            return False
        if post != twin and not any(name == twin and abs(mine - value) <= 1e-9 * abs(mine) for name, mine in one):
            return False
    return True


async def top_of(engine: Engine, t_ms: int) -> Top:
    """Give waxwane's answer."""
    answer = await engine.feed(FeedRequest(READER, k=TOP, budget_ms=10_000.0), t_ms)
    if not answer.complete:
        raise SystemExit("waxwane's answer is not complete")
    return [(item.post, item.score or 0.0) for item in answer.items]


async def compare(server: EmbeddedServer, shape: Shape, rounds: int) -> dict[str, Any]:
    """Load a world into every way, check that all agree, time them in turns."""
    t_ms = time.time_ns() // 1_000_000
    world = columns(shape, t_ms)
    with redis.Redis.from_url(server.url) as client:
        client.config_set("appendonly", "no")  # no way's writes are the disk's to time
    warm = await started(server.url)
    await load(warm, list(events(shape, t_ms)), t_ms)
    cold = await started(server.url, cache_bytes=0)
    with postgres.server() as address:
        ways = await _ways(server.url.removeprefix("unix://"), warm, world, address)
        expected = await top_of(warm, t_ms)
        for engine in (cold, warm):
            if not close_enough(expected, await top_of(engine, t_ms)):
                raise SystemExit("waxwane's cold and warm answers differ")
        for way in ways:
            if not close_enough(expected, way.top()):
                raise SystemExit(f"the answer of {way.name} is not waxwane's")
        rows = await _timed(ways, {COLD: cold, WARM: warm}, t_ms, rounds)
        for way in ways:
            way.close()
    with served.serve(server.url) as process:
        http = served.read_feeds(process, READER, expected, max(400, 200 * rounds))
    await warm.close()
    await cold.close()
    if address is None:
        rows["PostgreSQL, one SELECT"] = None
    candidates = len(set(world.post[[bool(value) for value in world.affinity[world.person]]].tolist()))
    edges = int((world.affinity[world.person] > 0).sum())
    return {"edges": edges, "candidates": candidates, "rows": rows, "http": http, "agreed": [way.name for way in ways]}


async def _ways(path: str, engine: Engine, world: Columns, address: str | None) -> list[Way]:
    ranker, hasher = engine._ranker, engine.store.hasher  # noqa: SLF001  the same rows as the engine reads
    state = await ranker.readers.load(READER, hasher.hash(READER), profile=True)
    ranking = ranker._policies.prepared(None, engine.store.kinds.names).ranking  # noqa: SLF001  as above
    standing = ranker.readers.standing(state, ranking, world.t_ms)
    ways = [floor(path, standing, ranking, world, hasher.hash), redis_alone(path, world)]
    ways.append(plain_python(path, standing, ranking, world))
    for know in know_by.values():
        know(hasher.hash)
    if address is not None:
        ways.append(postgres.way(address, world))
    return ways


async def _timed(ways: list[Way], engines: dict[str, Engine], t_ms: int, rounds: int) -> dict[str, Any]:
    request = FeedRequest(READER, k=TOP, budget_ms=10_000.0)
    calls: dict[str, Callable[[], Awaitable[object]]] = {
        name: (lambda engine=engine: engine.feed(request, t_ms)) for name, engine in engines.items()
    }
    times: dict[str, list[float]] = {name: [] for name in [*(way.name for way in ways), *calls]}
    cpu: dict[str, float] = dict.fromkeys(times, 0.0)
    for _ in range(rounds):
        for way in ways:
            way.read()
            cpu_s = time.process_time()
            for _ in range(A_SLOW_TURN if way.name in SLOW else A_TURN):
                begun_s = time.perf_counter()
                way.read()
                times[way.name].append(time.perf_counter() - begun_s)
            cpu[way.name] += time.process_time() - cpu_s
        for name, call in calls.items():
            await call()
            cpu_s = time.process_time()
            for _ in range(A_TURN):
                begun_s = time.perf_counter()
                await call()
                times[name].append(time.perf_counter() - begun_s)
            cpu[name] += time.process_time() - cpu_s
    return {name: _summary(values, cpu[name]) for name, values in times.items()}


def _summary(values: list[float], cpu_s: float) -> dict[str, float]:
    ordered = sorted(values)
    return {
        "cpu_us": cpu_s / len(ordered) * 1e6,
        "reads": len(ordered),
        "least_us": ordered[0] * 1e6,
        "p50_us": statistics.median(ordered) * 1e6,
        "p90_us": ordered[int(0.9 * (len(ordered) - 1))] * 1e6,
    }
