"""One command, one run, one table: see the package's documentation in docs/performance.md."""

import argparse
import asyncio
import json
import os
import platform
import tempfile
import time
from pathlib import Path
from typing import Any

import redis
import uvloop

from loadtests.peers import growth, report
from loadtests.peers.side_by_side import compare
from loadtests.reference import Shape
from service.embedded import EmbeddedServer


def conditions() -> dict[str, str]:
    """Say on what the figures were taken."""
    with tempfile.TemporaryDirectory() as folder, EmbeddedServer(Path(folder) / "data") as server:
        info = redis.Redis.from_url(server.url).info("server")
    name = "valkey" if "valkey_version" in info else "redis"
    return {
        "python": platform.python_version(),
        "system": f"{platform.system()} {platform.machine()}, {os.cpu_count()} cores",
        "server": f"{name} {info.get('valkey_version', info['redis_version'])}, unix socket",
        "date": time.strftime("%Y-%m-%d", time.gmtime()),
    }


def measure(*, quick: bool, events: int) -> dict[str, Any]:
    """Take all figures; the import is one of so many events."""
    shape = Shape(ties=60, strangers=300, crowd_edges=2_000) if quick else Shape()
    with tempfile.TemporaryDirectory() as folder, EmbeddedServer(Path(folder) / "data") as server:
        reads = uvloop.run(compare(server, shape, rounds=3 if quick else 20))
    return {
        "conditions": conditions(),
        "reads": reads,
        "growth": growth.all_reads(10 if quick else 100),
        "ingest": [growth.ingest(batch, 1.0 if quick else 6.0) for batch in growth.BATCHES],
        "single_event": growth.single_event(50 if quick else 1_000),
        "import": growth.imported(60_000 if quick else events),
        "memory": asyncio.run(growth.memory(Shape(strangers=500, crowd_edges=5_000))),
    }


def main() -> None:
    """Run the benchmark."""
    parser = argparse.ArgumentParser(description="Feed reads beside other ways to get the same top posts.")
    parser.add_argument("--quick", action="store_true", help="small worlds, in half a minute")
    parser.add_argument("--events", type=int, default=5_000_000, help="size of the import")
    parser.add_argument("--json", action="store_true", help="print the figures as JSON")
    parser.add_argument("--report", type=Path, metavar="DIR", help="write figures.json and plots here")
    options = parser.parse_args()
    figures = measure(quick=options.quick, events=options.events)
    if options.report:
        options.report.mkdir(parents=True, exist_ok=True)
        (options.report / "figures.json").write_text(json.dumps(figures, indent=1) + "\n", encoding="utf-8")
        report.plot(figures, options.report)
    if options.json:
        print(json.dumps(figures))
    else:
        report.show(figures)


if __name__ == "__main__":
    main()
