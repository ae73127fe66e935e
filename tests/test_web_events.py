"""POST /v1/events over HTTP."""

from typing import Any

import orjson
import pytest
from fastapi.testclient import TestClient
from hypothesis import given
from hypothesis import strategies as st

from service.errors import Overloaded, StoreUnavailable
from service.web.app import create_app
from service.web.examples import CLOUDEVENT, EVENTS
from service.web.port import Limits
from tests.fake_engine import FakeEngine
from tests.web_client import NOW_MS, client, client_of, engine, is_problem

__all__ = ["client", "engine"]

DAY_MS = 86_400_000
GARBAGE = TestClient(create_app(FakeEngine()))


def likes(*changes: dict[str, Any]) -> list[dict[str, Any]]:
    """Make interactions with ids e0, e1 and so on, each with changes."""
    return [{**EVENTS["interaction"], "id": f"e{index}", **change} for index, change in enumerate(changes)]


def test_every_example_is_applied(client: TestClient, engine: FakeEngine) -> None:
    """The seven kinds of events are taken in one call."""
    response = client.post("/v1/events", json=list(EVENTS.values()))
    assert response.status_code == 200
    assert response.json() == {"applied": 7, "duplicate": 0, "expired": 0, "rejected": []}
    assert [event.id for event in engine.events.values()] == ["e1", "e2", "e3", "e4", "e5", "e6", "e7"]


def test_outcomes_are_counted_apart(client: TestClient) -> None:
    """Applied, duplicate and expired are counted, and rejected listed by place with the reason."""
    old, ahead = {"at": NOW_MS - 31 * DAY_MS}, {"at": NOW_MS + 300_001}
    events = likes({}, {"id": "e0"}, old, ahead, {"kind": "a..b"}, {"kind": "wave"})
    assert client.post("/v1/events", json=events).json() == {
        "applied": 1,
        "duplicate": 1,
        "expired": 1,
        "rejected": [
            {"index": 3, "id": "e3", "reason": "at lies more than 5 minutes ahead"},
            {
                "index": 4,
                "id": "e4",
                "reason": "kind 'a..b' is not allowed; "
                "allowed: names of letters, digits, _ and -, joined by single dots",
            },
            {"index": 5, "id": "e5", "reason": "kind 'wave' is not known; known: comment, like, share"},
        ],
    }


@pytest.mark.parametrize(("content", "content_type"), [(b"[]", "application/json"), (b"", "application/x-ndjson")])
def test_nothing_is_no_error(client: TestClient, content: bytes, content_type: str) -> None:
    """A call without events is answered with zeros."""
    response = client.post("/v1/events", content=content, headers={"Content-Type": content_type})
    assert (response.status_code, response.json()["applied"]) == (200, 0)


def test_every_event_rejected_is_a_problem_with_counters(client: TestClient) -> None:
    """Where every event is rejected the problem has the counters, the reasons and the fields."""
    document = is_problem(client.post("/v1/events", json=likes({"kind": 7}, {"kind": "wave"})), 422)
    assert (document["applied"], document["duplicate"], document["expired"]) == (0, 0, 0)
    assert [one["index"] for one in document["rejected"]] == [0, 1]
    assert document["errors"] == [
        {"field": "[0].kind", "value": 7, "allowed": "text"},
        {"field": "[1]", "value": "e1", "allowed": "kind 'wave' is not known; known: comment, like, share"},
    ]


def test_a_single_event_is_refused_by_its_fields(client: TestClient) -> None:
    """For a single event the problem names its fields without a place."""
    document = is_problem(client.post("/v1/events", json={**EVENTS["tie"], "relation": "foe"}), 422)
    assert document["detail"] == "relation 'foe' is not allowed; allowed: one of follow, friend, mute, block, none"
    assert document["errors"] == [
        {"field": "relation", "value": "foe", "allowed": "one of follow, friend, mute, block, none"}
    ]


def test_expired_and_duplicate_are_not_rejected(client: TestClient) -> None:
    """A call whose events were all known or expired is no error."""
    client.post("/v1/events", json=EVENTS["tie"])
    assert client.post("/v1/events", json=EVENTS["tie"]).json()["duplicate"] == 1
    assert client.post("/v1/events", json=likes({"at": 0})).json()["expired"] == 1


def test_cloudevents_structured(client: TestClient, engine: FakeEngine) -> None:
    """A structured CloudEvent is taken, and its source is part of its identity."""
    headers = {"Content-Type": "application/cloudevents+json"}
    response = client.post("/v1/events", content=orjson.dumps(CLOUDEVENT), headers=headers)
    assert (response.status_code, list(engine.events)) == (200, ["/beds/4\ne2"])


def test_cloudevents_batched(client: TestClient) -> None:
    """A batch of CloudEvents counts a repeated one once, and an empty batch is valid."""
    headers = {"Content-Type": "application/cloudevents-batch+json"}
    response = client.post("/v1/events", content=orjson.dumps([CLOUDEVENT, CLOUDEVENT]), headers=headers)
    assert response.json() == {"applied": 1, "duplicate": 1, "expired": 0, "rejected": []}
    assert client.post("/v1/events", content=b"[]", headers=headers).status_code == 200


