"""The whole service over HTTP against brute force, on worlds that Hypothesis chooses."""

import os
from typing import Any
from urllib.parse import quote

import orjson
import pytest
from fastapi.testclient import TestClient
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from scoring.bank import DEFAULT_BANK, fit
from scoring.policy import parse_policy
from service.times import format_ms
from service.web import clock
from service.web.app import create_app
from tests.engines import LATER_MS, flush, make_engine
from tests.oracle import Oracle, assert_same_feed, assert_tie_order, look_up
from tests.worlds import NOW_MS, World, random_world, schedules, worlds

EXAMPLES = int(os.environ.get("TEST_WORLDS", "40"))
CHOSEN = settings(
    max_examples=EXAMPLES,
    deadline=None,
    suppress_health_check=[HealthCheck.function_scoped_fixture, HealthCheck.too_slow, HealthCheck.data_too_large],
)


@pytest.fixture(autouse=True)
def _at_now(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(clock, "now_ms", lambda: NOW_MS)


@pytest.fixture
def url(redis_db: str) -> str:
    return redis_db


def client_on(url: str, world: World) -> TestClient:
    """Start the application on an empty store."""
    flush(url)
    return TestClient(create_app(make_engine(url, world.policy_toml)))


def post_events(client: TestClient, batch: list[dict[str, Any]]) -> dict[str, Any]:
    """Send a batch; a call in which every event is rejected is a problem with the same counters."""
    response = client.post("/v1/events", json=batch)
    assert response.status_code in (200, 422), response.text
    answer: dict[str, Any] = response.json()
    counted = answer["applied"] + answer["duplicate"] + answer["expired"] + len(answer["rejected"])
    assert counted == len(batch)
    return answer


def read_feed(client: TestClient, reader: str, **asked: Any) -> list[tuple[str, float | None]]:
    response = client.get(f"/v1/feeds/{quote(reader, safe='')}", params={"k": 200, "budget_ms": 9_000, **asked})
    assert response.status_code == 200, response.text
    answer = response.json()
    assert answer["complete"] is True
    return [(item["post"], item["score"]) for item in answer["items"]]


def check_feeds(client: TestClient, world: World, oracle: Oracle) -> None:
    for reader in world.people:
        for t_ms in (world.now_ms, world.now_ms + LATER_MS):
            expected = oracle.feed(reader, None, t_ms)
            actual = read_feed(client, reader, as_of=format_ms(t_ms))
            assert_same_feed(expected, actual)
            assert_tie_order(expected, actual)
        newest = read_feed(client, reader, order="newest")
        assert newest == oracle.feed(reader, None, world.now_ms, "newest")


def check_explanations(client: TestClient, world: World, oracle: Oracle) -> None:
    for reader in world.people:
        for post in world.posts:
            response = client.get(f"/v1/feeds/{quote(reader, safe='')}/posts/{quote(post, safe='')}")
            assert (response.status_code == 200) == oracle.visible(reader, post), response.text
            if response.status_code == 200:
                answer = response.json()
                total = sum(part["product"] for part in answer["parts"])
                for factor in answer["factors"]:
                    total *= factor["value"]
                assert total == pytest.approx(answer["score"], rel=1e-9, abs=1e-12)
                assert answer["score"] == pytest.approx(oracle.score(reader, post, world.now_ms), rel=1e-9, abs=1e-12)


@CHOSEN
@given(data=st.data())
def test_feeds_and_explanations_equal_brute_force(url: str, data: st.DataObject) -> None:
    """Whatever the world, the order, the repeats and the batches, every feed and every explanation is exact."""
    world = data.draw(worlds())
    with client_on(url, world) as client:
        for batch in data.draw(schedules(world.events)):
            post_events(client, batch)
        oracle = world.oracle()
        check_feeds(client, world, oracle)
        check_explanations(client, world, oracle)


@settings(CHOSEN, max_examples=max(5, EXAMPLES // 8))
@given(data=st.data())
def test_feeds_are_exact_after_every_prefix(url: str, data: st.DataObject) -> None:
    """After each answer, feeds equal brute force over what has arrived so far."""
    world = data.draw(worlds(max_events=25))
    arrived: list[dict[str, Any]] = []
    with client_on(url, world) as client:
        for batch in data.draw(schedules(world.events)):
            answer = post_events(client, batch)
            arrived += batch
            oracle = Oracle.from_events(arrived, world.now_ms, policy=world.policy)
            assert len(answer["rejected"]) == oracle.verdicts[-len(batch) :].count("rejected")
            check_feeds(client, world, oracle)


@settings(CHOSEN, max_examples=max(5, EXAMPLES // 4))
@given(data=st.data(), curves=st.sampled_from(["power", "off_bank"]))
def test_curves_outside_the_bank_keep_to_the_certified_error(url: str, data: st.DataObject, curves: str) -> None:
    """For a curve that the bank only follows, a score strays by at most the certified error on the crowd's edges."""
    world = data.draw(worlds(curves=curves))
    policy = parse_policy(world.policy_toml)
    error = fit(policy.curve, DEFAULT_BANK, 30 * 86_400_000, signed=True).error
    with client_on(url, world) as client:
        for batch in data.draw(schedules(world.events)):
            post_events(client, batch)
        oracle = world.oracle()
        for reader in world.people:
            expected = dict(oracle.feed(reader, None, world.now_ms))
            actual = dict(read_feed(client, reader))
            assert actual.keys() == expected.keys()
            for post, score in actual.items():
                weight = sum(
                    look_up(edge.kind, world.policy["weights"]) or 0.0 for edge in oracle.edges if edge.post == post
                )
                allowed = policy.affinity.crowd * error * weight + 1e-9 * (expected[post] or 0.0) + 1e-12
                assert abs((score or 0.0) - (expected[post] or 0.0)) <= allowed


def test_every_way_of_sending_ends_in_the_same_feeds(url: str) -> None:
    """One event a call, one array, NDJSON and CloudEvents without ids of their own give equal feeds."""
    world = random_world(11, people=5, posts=6, events=60)
    bodies: list[list[tuple[bytes, str]]] = [
        [(orjson.dumps(event), "application/json") for event in world.events],
        [(orjson.dumps(world.events), "application/json")],
        [(b"\n".join(orjson.dumps(event) for event in world.events), "application/x-ndjson")],
    ]
    answers = []
    for ways in bodies:
        with client_on(url, world) as client:
            for body, media in ways:
                client.post("/v1/events", content=body, headers={"content-type": media})
            answers.append([read_feed(client, reader) for reader in world.people])
    oracle = world.oracle()
    for feeds in answers:
        for reader, feed in zip(world.people, feeds, strict=True):
            assert_same_feed(oracle.feed(reader, None, world.now_ms), feed)
