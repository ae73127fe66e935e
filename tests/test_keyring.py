"""Brute-force figures over real signatures, and the events made of them.

Source of every figure marked so: Debian package debian-keyring 2022.12.24, usr/share/keyrings/debian-keyring.gpg,
summed over the whole package with direct loops and retyped here; the fixture holds the rows they depend on.
"""

import gzip
import json
import tomllib
from collections import defaultdict
from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path

import pytest

from tests.keyring import FIXTURE, POLICY_TOML, RETENTION, WINDOW_END_S, WINDOW_START_S, keyring_events, main, rows
from tests.oracle import DAY_MS, duration_ms, look_up

AT_S = int(datetime(2014, 9, 1, tzinfo=UTC).timestamp())
DAY_S = 86_400
NOW_MS = 1_777_885_200_000
READER = "b418f690be76"
WEIGHTS = {"cert_generic": 1.0, "cert_casual": 2.0, "cert_positive": 3.0}


def decayed(half_life_s: float, weight: Callable[[str], float] = WEIGHTS.__getitem__) -> dict[str, float]:
    """Sum the signatures of each post up to `AT_S` with one half-life."""
    sums: defaultdict[str, float] = defaultdict(float)
    for row in rows():
        if row["type"] == "interaction" and row["time"] <= AT_S:
            sums[row["post"]] += weight(row["kind"]) * 2.0 ** (-(AT_S - row["time"]) / half_life_s)
    return dict(sums)


def best(sums: dict[str, float], count: int) -> list[float]:
    return sorted(sums.values(), reverse=True)[:count]


def test_window_counts() -> None:
    """The window holds 11,341 signatures by 665 actors on 1,588 posts of 560 authors (debian-keyring 2022.12.24)."""
    window = [row for row in rows() if WINDOW_START_S <= row["time"] < WINDOW_END_S]
    signatures = [row for row in window if row["type"] == "interaction"]
    authors = {row["id"]: row["author"] for row in rows() if row["type"] == "post"}
    posts = {row["post"] for row in signatures}
    counts = (len(signatures), len({row["actor"] for row in signatures}), len(posts))
    assert counts == (11_341, 665, 1_588)
    assert len({authors[post] for post in posts}) == 560


def test_one_day_half_life() -> None:
    """At a half-life of a day the sums are those of the whole package (debian-keyring 2022.12.24)."""
    sums = decayed(DAY_S)
    assert sum(sums.values()) == pytest.approx(236.587965, abs=5e-7)
    assert best(sums, 5) == pytest.approx([6.924025, 6.923979, 4.08416, 4.08416, 4.08416], abs=5e-7)


def test_seven_day_half_life() -> None:
    """At a half-life of seven days the sums are those of the whole package (debian-keyring 2022.12.24)."""
    sums = decayed(7 * DAY_S)
    assert sum(sums.values()) == pytest.approx(736.139513, abs=5e-7)
    assert best(sums, 5) == pytest.approx([11.627513] * 3 + [10.084548] * 2, abs=5e-7)
    assert sum(decayed(7 * DAY_S, lambda _: 1.0).values()) == pytest.approx(653.619426781, abs=5e-7)


def reader_feed() -> dict[str, float]:
    """Score every post for `READER`: half-life 7 d, creation weight 1, affinity 1 after a signature, else 0.1."""
    past = [row for row in rows() if row["time"] <= AT_S]
    authors = {row["id"]: row["author"] for row in past if row["type"] == "post"}
    signed = {authors[row["post"]] for row in past if row["type"] == "interaction" and row["actor"] == READER}
    assert len(signed) == 138
    sums: defaultdict[str, float] = defaultdict(float)
    for row in past:
        if row["type"] == "delete":
            continue
        actor = row["author"] if row["type"] == "post" else row["actor"]
        affinity = 0.0 if actor == READER else 1.0 if actor in signed else 0.1
        weight = 1.0 if row["type"] == "post" else WEIGHTS[row["kind"]]
        post = row["id"] if row["type"] == "post" else row["post"]
        sums[post] += affinity * weight * 2.0 ** (-(AT_S - row["time"]) / (7 * DAY_S))
    return {post: score for post, score in sums.items() if authors[post] != READER}


