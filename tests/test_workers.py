"""The real service with several workers: what one has acknowledged every other shows, whoever is killed meanwhile."""

import http.client
import os
import re
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from contextlib import closing, contextmanager, suppress
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path
from random import Random
from typing import Any
from urllib.parse import quote

import orjson
import pytest

from service.times import format_ms
from tests.engines import DAY_MS
from tests.oracle import Oracle, assert_same_feed
from tests.polling import alive, until
from tests.worlds import TYPE_SHARES, World, random_schedule, random_world

ROOT = Path(__file__).parent.parent
SERVE = [sys.executable, "-c", "from service.cli.main import main; main()", "serve"]
WORKERS = 4
HALF_LIFE_MS = 12 * 3_600_000
STRANGER, NOTE, SHARE, LIKE = 0.02, 1.5, 2.0, 0.5


class Service:
    """A running service."""

    def __init__(self, process: subprocess.Popen[str]) -> None:
        self.process = process
        assert process.stdout is not None
        found = re.search(r"http://(\S+)", process.stdout.readline())
        assert found
        self.address = found[1]

    def connect(self) -> http.client.HTTPConnection:
        """Open a connection."""
        return http.client.HTTPConnection(self.address, timeout=20)

    def get(self, path: str) -> Any:
        """Read on a fresh connection."""
        with closing(self.connect()) as connection:
            return call(connection, "GET", path)

    def workers(self) -> set[int]:
        """List the processes that answer."""
        children = Path(f"/proc/{self.process.pid}/task/{self.process.pid}/children").read_text().split()
        return {int(pid) for pid in children if b"spawn_main" in Path(f"/proc/{pid}/cmdline").read_bytes()}

    def answers(self) -> bool:
        """Tell whether it is ready."""
        with suppress(OSError, http.client.HTTPException, AssertionError):
            return bool(self.get("/readyz"))
        return False


@contextmanager
def serving(folder: Path, **settings: str) -> Iterator[Service]:
    """Run the service on the data in a folder; whatever still runs at the end is killed."""
    variables = {f"WAXWANE_{name.upper()}": value for name, value in settings.items()}
    variables |= {"WAXWANE_PORT": "0", "WAXWANE_DATA": str(folder / "data"), "WAXWANE_LOG_LEVEL": "warning"}
    variables |= {"PATH": "/usr/bin:/bin", "TMPDIR": str(folder)}
    with (folder / "log").open("a") as log:
        process = subprocess.Popen(SERVE, stdout=subprocess.PIPE, stderr=log, text=True, cwd=ROOT, env=variables)
    with process:
        try:
            service = Service(process)
            until(service.answers)
            yield service
        finally:
            process.terminate()
            with suppress(subprocess.TimeoutExpired):
                process.wait(20)
            process.kill()


def call(connection: http.client.HTTPConnection, method: str, path: str, document: Any = None) -> Any:
    body = None if document is None else orjson.dumps(document)
    connection.request(method, path, body, {"Content-Type": "application/json"} if body else {})
    answer = connection.getresponse()
    content = answer.read()
    assert answer.status == 200, content
    return orjson.loads(content) if content else {}


