"""Real signatures, imported by the command, ranked as brute force over all of them ranks.

Source of the events: Debian package debian-keyring 2022.12.24 (see `tests/keyring.py`).
"""

import gzip
import json
import os
import random
import subprocess
import sys
import time
import tomllib
from collections import defaultdict
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any, TypeVar

import pytest

from service.feed.types import ExplainRequest, FeedRequest
from tests import keyring
from tests.engines import make_engine
from tests.oracle import DAY_MS, Edge, Event, Oracle, Policy, assert_same_feed

T = TypeVar("T")

ROOT = Path(__file__).parent.parent
COMMAND = [sys.executable, "-c", "from service.cli.main import main; main()"]
RETENTION_DAYS = 500
READERS = 50


class IndexedOracle(Oracle):
    """The oracle with its edges sorted into drawers, for as many edges as there are here; its rules are untouched."""

    def __init__(self, accepted: Sequence[Event], policy: Policy) -> None:
        super().__init__(accepted, policy)
        self._by_post: defaultdict[str, list[Edge]] = defaultdict(list)
        for edge in self.edges:
            self._by_post[edge.post].append(edge)
        self._dealings: defaultdict[tuple[str, str], list[Edge]] = defaultdict(list)
        for edge in self.interactions:
            if edge.post in self.posts:
                self._dealings[edge.actor, self.posts[edge.post].author].append(edge)
        self._affinities: dict[tuple[str, str, int], float] = {}
        self._all_edges = self.edges
        assert not self.erased_at

    def _interactions_with(self, reader: str, person: str) -> list[Edge]:
        return self._dealings[reader, person]

    def affinity(self, reader: str, person: str, t_ms: int) -> float:
        """Remember what was worked out once."""
        asked = reader, person, t_ms
        if asked not in self._affinities:
            self._affinities[asked] = super().affinity(*asked)
        return self._affinities[asked]

    def score(self, reader: str, post: str, t_ms: int) -> float:
        """Look at the post's edges only."""
        return self._among(post, lambda: Oracle.score(self, reader, post, t_ms))

    def eligible(self, reader: str, post: str) -> bool:
        """Look at the post's edges only."""
        return self._among(post, lambda: Oracle.eligible(self, reader, post))

    def _among(self, post: str, ask: Callable[[], T]) -> T:
        self.edges = self._by_post[post]
        try:
            return ask()
        finally:
            self.edges = self._all_edges


@pytest.fixture(scope="module")
def sent(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path]:
    """The file of events and the file of their policy, as the writer's command makes them."""
    folder = tmp_path_factory.mktemp("keyring")
    events, policy = folder / "keyring.ndjson.gz", folder / "keyring.toml"
    keyring.main([str(events), "--policy", str(policy)])
    return events, policy


def imported(url: str, sent: tuple[Path, Path]) -> dict[str, Any]:
    """Import the file with the real command, and give its summary."""
    environment = {"WAXWANE_STORE": url, "WAXWANE_RETENTION": keyring.RETENTION, "WAXWANE_POLICIES": str(sent[1])}
    result = subprocess.run(
        [*COMMAND, "import", "--json", str(sent[0])],
        capture_output=True,
        text=True,
        cwd=ROOT,
        env=os.environ | environment,
        check=False,
    )
    assert (result.returncode, result.stderr) == (0, "")
    return dict(json.loads(result.stdout))


def oracle_of(now_ms: int, sent_events: Sequence[Event]) -> IndexedOracle:
    """Brute force over the events in the file."""
    policy = tomllib.loads(keyring.POLICY_TOML)
    oracle = IndexedOracle.from_events(sent_events, now_ms, RETENTION_DAYS * DAY_MS, policy=policy)
    assert isinstance(oracle, IndexedOracle)
    assert set(oracle.verdicts) == {"applied"}
    return oracle


async def test_feeds_of_real_signatures(redis_db: str, sent: tuple[Path, Path]) -> None:
    """50 people's whole feeds have the posts, scores and order that brute force over 17,925 events gives them."""
    events = read(sent[0])
    summary = imported(redis_db, sent)
    assert [summary[name] for name in ("read", "applied", "rejected")] == [17_925, 17_925, 0]
    again = imported(redis_db, sent)
    assert [again[name] for name in ("read", "duplicate", "applied")] == [17_925, 17_925, 0]
    engine = make_engine(redis_db, keyring.POLICY_TOML, retention_days=RETENTION_DAYS)
    await engine.start(background=False)
    try:
        now_ms = time.time_ns() // 1_000_000
        oracle = oracle_of(now_ms, events)
        lengths = []
        for reader in chosen_readers(events):
            answer = await engine.feed(FeedRequest(reader, k=5_000, budget_ms=60_000.0), now_ms)
            assert answer.complete
            expected = oracle.feed(reader, None, now_ms)
            assert_same_feed(expected, [(item.post, item.score) for item in answer.items])
            lengths.append(len(expected))
            if expected:
                await assert_explained(engine, oracle, reader, expected[0][0], now_ms)
        assert len(lengths) == READERS
        assert max(lengths) > 500
    finally:
        await engine.close()


async def assert_explained(engine: Any, oracle: Oracle, reader: str, post: str, now_ms: int) -> None:
    """Check each part of a score against brute force."""
    found = await engine.explain(ExplainRequest(reader, post), now_ms)
    parts = oracle.parts(reader, post, now_ms)
    crowd = parts.pop()
    known = [part for part in parts if part["source"] != "self"]
    assert found.crowd.product == pytest.approx(crowd["product"], rel=1e-9, abs=1e-12)
    assert sorted((part.actor, part.kind, part.at_ms) for part in found.ties) == sorted(
        (part["actor"], part["kind"], part["at"]) for part in known
    )
    total = sum(part["product"] for part in known)
    assert sum(part.product for part in found.ties) == pytest.approx(total, rel=1e-9, abs=1e-12)


def test_drawers_change_no_score(sent: tuple[Path, Path]) -> None:
    """The oracle with drawers answers what the plain one does."""
    events = read(sent[0])
    now_ms = max(event["at"] for event in events)
    quick = oracle_of(now_ms, events)
    plain = Oracle(quick.accepted, quick.policy)
    reader = chosen_readers(events)[0]
    posts = random.Random(7).sample(sorted(plain.posts), 12)
    for post in [*posts, quick.feed(reader, 1, now_ms)[0][0]]:
        assert quick.score(reader, post, now_ms) == plain.score(reader, post, now_ms)
        assert quick.eligible(reader, post) == plain.eligible(reader, post)


def read(path: Path) -> list[Event]:
    """Read the events of the file."""
    with gzip.open(path, "rt", encoding="utf-8") as lines:
        return [json.loads(line) for line in lines]


def chosen_readers(events: Sequence[Event]) -> list[str]:
    """Choose the 10 people with the most ties, and 40 others."""
    ties: defaultdict[str, int] = defaultdict(int)
    for event in events:
        ties[event["actor"]] += event["type"] == "tie"
    ordered = sorted(ties, key=lambda person: (-ties[person], person))
    return [*ordered[:10], *random.Random(11).sample(ordered[10:], READERS - 10)]
