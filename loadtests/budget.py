"""Does the budget hold? `python -m loadtests.budget` reads the feed of a reader with 5,000 ties under 20 ms.

The world is written straight into an embedded store (`loadtests.peers.state`), served over HTTP by one worker, and read
again and again on one connection, cold (the worker remembers nothing) and warm. Prints percentiles of the time from
request to answer as the client sees it, how many answers were complete, and how far the slowest overran.
"""

import argparse
import json
import tempfile
import time
from pathlib import Path

import uvloop

from loadtests.peers import served, state
from loadtests.reference import READER
from service.embedded import EmbeddedServer


def measure(process: served.Served, reads: int, budget_ms: float) -> dict[str, float]:
    """Read a feed; returns percentiles in milliseconds and the share of complete answers."""
    client, path = served.Client(process.port), f"/v1/feeds/{READER}?k=20&budget_ms={budget_ms:g}"
    times, complete = [], 0
    for number in range(-20, reads):
        begun_s = time.perf_counter()
        page = json.loads(client.get(path))
        taken_ms = (time.perf_counter() - begun_s) * 1000
        if len(page["items"]) != 20:
            raise SystemExit("a page is short")
        if number >= 0:
            times.append(taken_ms)
            complete += page["complete"]
    client.close()
    times.sort()
    return {
        "p50_ms": times[reads // 2],
        "p99_ms": times[int(reads * 0.99)],
        "p999_ms": times[int(reads * 0.999)],
        "most_ms": times[-1],
        "complete": complete / reads,
    }


def main() -> None:
    """Run the benchmark and print its table, or JSON."""
    parser = argparse.ArgumentParser(description="Percentiles of feed reads under a budget.")
    parser.add_argument("--ties", type=int, default=5_000)
    parser.add_argument("--edges", type=int, default=60, help="of each tie")
    parser.add_argument("--budget-ms", type=float, default=20.0)
    parser.add_argument("--reads", type=int, default=3_000)
    parser.add_argument("--json", action="store_true")
    options = parser.parse_args()
    figures: dict[str, dict[str, float]] = {}
    with tempfile.TemporaryDirectory() as folder, EmbeddedServer(Path(folder) / "data") as server:
        uvloop.run(state.write(server.url, options.ties, options.edges))
        for name, cache_mb in (("cold", 0), ("warm", 256)):
            with served.serve(server.url, "--cache-mb", str(cache_mb), "--log-level", "warning") as process:
                figures[name] = measure(process, options.reads, options.budget_ms)
    if options.json:
        print(json.dumps(figures))
        return
    print(f"{options.ties} ties of {options.edges} edges, budget {options.budget_ms:g} ms, {options.reads} reads each")
    for name, row in figures.items():
        print(f"{name:<6}" + "   ".join(f"{key} {value:.2f}" for key, value in row.items()))


if __name__ == "__main__":
    main()
