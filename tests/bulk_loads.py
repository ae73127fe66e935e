"""Load events in bulk, and look at all that a store holds afterwards."""

import asyncio
import io
import math
import struct
from collections import Counter
from collections.abc import Callable, Coroutine, Iterable, Sequence
from typing import Any

import orjson
import redis

from service.engine import Engine
from service.events.model import parse_event
from service.importing.bulk import BulkImporter
from service.importing.parsing import Parser
from service.importing.summary import Summary
from service.importing.target import EngineTarget
from service.importing.windows import windows
from service.store.records import read_record
from tests.engines import flush, make_engine
from tests.worlds import FORMS, KINDS, World

BOOKKEEPING = ("seq:", "outbox:", "applied:", "changes:", "changed:")
"""Keys whose content depends on when and in how many calls events came."""

Event = dict[str, Any]
Run = Callable[[Coroutine[Any, Any, Any]], Any]


def started(url: str, world: World, run: Run) -> Engine:
    """Start an engine on a store with a fixed hash key and all kinds of the worlds registered."""
    with redis.Redis.from_url(url) as client:
        client.hsetnx("meta", "hash_key", bytes(16))
    engine = make_engine(url, world.policy_toml)
    run(engine.start(background=False))
    run(engine.store.kinds.register([*KINDS, *(f"post.{form}" for form in FORMS)]))
    return engine


def bulk_load(engine: Engine, run: Run, events: Iterable[Event], now_ms: int, window_lines: int) -> Summary:
    """Apply events as `waxwane import` does, in windows of so many lines."""
    summary = Summary()
    importer = BulkImporter(EngineTarget(engine, run), lambda: now_ms, lambda _: None, summary)
    content = io.BytesIO(b"\n".join(map(orjson.dumps, events)))
    parser = Parser(engine.store.meta[b"hash_key"])
    for window in windows(content, most_lines=window_lines):
        importer.take("events", window, parser.read(window))
    return summary


def import_apart(url: str, world: World, events: Sequence[Event], window_lines: int) -> None:
    """Load events in bulk with an engine and an event loop of its own, as another process would."""
    with asyncio.Runner() as runner:
        engine = started(url, world, runner.run)
        bulk_load(engine, runner.run, events, world.now_ms, window_lines)
        runner.run(engine.close())


def same_calls(events: Sequence[Event], window_lines: int) -> list[list[Event]]:
    """Give the calls that do one by one what windows do: posts, each interaction, then the rest."""
    calls = []
    for first in range(0, len(events), window_lines):
        window = events[first : first + window_lines]
        calls.append([event for event in window if event["type"] == "post"])
        calls += [[event] for event in window if event["type"] == "interaction"]
        calls.append([event for event in window if event["type"] not in ("post", "interaction")])
    return calls


def loaded(url: str, world: World, load: Callable[[Engine, Run], Any]) -> tuple[Any, dict[str, Any]]:
    """Load an empty store in some way; give what that gave and all that is stored then."""
    flush(url)
    with asyncio.Runner() as runner:
        engine = started(url, world, runner.run)
        result = load(engine, runner.run)
        assert runner.run(engine.store.finish_open_entries(world.now_ms)) == 0
        runner.run(engine.close())
    return result, state(url, len(engine.store.options.bank.half_lives_ms))


def in_calls(calls: Sequence[Sequence[Event]], now_ms: int) -> Callable[[Engine, Run], Counter[str]]:
    """Make a load that applies events call by call, and counts the outcomes."""

    def load(engine: Engine, run: Run) -> Counter[str]:
        verdicts = [run(engine.apply([parse_event(event) for event in call], now_ms)) for call in calls]
        return Counter(verdict.outcome for call in verdicts for verdict in call)

    return load


def state(url: str, bank_size: int) -> dict[str, Any]:
    """Read all keys but the bookkeeping, each decoded and in an order that does not depend on arrival."""
    found: dict[str, Any] = {}
    with redis.Redis.from_url(url) as client:
        for key in client.keys("*"):
            name = key.split(b":")[0].decode()
            if not key.decode("latin-1").startswith(BOOKKEEPING) and name not in ("ids", "who"):
                found[key.decode("latin-1")] = _decoded(client, name, key, bank_size), client.pttl(key) > 0
    return found


def _decoded(client: Any, name: str, key: bytes, bank_size: int) -> Any:
    kind = client.type(key)
    if kind == b"hash":
        return client.hgetall(key)
    if kind == b"zset":
        return dict(client.zrange(key, 0, -1, withscores=True))
    value = client.get(key)
    if name == "row":
        beside = [client.get(key.replace(b"row", other, 1)) for other in (b"ids", b"who")]
        assert [len(one) * 2 for one in beside] == [len(value)] * 2
        columns = [chunks(value, 16), *(chunks(one, 8) for one in beside)]
        return sorted(zip(*columns, strict=True))
    if name == "wait":
        return sorted(chunks(value, 8))
    return _post(value, bank_size) if name == "post" else value


def _post(value: bytes, bank_size: int) -> Any:
    record = read_record(value)
    layout = struct.Struct(f"<HHid{bank_size}d")
    sums = {code: (count, as_of, sums) for code, _, count, as_of, *sums in layout.iter_unpack(record.sums)}
    texts = (record.id, record.recorded, record.withdrawn, record.author, record.author_hash, record.form)
    times = (record.audience, record.topics, record.posted_ms, record.latest_ms, record.event, record.post_events_ms)
    return texts, times, sorted(chunks(record.edges, 8)), sums


def chunks(data: bytes, width: int) -> list[bytes]:
    """Cut bytes into pieces of equal width."""
    return [data[at : at + width] for at in range(0, len(data), width)]


def same(actual: Any, expected: Any) -> bool:
    """Compare decoded values: numbers that were computed to 1e-12 of them and of an edge, all else exactly.

    An edge that is subtracted leaves what rounding left of sums that were as large as it.
    """
    if isinstance(expected, float) and isinstance(actual, float):
        return math.isclose(actual, expected, rel_tol=1e-12, abs_tol=1e-12)
    if isinstance(expected, dict):
        return actual.keys() == expected.keys() and all(same(actual[key], expected[key]) for key in expected)
    if isinstance(expected, list | tuple):
        return len(actual) == len(expected) and all(map(same, actual, expected))
    return bool(actual == expected)
