"""How fast `waxwane import` is: `python -m loadtests.import_rate --events 5000000`.

The file is generated: interactions in order of time over a week, by 100,000 people on 500,000 posts whose popularity
falls as rank^-0.8. The server is one of its own, without an append-only file, so that the rate is not the disk's.
"""

import argparse
import sys
import tempfile
import threading
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any, Self

import numpy as np
import orjson
import redis

from service.cli.main import main as waxwane
from service.embedded import EmbeddedServer

PEOPLE, POSTS, WEEK_MS = 100_000, 500_000, 7 * 86_400_000
KINDS = ("like", "comment", "share", "comment.photo")
KIND_SHARES = (0.6, 0.2, 0.1, 0.1)
_AT_ONCE = 100_000


def write_events(path: Path, events: int, seed: int) -> None:
    """Write a file of interactions, up to now.

    Args:
        path: the file.
        events: how many.
        seed: of everything drawn.

    """
    rng = np.random.default_rng(seed)
    popularity = 1 / np.arange(1, POSTS + 1) ** 0.8
    cumulated = np.cumsum(popularity / popularity.sum())
    at_ms = np.sort(time.time_ns() // 1_000_000 - rng.integers(0, WEEK_MS, events))
    with path.open("wb") as file:
        for first in range(0, events, _AT_ONCE):
            times = np.datetime_as_string(at_ms[first : first + _AT_ONCE].astype("M8[ms]")).tolist()
            actors = rng.integers(0, PEOPLE, len(times)).tolist()
            posts = np.searchsorted(cumulated, rng.random(len(times))).clip(max=POSTS - 1).tolist()
            kinds = rng.choice(len(KINDS), len(times), p=KIND_SHARES).tolist()
            rows = zip(times, actors, posts, kinds, strict=True)
            file.writelines(_line(first + i, *row) for i, row in enumerate(rows))


def _line(number: int, at: str, actor: int, post: int, kind: int) -> bytes:
    event = {"id": f"e{number}", "type": "interaction", "at": f"{at}Z", "actor": f"gardener-{actor}"}
    return orjson.dumps(event | {"post": f"bed-{post}", "kind": KINDS[kind]}, option=orjson.OPT_APPEND_NEWLINE)


class Peak:
    """The most memory that this process and its children, the server aside, held at a time, MiB.

    Args:
        server_pid: process id of the server.

    """

    def __init__(self, server_pid: int) -> None:
        self.mib = 0.0
        self._server_pid = server_pid
        self._ended = threading.Event()
        self._thread = threading.Thread(target=self._watch, daemon=True)

    def __enter__(self) -> Self:
        self._thread.start()
        return self

    def __exit__(self, *_exception: object) -> None:
        self._ended.set()
        self._thread.join()

    def _watch(self) -> None:
        while not self._ended.wait(0.1):
            self.mib = max(self.mib, sum(_resident_mib(pid) for pid in _family(self._server_pid)))


def _family(without_pid: int) -> Iterator[str]:
    yield "self"
    for task in Path("/proc/self/task").iterdir():
        yield from (pid for pid in (task / "children").read_text().split() if int(pid) != without_pid)


def _resident_mib(pid: str) -> float:
    try:
        lines = Path(f"/proc/{pid}/status").read_text().splitlines()
    except FileNotFoundError:
        return 0.0
    return next((int(line.split()[1]) / 1024 for line in lines if line.startswith("VmRSS")), 0.0)


def measure(path: Path) -> dict[str, Any]:
    """Import a file into an empty store; say how long the server's and our own processors worked for it."""
    with (
        tempfile.TemporaryDirectory() as data,
        EmbeddedServer(Path(data)) as server,
        redis.Redis.from_url(server.url) as client,
    ):
        client.config_set("appendonly", "no")
        before: Any = client.info("cpu")
        begun_s = time.perf_counter()
        with Peak(int(client.info("server")["process_id"])) as peak:  # type: ignore[index]  # no awaitable here
            sys.argv = ["waxwane", "import", "--store", server.url, str(path)]
            try:
                waxwane()
            except SystemExit as ending:
                if ending.code:
                    raise
        taken_s = time.perf_counter() - begun_s
        after: Any = client.info("cpu")
        used_s = sum(after[name] - before[name] for name in ("used_cpu_user", "used_cpu_sys"))
        memory: Any = client.info("memory")
    return {
        "seconds": taken_s,
        "server_cpu_s": used_s,
        "peak_mib": peak.mib,
        "server_mib": memory["used_memory"] / (1 << 20),
    }


def main() -> None:
    """Generate a file, import it and print the figures."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--events", type=int, default=1_000_000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--json", action="store_true", help="print the figures as JSON, on the last line")
    asked = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "events.ndjson"
        write_events(path, asked.events, asked.seed)
        found = measure(path)
    if asked.json:
        rate = {"events": asked.events, "events_per_s": asked.events / found["seconds"]}
        sys.stdout.write(orjson.dumps(rate | found).decode() + "\n")
        return
    sys.stdout.write(f"{found['server_cpu_s'] / asked.events * 1e6:.1f} µs of the server's processor an event\n")
    sys.stdout.write(f"{found['peak_mib']:,.0f} MiB at most, {found['server_mib']:,.0f} MiB in the server\n")


if __name__ == "__main__":
    main()