def test_cloudevents_binary(client: TestClient, engine: FakeEngine) -> None:
    """A binary CloudEvent comes in headers, percent-decoded."""
    headers = {"ce-specversion": "1.0", "ce-id": "%E2%82%AC", "ce-source": "/beds/4", "ce-type": "like"}
    assert client.post("/v1/events", json=EVENTS["tie"], headers=headers).status_code == 200
    assert list(engine.events) == ["/beds/4\n€"]


def test_cloudevents_header_that_is_not_utf8(client: TestClient) -> None:
    """CloudEvents 1.0, HTTP protocol binding: a header that decodes to no UTF-8 is refused."""
    headers = {"ce-specversion": "1.0", "ce-id": "%C0%A0", "ce-source": "/beds/4", "ce-type": "tie"}
    document = is_problem(client.post("/v1/events", json=EVENTS["tie"], headers=headers), 400)
    assert document["errors"] == [{"field": "ce-id", "value": "%C0%A0", "allowed": "percent-encoded UTF-8"}]


def test_a_rejected_cloudevent_shows_its_own_id(client: TestClient) -> None:
    """A rejection shows the id as it was sent, without the source."""
    document = {**CLOUDEVENT, "data": {**CLOUDEVENT["data"], "kind": "wave"}}
    headers = {"Content-Type": "application/cloudevents+json"}
    response = client.post("/v1/events", content=orjson.dumps(document), headers=headers)
    assert is_problem(response, 422)["rejected"][0]["id"] == "e2"


def test_not_json(client: TestClient) -> None:
    """A body that is not JSON is 400."""
    document = is_problem(client.post("/v1/events", content=b'{"id": '), 400)
    assert document["errors"] == [{"field": "body", "value": '{"id": ', "allowed": "JSON in UTF-8"}]


def test_other_media_type(client: TestClient) -> None:
    """Another media type is 415, and the problem lists those that are taken."""
    document = is_problem(client.post("/v1/events", data={"id": "e1"}), 415)
    assert document["errors"][0]["field"] == "Content-Type"
    assert "application/x-ndjson" in document["errors"][0]["allowed"]


def test_compressed_body(client: TestClient) -> None:
    """A compressed body is 415, as nothing here unpacks it."""
    response = client.post("/v1/events", content=b"\x1f\x8b", headers={"Content-Encoding": "gzip"})
    assert is_problem(response, 415)["errors"][0]["field"] == "Content-Encoding"


def test_body_at_its_limit(engine: FakeEngine) -> None:
    """A body of as many bytes as the limit is read, and one byte more is 413."""
    body = orjson.dumps(EVENTS["erase"])
    with client_of(engine, Limits(max_body_bytes=len(body))) as client:
        assert client.post("/v1/events", content=body).status_code == 200
        document = is_problem(client.post("/v1/events", content=body + b" "), 413)
    assert document["errors"][0]["allowed"] == f"up to {len(body)} bytes in one call"


def test_body_of_unknown_length(engine: FakeEngine) -> None:
    """A body that does not announce its length is cut off at the limit."""
    with client_of(engine, Limits(max_body_bytes=100)) as client:
        is_problem(client.post("/v1/events", content=iter([b"[" * 60, b" " * 60])), 413)


def test_too_many_events(engine: FakeEngine) -> None:
    """More events than the limit are 413 and none is applied."""
    with client_of(engine, Limits(max_batch=2)) as client:
        document = is_problem(client.post("/v1/events", json=likes({}, {}, {})), 413)
    assert document["errors"] == [{"field": "body", "value": "3 events", "allowed": "up to 2 events in one call"}]
    assert engine.events == {}


@pytest.mark.parametrize(
    ("failure", "status"), [(StoreUnavailable(retry_after_s=3), 503), (Overloaded(retry_after_s=3), 429)]
)
def test_not_acknowledged(client: TestClient, engine: FakeEngine, failure: Exception, status: int) -> None:
    """When the store is away or load is shed the answer says when to try again and that nothing was taken."""
    engine.failure = failure
    response = client.post("/v1/events", json=EVENTS["tie"])
    assert "nothing of this call was acknowledged" in is_problem(response, status)["detail"]
    assert response.headers["Retry-After"] == "3"


def test_unknown_parameter(client: TestClient) -> None:
    """A query has no meaning here and is refused by name."""
    document = is_problem(client.post("/v1/events?dry_run=1", json=[]), 422)
    assert document["errors"] == [{"field": "dry_run", "value": "1", "allowed": "only these parameters: none"}]


CONTENT_TYPES = st.sampled_from(
    [None, "application/json", "application/x-ndjson", "application/cloudevents+json", "text/plain", "a/b; charset=x"]
)


@given(st.binary(max_size=300) | st.text(alphabet='{}[]":, \n1e', max_size=60).map(str.encode), CONTENT_TYPES)
def test_garbage_is_refused_or_taken(body: bytes, content_type: str | None) -> None:
    """Whatever bytes are sent, the answer is 200 or a problem of the caller's."""
    headers = {} if content_type is None else {"Content-Type": content_type}
    response = GARBAGE.post("/v1/events", content=body, headers=headers)
    if response.status_code != 200:
        assert response.status_code in {400, 413, 415, 422}
        assert is_problem(response, response.status_code)["errors"][0]["field"]
