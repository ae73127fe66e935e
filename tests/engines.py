"""Engines for tests: on a real server, at a time of the test's choosing."""

from collections.abc import AsyncIterator, Iterable, Sequence
from contextlib import asynccontextmanager
from typing import Any

import redis

from scoring.bank import DEFAULT_BANK
from service.engine import Engine
from service.events.model import parse_event
from service.feed.types import ExplainRequest, FeedRequest
from service.store.store import StoreOptions
from service.store.verdict import Verdict
from tests.oracle import Oracle, assert_same_feed, assert_tie_order
from tests.worlds import World

DAY_MS = 86_400_000
LATER_MS = 5 * 3_600_000


def flush(url: str) -> None:
    """Empty the server."""
    with redis.Redis.from_url(url) as client:
        client.flushall()


def make_engine(
    url: str, *policies: str, retention_days: int = 30, timeout_s: float = 5.0, cache_bytes: int = 64 << 20
) -> Engine:
    """Make an engine that is not started yet."""
    options = StoreOptions(url, DEFAULT_BANK, retention_days * DAY_MS, timeout_s, timeout_s)
    return Engine(options, policies, cache_bytes=cache_bytes)


@asynccontextmanager
async def running(url: str, *policies: str) -> AsyncIterator[Engine]:
    """Run an engine without its background work."""
    engine = make_engine(url, *policies)
    await engine.start(background=False)
    try:
        yield engine
    finally:
        await engine.close()


async def send(engine: Engine, events: Iterable[dict[str, Any]], now_ms: int) -> list[Verdict]:
    """Apply events given as a caller would send them."""
    return await engine.apply([parse_event(event) for event in events], now_ms)


async def ranked(engine: Engine, reader: str, now_ms: int, **asked: Any) -> list[tuple[str, float | None]]:
    """Read a feed whole; it must be complete."""
    request = FeedRequest(reader, **({"k": 200, "budget_ms": 60_000.0, "explore": False} | asked))
    answer = await engine.feed(request, now_ms)
    assert answer.complete
    return [(item.post, item.score) for item in answer.items]


async def assert_as_oracle(engine: Engine, world: World, oracle: Oracle, readers: Sequence[str] | None = None) -> None:
    """Check every reader's feeds, now and later, ranked and newest first, against brute force."""
    for reader in readers or world.people:
        for t_ms in (world.now_ms, world.now_ms + LATER_MS):
            expected = oracle.feed(reader, None, t_ms)
            actual = await ranked(engine, reader, world.now_ms, as_of_ms=t_ms)
            assert_same_feed(expected, actual)
            assert_tie_order(expected, actual)
        newest = await ranked(engine, reader, world.now_ms, order="newest")
        assert newest == oracle.feed(reader, None, world.now_ms, "newest")


async def explained(engine: Engine, reader: str, post: str, t_ms: int, now_ms: int) -> float:
    """Take a score apart and check that its parts add up to it."""
    answer = await engine.explain(ExplainRequest(reader, post, as_of_ms=t_ms), now_ms)
    total = sum(part.product for part in answer.ties) + answer.crowd.product
    for factor in answer.factors:
        total *= factor.value
    assert abs(total - answer.score) <= 1e-12 * abs(total)
    return answer.score