@dataclass
class Garden:
    """What mina's newest post must be worth to joel, who follows her and ada, by the contract."""

    service: Service
    number: int = 0
    clock_ms: int = 0
    edges: list[tuple[float, int]] = field(default_factory=list)
    hidden: bool = False

    def __post_init__(self) -> None:
        self.connection = self.service.connect()
        self.pool = ThreadPoolExecutor(WORKERS)

    def close(self) -> None:
        """Let go of the connection and the readers."""
        self.connection.close()
        self.pool.shutdown()

    def send(self, kind: str, actor: str, /, **fields: str) -> str:
        """Send one event on the connection that stays, once more where its worker has gone, and give its id."""
        self.number += 1
        self.clock_ms = max(self.clock_ms + 1, time.time_ns() // 1_000_000)
        id_ = f"e{self.number}"
        event = {"id": id_, "type": kind, "at": self.clock_ms, "actor": actor, **fields}
        try:
            answer = call(self.connection, "POST", "/v1/events", event)
        except (OSError, http.client.HTTPException):
            self.connection.close()
            self.connection = self.service.connect()
            answer = call(self.connection, "POST", "/v1/events", event)
        assert answer["applied"] + answer["duplicate"] == 1, answer
        return id_

    def expect(self, worth: float) -> None:
        """Expect an edge as old as the last event, weight times affinity being `worth`."""
        self.edges.append((worth, self.clock_ms))

    def expected(self, as_of: str) -> float:
        """Give the score at a time."""
        at_ms = round(datetime.fromisoformat(as_of).timestamp() * 1000)
        fresh = [(worth, 2.0 ** (-max(0, at_ms - edge_ms) / HALF_LIFE_MS)) for worth, edge_ms in self.edges]
        return float(sum(worth * left for worth, left in fresh))

    def check(self, post: str) -> None:
        """Read the feed on fresh connections at once: each shows what has been acknowledged."""
        for page in self.pool.map(self.service.get, ["/v1/feeds/joel?k=200&budget_ms=5000"] * WORKERS):
            scores = {item["post"]: item["score"] for item in page["items"]}
            assert page["complete"]
            if self.hidden:
                assert scores == {}
            elif self.edges:
                assert scores[post] == pytest.approx(self.expected(page["as_of"]), rel=1e-9)
            else:
                assert post not in scores

    def rounds(self, post: str) -> Iterator[None]:
        """Do all that changes a feed, step by step, with a read after each."""
        self.edges = []
        self.send("post", "mina", post=post, form="note")
        self.expect(NOTE)
        yield
        share = self.send("interaction", "ada", post=post, kind="share")
        self.expect(SHARE)
        yield
        self.send("interaction", "walt", post=post, kind="like")
        self.expect(STRANGER * LIKE)
        yield
        self.send("retract", "ada", event=share)
        self.edges.pop(1)
        yield
        for relation, hidden in (("mute", True), ("follow", False)):
            self.send("tie", "joel", target="mina", relation=relation)
            self.hidden = hidden
            yield
        for relation, hidden in (("block", True), ("none", False)):
            self.send("tie", "mina", target="joel", relation=relation)
            self.hidden = hidden
            yield
        self.send("post", "mina", post=post, form="note", audience="nobody")
        before, self.edges = self.edges, []
        yield
        self.send("post", "mina", post=post, form="note", audience="followers")
        self.edges = before
        yield
        self.send("withdraw", "walt", post=post)
        self.edges = []
        yield


def test_every_worker_shows_what_any_has_acknowledged(tmp_path: Path) -> None:
    """Over 200 events, each read right after by four fresh connections: post, score, withdrawal, block and mute."""
    with serving(tmp_path, workers=str(WORKERS)) as service, closing(Garden(service)) as garden:
        first, done = until(lambda: full(service)), 0
        garden.send("tie", "joel", target="mina", relation="follow")
        garden.send("tie", "joel", target="ada", relation="follow")
        for lap in range(19):
            if lap == 9:
                killed = kill_one(service, first)
            for _ in garden.rounds(f"bed {lap}"):
                garden.check(f"bed {lap}")
                done += 1
        assert done == 209
        second = until(lambda: full(service))
        assert len(second - first) == 1
        assert second == (first - {killed}) | (second - first)
        assert len(answered(tmp_path)) >= 3, "the reads went to several workers"


def full(service: Service) -> set[int]:
    """Give the workers once there are as many as there should be."""
    workers = service.workers()
    return workers if len(workers) == WORKERS else set()


def kill_one(service: Service, workers: set[int]) -> int:
    """Kill a worker and wait until another has taken its place."""
    victim = max(workers)
    os.kill(victim, signal.SIGKILL)
    until(lambda: not alive(victim) and len(service.workers() - {victim}) == WORKERS)
    return victim


def answered(folder: Path) -> set[str]:
    """List the processes that have counted requests."""
    return {path.stem.rpartition("_")[2] for path in folder.glob("waxwane-metrics-*/*.db")}


def test_a_kind_that_another_worker_met_first(tmp_path: Path) -> None:
    """Every worker exports and explains an edge of a kind that only one of them has heard of before."""
    with serving(tmp_path, workers="2") as service, closing(Garden(service)) as garden:
        garden.send("tie", "joel", target="mina", relation="follow")
        garden.send("post", "mina", post="bed", form="note")
        for number in range(8):
            garden.send("interaction", "ada", post="bed", kind=f"like.{number}")
            paths = ["/v1/people/ada", "/v1/people/mina", "/v1/feeds/joel", "/v1/feeds/joel/posts/bed"]
            person, _, _, why = garden.pool.map(service.get, paths)
            assert len(person["edges"]) == number + 1
            assert why["parts"][-1]["sum"] == pytest.approx(0.5 * (number + 1), rel=1e-3)


def whole_world(seed: int, now_ms: int) -> World:
    """Make a world without erasures whose events lie well within what is accepted."""
    world = random_world(seed, people=6, posts=10, events=260, now_ms=now_ms, shares=TYPE_SHARES | {"erase": 0})
    events = [event for event in world.events if now_ms - 29 * DAY_MS < event["at"] < now_ms]
    return World(world.policy, events, world.people, world.posts, now_ms)


def stream_until_killed(service: Service, batches: Sequence[list[dict[str, Any]]], kill_after: int) -> int:
    """Send batches until the service is killed amid them; give how many were acknowledged."""
    acknowledged = 0
    killer = threading.Timer(0.002, service.process.kill)
    with closing(service.connect()) as connection, suppress(OSError, http.client.HTTPException):
        for batch in batches:
            if acknowledged == kill_after:
                killer.start()
            if post_batch(connection, batch) is None:
                break
            acknowledged += 1
    return acknowledged


def post_batch(connection: http.client.HTTPConnection, batch: list[dict[str, Any]]) -> dict[str, Any] | None:
    """Send a batch and give its counters, None where the store had gone and nothing was acknowledged."""
    connection.request("POST", "/v1/events", orjson.dumps(batch), {"Content-Type": "application/json"})
    answer = connection.getresponse()
    content = answer.read()
    assert answer.status in (200, 422, 503), content
    counted: dict[str, Any] = orjson.loads(content)
    return None if answer.status == 503 else counted


def assert_feeds(service: Service, world: World, oracle: Oracle) -> None:
    """Check every reader's feed an hour ahead against brute force."""
    t_ms = world.now_ms + 3_600_000
    for reader in world.people:
        page = service.get(f"/v1/feeds/{quote(reader, safe='')}?k=200&budget_ms=9000&as_of={quote(format_ms(t_ms))}")
        assert page["complete"]
        actual = [(item["post"], item["score"]) for item in page["items"]]
        assert_same_feed(oracle.feed(reader, None, t_ms), actual)


@pytest.mark.parametrize(("seed", "kill_after"), [(1, 5), (2, 30)])
def test_a_service_killed_amid_a_stream_loses_nothing(tmp_path: Path, seed: int, kill_after: int) -> None:
    """Killed whole and started again on its data, it knows all it acknowledged; a resend ends in exact feeds."""
    world = whole_world(seed, time.time_ns() // 1_000_000)
    batches = random_schedule(Random(seed), world.events)
    batches = [batch[at : at + 4] for batch in batches for at in range(0, len(batch), 4)]
    (tmp_path / "policy.toml").write_text(world.policy_toml)
    chosen = {"workers": "2", "appendfsync": "always", "policies": str(tmp_path / "policy.toml")}
    with serving(tmp_path, **chosen) as service:
        acknowledged = stream_until_killed(service, batches, kill_after)
        assert kill_after <= acknowledged < len(batches)
        service.process.wait(20)
    with serving(tmp_path, **chosen) as service, closing(service.connect()) as connection:
        for batch in batches[:acknowledged]:
            counted = post_batch(connection, batch)
            assert counted is not None
            assert counted["applied"] == 0
        for batch in batches:
            assert post_batch(connection, batch) is not None
        assert_feeds(service, world, Oracle.from_events(world.events, world.now_ms, policy=world.policy))
