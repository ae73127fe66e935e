"""CPU that the service spends on one feed read: `python -m loadtests.read_cpu`.

Loads the reference world into an embedded store through the engine and reads the reader's feed without HTTP, again and
again, cold: every read fetches all rows. Prints CPU of this process per read (median, least, p90) and the median of
each stage's wall time. Redis runs in its own process and is not counted.
"""

import argparse
import asyncio
import json
import statistics
import tempfile
import time
from pathlib import Path

from loadtests.reference import READER, Shape, events
from scoring.bank import DEFAULT_BANK
from service.embedded import EmbeddedServer
from service.engine import Engine
from service.events.model import parse_event
from service.feed.types import FeedRequest
from service.settings import BUILT_IN_POLICY
from service.store.store import DAY_MS, StoreOptions

BATCH = 500


async def loaded_engine(url: str, shape: Shape, now_ms: int) -> tuple[Engine, dict[str, float]]:
    """Start an engine and load a world, noting how long it took."""
    options = StoreOptions(url, DEFAULT_BANK, 30 * DAY_MS, read_timeout_s=5.0)
    engine = Engine(options, [BUILT_IN_POLICY.read_text()])
    await engine.start(background=False)
    parsed = [parse_event(event) for event in events(shape, now_ms)]
    begun_s = time.perf_counter()
    for at in range(0, len(parsed), BATCH):
        await engine.apply(parsed[at : at + BATCH], now_ms)
    taken_s = time.perf_counter() - begun_s
    return engine, {"events": len(parsed), "events_per_s": len(parsed) / taken_s}


async def measure(url: str, shape: Shape, reads: int) -> dict[str, object]:
    """Load a world and time reads of it."""
    now_ms = time.time_ns() // 1_000_000
    engine, loading = await loaded_engine(url, shape, now_ms)
    request = FeedRequest(READER, k=20, budget_ms=10_000.0)
    cpu_ms, stages = [], []
    for _ in range(reads + 20):
        begun_s = time.process_time()
        answer = await engine.feed(request, now_ms)
        cpu_ms.append((time.process_time() - begun_s) * 1000)
        stages.append(answer.stages_ms)
        if not answer.complete or len(answer.items) != request.k:
            raise SystemExit("the feed of the reference world is not complete")
    await engine.close()
    cpu_ms, stages = sorted(cpu_ms[20:]), stages[20:]
    return {
        "shape": {"ties": shape.ties, "edges": shape.ties * shape.edges, "seed": shape.seed},
        "loading": loading,
        "reads": reads,
        "cpu_ms": {"median": statistics.median(cpu_ms), "least": cpu_ms[0], "p90": cpu_ms[int(0.9 * reads)]},
        "stages_ms": {name: statistics.median(stage[name] for stage in stages) for name in stages[0]},
    }


def main() -> None:
    """Run the benchmark and print its table, or JSON."""
    parser = argparse.ArgumentParser(description="CPU of one feed read in the reference world.")
    parser.add_argument("--reads", type=int, default=300)
    parser.add_argument("--ties", type=int, default=300)
    parser.add_argument("--json", action="store_true")
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder, EmbeddedServer(Path(folder) / "data") as server:
        figures = asyncio.run(measure(server.url, Shape(ties=options.ties), options.reads))
    if options.json:
        print(json.dumps(figures))
        return
    print(f"world          {figures['shape']}")
    print(f"loading        {figures['loading']}")
    for name in ("cpu_ms", "stages_ms"):
        row = figures[name]
        assert isinstance(row, dict)  # noqa: S101  built above
        print(f"{name:<15}" + "   ".join(f"{key} {value:.2f}" for key, value in row.items()))


if __name__ == "__main__":
    main()