def test_one_readers_feed() -> None:
    """A reader who had signed 138 authors gets these five first (debian-keyring 2022.12.24)."""
    feed = reader_feed()
    first = sorted(feed.items(), key=lambda item: -item[1])[:5]
    assert [post for post, _ in first[:2]] == ["7f71f9596b5c", "5f33f56d10c7"]
    assert {post for post, _ in first[2:]} == {"63e98882f25a", "a743712d6314", "df914b13838b"}
    expected = [5.930001684, 5.929994849, 4.414840538, 4.414840538, 4.414840538]
    assert [score for _, score in first] == pytest.approx(expected, abs=5e-10)


def test_one_readers_candidates() -> None:
    """2,656 posts stood or had stood by then, 10 of them the reader's own; 2,546 were not withdrawn."""
    past = [row for row in rows() if row["time"] <= AT_S]
    posts = [row for row in past if row["type"] == "post"]
    withdrawn = {row["post"] for row in past if row["type"] == "delete"}
    assert (len(posts), len(reader_feed()), len(withdrawn)) == (2_656, 2_646, 110)
    assert sum(row["id"] not in withdrawn for row in posts) == 2_546


def test_fixture_is_hashed_and_small() -> None:
    """The fixture is deterministic gzip under 180 kB, and every name in it is 12 hexadecimal digits."""
    packed = FIXTURE.read_bytes()
    assert len(packed) < 180_000
    assert packed[4:8] == b"\0\0\0\0"
    for row in rows():
        for name in {"id", "author", "post", "actor"} & row.keys():
            assert len(bytes.fromhex(row[name])) == 6


def test_events_keep_their_distances() -> None:
    """Events lie within the retention named, the last at now, as far apart as the signatures were."""
    events = list(keyring_events(NOW_MS))
    times = [event["at"] for event in events]
    assert times == sorted(times)
    assert times[-1] == NOW_MS
    assert 486 * DAY_MS < NOW_MS - times[0] < duration_ms(RETENTION)
    first, last = (next(e["at"] for e in part if e["type"] == "interaction") for part in (events, events[::-1]))
    signed = [row["time"] for row in rows() if row["type"] == "interaction" and row["time"] >= WINDOW_START_S]
    assert last - first == (signed[-1] - signed[0]) * 1000


def test_events_by_type() -> None:
    """The window gives 11,341 interactions of three kinds and 51 withdrawals, and each pair is tied once."""
    events = list(keyring_events(NOW_MS))
    assert len({event["id"] for event in events}) == len(events)
    types = [event["type"] for event in events]
    assert (types.count("interaction"), types.count("withdraw")) == (11_341, 51)
    kinds = {event["kind"] for event in events if event["type"] == "interaction"}
    assert kinds == {"cert.generic", "cert.casual", "cert.positive"}
    ties = [(event["actor"], event["target"]) for event in events if event["type"] == "tie"]
    assert len(set(ties)) == len(ties)
    assert all(actor != target for actor, target in ties)


def test_every_signature_has_its_post_and_tie() -> None:
    """When a signature arrives in order, its post is known and its actor follows the author."""
    authors: dict[str, str] = {}
    follows: set[tuple[str, str]] = set()
    for event in keyring_events(NOW_MS):
        if event["type"] == "post":
            authors[event["post"]] = event["actor"]
        if event["type"] == "tie":
            follows.add((event["actor"], event["target"]))
        if event["type"] == "interaction":
            assert (event["actor"], authors[event["post"]]) in follows


def test_policy_knows_the_kinds() -> None:
    """The policy that goes with the events lists every kind and form they use."""
    weights = tomllib.loads(POLICY_TOML)["weights"]
    for event in keyring_events(NOW_MS):
        if event["type"] in {"post", "interaction"}:
            kind = event.get("kind", f"post.{event.get('form')}")
            assert look_up(kind, weights) is not None


@pytest.mark.parametrize("name", ["out.ndjson", "out.ndjson.gz"])
def test_writer(tmp_path: Path, name: str) -> None:
    """The command writes one event a line, and the policy beside it."""
    out, policy = tmp_path / name, tmp_path / "keyring.toml"
    main([str(out), "--now-ms", str(NOW_MS), "--policy", str(policy)])
    content = gzip.decompress(out.read_bytes()) if name.endswith(".gz") else out.read_bytes()
    assert [json.loads(line) for line in content.splitlines()] == list(keyring_events(NOW_MS))
    assert policy.read_text() == POLICY_TOML
