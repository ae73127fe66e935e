"""GET /v1/feeds/… over HTTP."""

import re
import time
from typing import Any

import pytest
from fastapi.testclient import TestClient

from service.errors import CursorExpired, CursorInvalid
from service.feed.types import ExplainRequest, FeedRequest, PopularRequest
from service.web.examples import EVENTS
from service.web.middleware import IdConvertor
from tests.fake_engine import FakeEngine
from tests.web_client import NOW_MS, client, engine, is_problem

__all__ = ["client", "engine"]

DAY_MS = 86_400_000


def asked(client: TestClient, engine: FakeEngine, url: str) -> Any:
    """Read a feed and return what the engine was asked."""
    response = client.get(url)
    assert response.status_code == 200, response.text
    request, now_ms, _ = engine.asked[-1]
    assert now_ms == NOW_MS
    return request


def test_defaults(client: TestClient, engine: FakeEngine) -> None:
    """Without parameters a feed has 20 posts, ranked, as of now, under the reader's policy."""
    assert asked(client, engine, "/v1/feeds/joel") == FeedRequest("joel")


def test_every_parameter(client: TestClient, engine: FakeEngine) -> None:
    """Each parameter reaches the engine."""
    url = (
        "/v1/feeds/joel?k=200&budget_ms=12.5&order=newest&cursor=abc"
        "&policy=allotments&as_of=2026-05-05T11:00:00%2B02:00&explore=0"
    )
    assert asked(client, engine, url) == FeedRequest(
        "joel", 200, 12.5, "newest", "abc", "allotments", NOW_MS + DAY_MS, explore=False
    )


def test_forms_topics_and_reasons_are_asked_for(client: TestClient, engine: FakeEngine) -> None:
    """Lists have commas between their names; a reason is asked for with 1, and each post has a place for it then."""
    url = "/v1/feeds/joel?form=note,photo&topics=beans,s%C3%BC%C3%9F&why=1"
    request = asked(client, engine, url)
    assert (request.forms, request.topics, request.why) == (("note", "photo"), ("beans", "süß"), True)
    client.post("/v1/events", json=EVENTS["post"])
    assert [item["why"] for item in client.get(url).json()["items"]] == [None]


@pytest.mark.parametrize(
    ("query", "field"),
    [
        ("form=", "form"),
        ("form=note,", "form"),
        ("form=a.b", "form"),
        ("topics=" + ",".join(["beans"] * 17), "topics"),
        ("topics=" + "b" * 65, "topics"),
        ("why=2", "why"),
    ],
)
def test_wrong_forms_topics_and_reasons(client: TestClient, query: str, field: str) -> None:
    """A name that is none, too many of them, or a reason asked for with anything but 0 and 1 is refused by name."""
    problem = is_problem(client.get(f"/v1/feeds/joel?{query}"), 422)
    assert problem["errors"][0]["field"].startswith(field)


def test_popular(client: TestClient, engine: FakeEngine) -> None:
    """What is popular takes its own parameters, and refuses those of a feed."""
    client.post("/v1/events", json=EVENTS["post"])
    answer = client.get("/v1/popular?k=3&reader=joel&form=photo&topics=beans")
    assert answer.json() == {
        "as_of": "2026-05-04T09:00:00.000Z",
        "policy": "allotments",
        "complete": True,
        "items": [
            {"post": "p1", "author": "mina", "form": "photo", "posted_at": "2026-05-04T08:15:00.000Z", "score": 3.0}
        ],
    }
    assert engine.asked[-1][0] == PopularRequest(3, "joel", None, None, ("photo",), ("beans",))
    assert is_problem(client.get("/v1/popular?cursor=abc"), 422)["errors"][0]["field"] == "cursor"


def test_a_page(client: TestClient) -> None:
    """A page has the reader, the time, the policy and the posts."""
    client.post("/v1/events", json=EVENTS["post"])
    assert client.get("/v1/feeds/joel").json() == {
        "reader": "joel",
        "as_of": "2026-05-04T09:00:00.000Z",
        "policy": "allotments",
        "complete": True,
        "items": [
            {"post": "p1", "author": "mina", "form": "photo", "posted_at": "2026-05-04T08:15:00.000Z", "score": 3.0}
        ],
        "next": None,
    }


