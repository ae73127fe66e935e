"""CPU that the service spends on one feed read: `python -m loadtests.read_cpu`.

Loads the reference world into an embedded store through the engine and reads the reader's feed without HTTP, again and
again: cold, where every read fetches all rows and posts, and warm, where the worker remembers them. Prints CPU of this
process per read (median, least, p90) and the median of each stage's wall time. Redis runs in its own process and is
not counted.
"""

import argparse
import json
import statistics
import tempfile
import time
from pathlib import Path
from typing import Any

import uvloop

from loadtests.reference import READER, Shape, events
from scoring.bank import DEFAULT_BANK
from service.embedded import EmbeddedServer
from service.engine import Engine
from service.events.model import parse_event
from service.feed.types import FeedRequest
from service.settings import BUILT_IN_POLICY
from service.store.store import DAY_MS, StoreOptions

BATCH = 500


async def started(url: str, cache_bytes: int) -> Engine:
    """Start an engine with so much memory for rows."""
    options = StoreOptions(url, DEFAULT_BANK, 30 * DAY_MS, read_timeout_s=5.0)
    engine = Engine(options, [BUILT_IN_POLICY.read_text()], cache_bytes=cache_bytes)
    await engine.start(background=False)
    return engine


async def load(engine: Engine, shape: Shape, now_ms: int) -> dict[str, float]:
    """Load a world, noting how long it took."""
    parsed = [parse_event(event) for event in events(shape, now_ms)]
    begun_s = time.perf_counter()
    for at in range(0, len(parsed), BATCH):
        await engine.apply(parsed[at : at + BATCH], now_ms)
    taken_s = time.perf_counter() - begun_s
    return {"events": len(parsed), "events_per_s": len(parsed) / taken_s}


async def time_reads(engine: Engine, now_ms: int, reads: int) -> dict[str, dict[str, float]]:
    """Time reads of the reader's feed."""
    request = FeedRequest(READER, k=20, budget_ms=10_000.0)
    cpu_ms, stages = [], []
    for _ in range(reads + 20):
        begun_s = time.process_time()
        answer = await engine.feed(request, now_ms)
        cpu_ms.append((time.process_time() - begun_s) * 1000)
        stages.append(answer.stages_ms)
        if not answer.complete or len(answer.items) != request.k:
            raise SystemExit("the feed of the reference world is not complete")
    cpu_ms, stages = sorted(cpu_ms[20:]), stages[20:]
    return {
        "cpu_ms": {"median": statistics.median(cpu_ms), "least": cpu_ms[0], "p90": cpu_ms[int(0.9 * reads)]},
        "stages_ms": {name: statistics.median(stage[name] for stage in stages) for name in stages[0]},
    }


async def measure(url: str, shape: Shape, reads: int) -> dict[str, Any]:
    """Load a world and time reads of it, cold and warm."""
    now_ms = time.time_ns() // 1_000_000
    warm = await started(url, 64 << 20)
    figures: dict[str, Any] = {
        "shape": {"ties": shape.ties, "edges": shape.ties * shape.edges, "seed": shape.seed, "reads": reads},
        "loading": await load(warm, shape, now_ms),
    }
    cold = await started(url, 0)
    for name, engine in (("cold", cold), ("warm", warm)):
        figures[name] = await time_reads(engine, now_ms, reads)
        await engine.close()
    return figures


def main() -> None:
    """Run the benchmark and print its table, or JSON."""
    parser = argparse.ArgumentParser(description="CPU of one feed read in the reference world.")
    parser.add_argument("--reads", type=int, default=300)
    parser.add_argument("--ties", type=int, default=300)
    parser.add_argument("--json", action="store_true")
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder, EmbeddedServer(Path(folder) / "data") as server:
        figures = uvloop.run(measure(server.url, Shape(ties=options.ties), options.reads))
    if options.json:
        print(json.dumps(figures))
        return
    print(f"world    {figures['shape']}")
    print(f"loading  {figures['loading']['events_per_s']:,.0f} events a second")
    for way in ("cold", "warm"):
        for name, row in figures[way].items():
            print(f"{way:<9}{name:<11}" + "   ".join(f"{key} {value:.2f}" for key, value in row.items()))


if __name__ == "__main__":
    main()
