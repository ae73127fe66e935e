"""How things grow: reads by ties and by edges a tie, ingest by batch, import by file, memory by key."""

import asyncio
import json
import statistics
import subprocess
import sys
import tempfile
import threading
import time
from collections import defaultdict
from pathlib import Path
from typing import Any

import redis

from loadtests.peers import served, state
from loadtests.peers.world import READER, started
from loadtests.reference import Shape, events
from service.embedded import EmbeddedServer
from service.feed.types import FeedRequest

TIES = (30, 100, 300, 1_000, 3_000)
EDGES = (10, 30, 100, 300, 1_000)
BATCHES = (1, 10, 100, 500, 1_000)


async def reads(ties: int, edges: int, count: int) -> dict[str, float]:
    """Time reads of a world of so many ties and edges, cold and warm, in turns; microseconds."""
    with tempfile.TemporaryDirectory() as folder, EmbeddedServer(Path(folder) / "data") as server:
        posts = await state.write(server.url, ties, edges)
        engines = {
            "warm": await started(server.url, cache_bytes=1 << 30),
            "cold": await started(server.url, cache_bytes=0),
        }
        request, times = FeedRequest(READER, k=20, budget_ms=10_000.0), defaultdict(list)
        for turn in range(5):
            for name, engine in engines.items():
                for number in range(count // 5 + 1):
                    begun_s = time.perf_counter()
                    await engine.feed(request, time.time_ns() // 1_000_000)
                    if number and turn:
                        times[name].append(time.perf_counter() - begun_s)
        for engine in engines.values():
            await engine.close()
    row = {f"{name}_us": statistics.median(values) * 1e6 for name, values in times.items()}
    return {"ties": ties, "edges": ties * edges, "posts": posts, **row}


def ingest(batch: int, seconds: float) -> dict[str, float]:
    """Send the reference world's events over HTTP in batches, two calls under way at a time; events a second."""
    with tempfile.TemporaryDirectory() as folder, EmbeddedServer(Path(folder) / "data") as server:
        now_ms = time.time_ns() // 1_000_000
        happenings = list(events(Shape(strangers=2_000), now_ms))
        bodies = [json.dumps(happenings[at : at + batch]).encode() for at in range(0, len(happenings), batch)]
        with served.serve(server.url, "--log-level", "warning") as process:
            until_s, begun_s, taken, lock = (
                time.perf_counter() + seconds,
                time.perf_counter(),
                iter(bodies),
                threading.Lock(),
            )
            done: list[int] = []

            def send() -> None:
                client = served.Client(process.port)
                while time.perf_counter() < until_s:
                    with lock:
                        body = next(taken, None)
                    if body is None:
                        break
                    done.append(json.loads(client.post("/v1/events", body))["applied"])
                client.close()

            threads = [threading.Thread(target=send) for _ in range(2)]
            for thread in threads:
                thread.start()
            for thread in threads:
                thread.join()
            taken_s = time.perf_counter() - begun_s
    return {"batch": batch, "events": sum(done), "events_per_s": sum(done) / taken_s}


def single_event(count: int) -> dict[str, float]:
    """Time calls of one event each on one connection, milliseconds."""
    with tempfile.TemporaryDirectory() as folder, EmbeddedServer(Path(folder) / "data") as server:
        now_ms, times = time.time_ns() // 1_000_000, []
        with served.serve(server.url, "--log-level", "warning") as process:
            client = served.Client(process.port)
            for number in range(count):
                event = {
                    "id": f"e{number}",
                    "type": "post",
                    "at": now_ms,
                    "actor": "mina",
                    "post": f"p{number}",
                    "form": "note",
                }
                begun_s = time.perf_counter()
                client.post("/v1/events", json.dumps(event).encode())
                times.append((time.perf_counter() - begun_s) * 1000)
            client.close()
    times.sort()
    return {"p50_ms": times[count // 2], "p99_ms": times[int(count * 0.99)]}


def imported(count: int) -> dict[str, float]:
    """Import a generated file of so many interactions, in a process of its own: see `loadtests.import_rate`."""
    command = [sys.executable, "-m", "loadtests.import_rate", "--json", "--events", str(count)]
    done = subprocess.run(command, check=True, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL)
    figures: dict[str, float] = json.loads(done.stdout.splitlines()[-1])
    return figures


async def memory(shape: Shape) -> dict[str, Any]:
    """Load a world over the engine and say where the store's memory is, bytes."""
    from loadtests.peers.world import load  # noqa: PLC0415  beside its neighbours

    with tempfile.TemporaryDirectory() as folder, EmbeddedServer(Path(folder) / "data") as server:
        engine, now_ms = await started(server.url), time.time_ns() // 1_000_000
        client = redis.Redis.from_url(server.url)
        before = int(client.info("memory")["used_memory"])
        await load(engine, list(events(shape, now_ms)), now_ms)
        await engine.close()
        used = int(client.info("memory")["used_memory"]) - before
        by_name: dict[str, int] = defaultdict(int)
        counts: dict[str, int] = defaultdict(int)
        for key in client.scan_iter(count=1_000):
            name = key.partition(b":")[0].decode()
            by_name[name] += int(client.memory_usage(key, samples=0))
            counts[name] += 1
        client.close()
    edges = sum(1 for event in events(shape, now_ms) if event["type"] in ("post", "interaction"))
    people, of_rows = counts["row"], sum(by_name[name] for name in ("row", "ids", "who"))
    return {
        "edges": edges,
        "posts": counts["post"],
        "people": people,
        "used": used,
        "by_key": dict(sorted(by_name.items(), key=lambda item: -item[1])),
        "bytes_per_edge": (used - by_name["post"]) / edges,
        "bytes_per_edge_of_rows": of_rows / edges,
        "bytes_per_post": by_name["post"] / counts["post"],
        "bytes_per_person_beside": sum(by_name[name] for name in ("name", "heard", "posts", "tie", "out", "in"))
        / people,
    }


def all_reads(count: int) -> list[dict[str, float]]:
    """Time reads of every size."""
    sizes = [(ties, 60) for ties in TIES] + [(300, edges) for edges in EDGES]
    return [asyncio.run(reads(ties, edges, count)) for ties, edges in sizes]