def test_newest_has_no_scores(client: TestClient) -> None:
    """Where the order is newest the score is null."""
    client.post("/v1/events", json=EVENTS["post"])
    assert client.get("/v1/feeds/joel?order=newest").json()["items"][0]["score"] is None


def test_server_timing(client: TestClient) -> None:
    """The stages and the whole stand in the header that the W3C's Server Timing specifies."""
    header = client.get("/v1/feeds/joel").headers["Server-Timing"]
    assert re.fullmatch(r"state;dur=0\.250, rank;dur=1\.500, total;dur=\d+\.\d{3}", header)


def test_arrival_is_told(client: TestClient, engine: FakeEngine) -> None:
    """The engine is told when the call arrived, on the clock that it measures with."""
    before_s = time.perf_counter()
    client.get("/v1/feeds/joel")
    assert before_s < engine.asked[-1][2] < time.perf_counter()


@pytest.mark.parametrize("reader", ["a/b", "a b", "é", "😀", "%2F", "..a", "a?k=1", "a#b", "a+b", "x" * 128])
def test_ids_in_paths_are_percent_encoded(client: TestClient, engine: FakeEngine, reader: str) -> None:
    """Any id can stand in a path, a slash too, which is written %2F."""
    encoded = IdConvertor().to_string(reader)
    assert asked(client, engine, f"/v1/feeds/{encoded}").reader == reader


def test_two_ids_with_slashes(client: TestClient, engine: FakeEngine) -> None:
    """An encoded slash does not end an id."""
    client.post("/v1/events", json={**EVENTS["post"], "post": "p/1"})
    assert client.get("/v1/feeds/a%2Fposts%2Fb/posts/p%2f1").status_code == 200
    assert engine.asked[-1][0] == ExplainRequest("a/posts/b", "p/1")


def test_a_bare_slash_is_another_path(client: TestClient) -> None:
    """A slash that is not encoded parts the path."""
    assert is_problem(client.get("/v1/feeds/a/b"), 404)["errors"][0]["field"] == "path"


@pytest.mark.parametrize("reader", ["%C0%A0", "%ff", "a%0Ab", "%00", "%7f", "x" * 129, "%C3%A9" * 65])
def test_other_ids_are_refused(client: TestClient, reader: str) -> None:
    """What is no id is refused by name."""
    assert is_problem(client.get(f"/v1/feeds/{reader}"), 422)["errors"][0]["field"] == "reader"


@pytest.mark.parametrize(
    ("query", "field", "allowed"),
    [
        ("k=0", "k", "greater than or equal to 1"),
        ("k=201", "k", "less than or equal to 200"),
        ("k=ten", "k", "a whole number in digits"),
        ("k=", "k", "a whole number in digits"),
        ("k=1.0", "k", "a whole number in digits"),
        ("k=1_0", "k", "a whole number in digits"),
        ("k=1&k=2", "k", "given once"),
        ("budget_ms=0", "budget_ms", "greater than or equal to 1"),
        ("budget_ms=10001", "budget_ms", "less than or equal to 10000"),
        ("budget_ms=nan", "budget_ms", "a finite number"),
        ("budget_ms=inf", "budget_ms", "a finite number"),
        ("budget_ms=fast", "budget_ms", "a number"),
        ("order=best", "order", "one of ranked, newest"),
        ("cursor=", "cursor", "text of at least 1 character"),
        ("cursor=%00", "cursor", "text without control characters"),
        ("policy=winter", "policy", "one of allotments"),
        ("policy=", "policy", "text of at least 1 character"),
        ("as_of=noon", "as_of", "an RFC 3339 time with an offset"),
        ("as_of=2026-05-05T11:00:00+02:00", "as_of", "+ is written %2B"),
        ("as_of=2026-05-04T08:58:59Z", "as_of", "from now, 2026-05-04T09:00:00.000Z, to 30 days ahead"),
        ("as_of=2026-06-03T09:00:00.001Z", "as_of", "from now, 2026-05-04T09:00:00.000Z, to 30 days ahead"),
        ("explore=2", "explore", "less than or equal to 1"),
        ("explore=yes", "explore", "a whole number in digits"),
        ("limit=20", "limit", "only these parameters: policy, as_of, k, budget_ms, order, cursor, explore"),
    ],
)
def test_parameters_are_checked(client: TestClient, query: str, field: str, allowed: str) -> None:
    """A parameter that is not allowed is refused with its name and what is allowed."""
    [error] = is_problem(client.get(f"/v1/feeds/joel?{query}"), 422)["errors"]
    assert error["field"] == field
    assert allowed in error["allowed"]


