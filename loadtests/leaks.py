"""Is anybody shown what they may not see? `python -m loadtests.leaks` reads 100,000 times and looks at every post.

Random worlds full of blocks, mutes, audiences, withdrawals and erasures (`tests/worlds.py`) are sent, a batch at a
time, to a service with four workers on an embedded store. After each answer, readers read at once, over several
connections and so from every worker: ranked feeds that go beyond ties, newest first, by topic, what is popular, pages
of cursors that are older than the last events, and explanations. What each may see is computed by brute force
(`tests/oracle.py`) from the events answered so far. One post shown wrongly ends the run with status 1.
"""

import argparse
import json
import socket
import tempfile
import time
from dataclasses import dataclass, field
from pathlib import Path
from random import Random
from typing import Any
from urllib.parse import quote

import tomli_w

from loadtests.peers.served import Client, serve
from service.embedded import EmbeddedServer
from tests.oracle import Oracle
from tests.worlds import World, random_schedule, random_world

SHARES = {"post": 3, "interaction": 6, "tie": 8, "retract": 1, "withdraw": 2, "seen": 1, "erase": 1}
DAY_MS, MINUTE_MS = 86_400_000, 60_000


@dataclass
class Reading:
    """Reads one world and counts what it saw."""

    clients: list[Client]
    world: World
    rng: Random
    reads: int = 0
    posts: int = 0
    cursors: list[tuple[str, str, str]] = field(default_factory=list)

    def read(self, oracle: Oracle) -> None:
        """Read once, in some way, as somebody."""
        reader, client = self.rng.choice(self.world.people), self.rng.choice(self.clients)
        way = self.rng.choice((self._ranked, self._newest, self._popular, self._page, self._explained))
        way(client, oracle, reader)
        self.reads += 1

    def _ranked(self, client: Client, oracle: Oracle, reader: str) -> None:
        extra = self.rng.choice(("", "&topics=beans", "&why=1", "&explore=0"))
        self._feed(client, oracle, reader, f"?k={self.rng.choice((2, 5, 50))}{extra}", extra)

    def _newest(self, client: Client, oracle: Oracle, reader: str) -> None:
        self._feed(client, oracle, reader, "?k=5&order=newest", "&order=newest")

    def _page(self, client: Client, oracle: Oracle, reader: str) -> None:
        if not self.cursors:
            return self._ranked(client, oracle, reader)
        reader, cursor, extra = self.cursors.pop(self.rng.randrange(len(self.cursors)))
        return self._feed(client, oracle, reader, f"?k=5&cursor={cursor}{extra}", extra)

    def _feed(self, client: Client, oracle: Oracle, reader: str, query: str, extra: str) -> None:
        page = json.loads(client.get(f"/v1/feeds/{quote(reader, safe='')}{query}"))
        self._look(oracle, reader, page, query)
        if page["next"] and len(self.cursors) < 200:
            self.cursors.append((reader, page["next"], extra.replace("&why=1", "").replace("&explore=0", "")))

    def _popular(self, client: Client, oracle: Oracle, reader: str) -> None:
        page = json.loads(client.get(f"/v1/popular?k=50&reader={quote(reader, safe='')}"))
        self._look(oracle, reader, page, "popular")

    def _explained(self, client: Client, oracle: Oracle, reader: str) -> None:
        post = self.rng.choice(self.world.posts)
        path = f"/v1/feeds/{quote(reader, safe='')}/posts/{quote(post, safe='')}"
        status, _ = client.ask("GET", path)
        if status == 200 and not oracle.visible(reader, post):
            raise SystemExit(f"leak: {path} is explained")
        self.posts += status == 200

    def _look(self, oracle: Oracle, reader: str, page: dict[str, Any], where: str) -> None:
        for item in page["items"]:
            self.posts += 1
            if not oracle.visible(reader, item["post"]):
                raise SystemExit(f"leak: {where} shows {item['post']!r} to {reader!r}")


def run(seed: int, reads: int) -> tuple[int, int]:
    """Send one world and read it; returns how many reads and posts there were."""
    now_ms = time.time_ns() // 1_000_000
    world = random_world(seed, people=9, posts=14, events=260, now_ms=now_ms, shares=SHARES)
    within = range(now_ms - 29 * DAY_MS, now_ms + 4 * MINUTE_MS)
    happenings = [event for event in world.events if event["at"] in within]
    policy = world.policy | {"beyond": {"share": 0.3, "fill": True}}
    with tempfile.TemporaryDirectory() as folder, EmbeddedServer(Path(folder) / "data") as server:
        file = Path(folder) / "policy.toml"
        file.write_text(tomli_w.dumps(policy))
        options = ("--workers", "4", "--policies", str(file), "--log-level", "warning")
        with serve(server.url, *options) as service:
            clients = [Client(service.port) for _ in range(8)]
            reading, arrived = Reading(clients, world, Random(seed)), []
            schedule = random_schedule(Random(seed), happenings)
            for batch in schedule:
                reading.rng.choice(clients).post("/v1/events", json.dumps(batch).encode(), check=False)
                arrived += batch
                oracle = Oracle.from_events(arrived, now_ms, policy=world.policy)
                for _ in range(1 + reads // len(schedule)):
                    reading.read(oracle)
            for client in clients:
                client.close()
    return reading.reads, reading.posts


def main() -> None:
    """Run the check."""
    parser = argparse.ArgumentParser(description="Look for posts shown to somebody who may not see them.")
    parser.add_argument("--reads", type=int, default=100_000)
    parser.add_argument("--worlds", type=int, default=20)
    parser.add_argument("--seed", type=int, default=1)
    options = parser.parse_args()
    begun_s, reads, posts = time.perf_counter(), 0, 0
    for seed in range(options.seed, options.seed + options.worlds):
        more_reads, more_posts = run(seed, options.reads // options.worlds)
        reads, posts = reads + more_reads, posts + more_posts
    taken_s = time.perf_counter() - begun_s
    print(f"{reads:,} reads of {options.worlds} worlds showed {posts:,} posts in {taken_s:.0f} s: no leak")


if __name__ == "__main__":
    socket.setdefaulttimeout(30)
    main()