@pytest.mark.parametrize(
    ("as_of", "at_ms"),
    [
        (str(NOW_MS), NOW_MS),
        ("2026-05-04T08:59:00Z", NOW_MS),
        ("2026-05-04T09:00:00.5Z", NOW_MS + 500),
        ("2026-06-03T09:00:00Z", NOW_MS + 30 * DAY_MS),
    ],
)
def test_as_of_lies_from_now_to_30_days_ahead(client: TestClient, engine: FakeEngine, as_of: str, at_ms: int) -> None:
    """A caller's clock may be a minute behind, and then now is meant."""
    assert asked(client, engine, f"/v1/feeds/joel?as_of={as_of}").as_of_ms == at_ms


def test_a_later_page_keeps_the_time_of_the_first(client: TestClient, engine: FakeEngine) -> None:
    """With a cursor the time may lie in the past, as its pages do."""
    assert asked(client, engine, "/v1/feeds/joel?cursor=abc&as_of=2026-05-04T08:00:00Z").as_of_ms == NOW_MS - 3_600_000


def test_every_wrong_parameter_is_listed(client: TestClient) -> None:
    """All parameters that are wrong are told at once."""
    errors = is_problem(client.get("/v1/feeds/joel?k=0&order=best&explore=7"), 422)["errors"]
    assert [error["field"] for error in errors] == ["k", "order", "explore"]


@pytest.mark.parametrize(("failure", "status"), [(CursorInvalid("abc"), 400), (CursorExpired("abc"), 410)])
def test_cursors(client: TestClient, engine: FakeEngine, failure: Exception, status: int) -> None:
    """A cursor that is not one, or whose pages are gone, is told apart."""
    engine.failure = failure
    [error] = is_problem(client.get("/v1/feeds/joel?cursor=abc"), status)["errors"]
    assert (error["field"], error["value"]) == ("cursor", "abc")


def test_an_explanation(client: TestClient, engine: FakeEngine) -> None:
    """An explanation lists the parts, the crowd last, and the factors."""
    client.post("/v1/events", json=EVENTS["post"])
    response = client.get("/v1/feeds/joel/posts/p1?policy=allotments&as_of=2026-05-04T20:15:00Z")
    assert response.json() == {
        "reader": "joel",
        "post": "p1",
        "as_of": "2026-05-04T20:15:00.000Z",
        "policy": "allotments",
        "score": 1.742,
        "factors": [{"name": "seen", "value": 1.0}],
        "parts": [
            {
                "source": "tie",
                "actor": "mina",
                "kind": "post.photo",
                "at": "2026-05-04T08:15:00.000Z",
                "affinity": 1.0,
                "weight": 3.0,
                "freshness": 0.5,
                "product": 1.5,
            },
            {"source": "crowd", "affinity": 0.02, "sum": 12.1, "product": 0.242},
        ],
    }
    assert engine.asked[-1][0] == ExplainRequest("joel", "p1", "allotments", NOW_MS + 40_500_000)


def test_no_explanation(client: TestClient) -> None:
    """A post that the reader may not see is 404."""
    assert is_problem(client.get("/v1/feeds/joel/posts/p9"), 404)["title"] == "Not found"


def test_an_explanation_has_two_parameters(client: TestClient) -> None:
    """Parameters of a feed that mean nothing for one post are refused."""
    [error] = is_problem(client.get("/v1/feeds/joel/posts/p1?k=3"), 422)["errors"]
    assert error["allowed"] == "only these parameters: policy, as_of"
