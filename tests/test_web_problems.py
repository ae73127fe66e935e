"""Errors over HTTP: every one is a problem document, and its status comes from one table."""

import asyncio
from typing import Any

import orjson
import pytest
from fastapi.testclient import TestClient
from structlog.testing import capture_logs

from service import errors
from service.errors import Fault, WaxwaneError
from service.web.app import create_app
from service.web.problems import MEDIA_TYPE, STATUS, of_error, problem
from tests.fake_engine import FakeEngine
from tests.web_client import client, engine, is_problem

__all__ = ["client", "engine"]


def body(response: Any) -> Any:
    return orjson.loads(response.body)


def test_shape_of_the_published_example() -> None:
    """Nottingham, Wilde and Dalal, RFC 9457, 2023, section 3: extensions stand beside the members."""
    response = problem(
        403,
        "You do not have enough credit.",
        "Your current balance is 30, but that costs 50.",
        extensions={
            "type": "https://example.com/probs/out-of-credit",
            "instance": "/account/12345/msgs/abc",
            "balance": 30,
            "accounts": ["/account/12345", "/account/67890"],
        },
    )
    assert response.headers["content-type"] == "application/problem+json"
    assert body(response) == {
        "type": "https://example.com/probs/out-of-credit",
        "title": "You do not have enough credit.",
        "status": 403,
        "detail": "Your current balance is 30, but that costs 50.",
        "instance": "/account/12345/msgs/abc",
        "balance": 30,
        "accounts": ["/account/12345", "/account/67890"],
    }


def test_shape_of_the_published_validation_example() -> None:
    """The same, section 3: `errors` is an array of objects (the second example, from memory)."""
    entries = [{"detail": "must be a positive integer", "pointer": "#/age"}]
    assert body(problem(422, "Your request is not valid.", "", errors=entries))["errors"] == entries


@pytest.mark.parametrize(
    ("error", "status"),
    [
        (errors.MalformedBody("no JSON"), 400),
        (errors.CursorInvalid("c"), 400),
        (errors.NotFound("no post"), 404),
        (errors.Conflict("the names differ"), 409),
        (errors.CursorExpired("c"), 410),
        (errors.BodyTooLarge(10), 413),
        (errors.UnsupportedMedia("Content-Type", "a/b", "c/d"), 415),
        (errors.InvalidField("k", 0, "1 to 200"), 422),
        (errors.UnknownPolicy("winter", ["allotments"]), 422),
        (errors.Overloaded(), 429),
        (errors.StoreUnavailable(), 503),
        (errors.NotReady("starting"), 503),
        (WaxwaneError("unforeseen"), 500),
    ],
)
def test_each_error_has_a_status(error: WaxwaneError, status: int) -> None:
    """The table gives each error its status."""
    response = of_error(error)
    assert (response.status_code, response.media_type) == (status, MEDIA_TYPE)
    assert body(response)["detail"] == error.detail


def test_every_error_is_in_the_table() -> None:
    """No error of the tree is left to the root's status."""
    direct = {kind for kind in WaxwaneError.__subclasses__() if kind.__module__ == "service.errors"}
    assert direct <= set(STATUS)


def test_an_error_of_a_kind_has_its_status() -> None:
    """An error that another module derives has the status of what it derives from."""

    class Gone(errors.NotFound):
        """A post that was there."""

    assert of_error(Gone("withdrawn")).status_code == 404


def test_errors_say_when_to_try_again() -> None:
    """What passes by itself has a Retry-After in seconds."""
    assert of_error(errors.Overloaded(retry_after_s=7)).headers["Retry-After"] == "7"


@pytest.mark.parametrize(
    ("value", "shown"),
    [
        ("x" * 200, "x" * 97 + "..."),
        ("\ud800", "?"),
        (10**30, "1" + "0" * 30),
        (float("inf"), "inf"),
        ({"a": 1}, "{'a': 1}"),
        (b"\xff", "b'\\xff'"),
        (None, None),
        (False, False),
        (0.5, 0.5),
    ],
)
def test_values_are_shown_safely(value: object, shown: object) -> None:
    """What is sent back is JSON and short."""
    error = WaxwaneError("wrong", [Fault("field", value, "something else")])
    assert body(of_error(error))["errors"][0]["value"] == shown


def test_long_lists_of_errors_are_cut() -> None:
    """A problem lists twenty errors at most."""
    error = WaxwaneError("wrong", [Fault(f"f{index}", index, "less") for index in range(50)])
    assert len(body(of_error(error))["errors"]) == 20


def test_no_such_path(client: TestClient) -> None:
    """An address that is not there is a problem that names the path."""
    [error] = is_problem(client.get("/v1/feed/joel"), 404)["errors"]
    assert (error["field"], error["value"]) == ("path", "/v1/feed/joel")


@pytest.mark.parametrize("path", ["/v1/feeds/joel/", "/v1/feeds/", "/docs", "/redoc", "/"])
def test_no_redirects_and_no_pages_from_elsewhere(client: TestClient, path: str) -> None:
    """A trailing slash is another address, and there are no pages that load scripts."""
    is_problem(client.get(path, follow_redirects=False), 404)


@pytest.mark.parametrize(
    ("method", "path", "allow"), [("DELETE", "/v1/feeds/joel", "GET"), ("GET", "/v1/events", "POST")]
)
def test_no_such_method(client: TestClient, method: str, path: str, allow: str) -> None:
    """A method that an address has not is a problem with the Allow header."""
    response = client.request(method, path)
    [error] = is_problem(response, 405)["errors"]
    assert (response.headers["Allow"], error) == (allow, {"field": "method", "value": method, "allowed": allow})


def test_the_inside_is_not_told(client: TestClient, engine: FakeEngine) -> None:
    """An unforeseen error is a problem that tells nothing of the inside."""
    engine.failure = RuntimeError("password of the store")
    with capture_logs() as logs:
        response = client.get("/v1/feeds/joel")
    assert is_problem(response, 500)["detail"] == "the call failed for a reason that the log holds"
    assert "password" not in response.text
    assert [(line["event"], line["route"]) for line in logs] == [
        ("request failed", "/v1/feeds/{reader}"),
        ("request", "/v1/feeds/{reader}"),
    ]
    assert "joel" not in str(logs)


def test_browsers_guess_no_type(client: TestClient, engine: FakeEngine) -> None:
    """Every answer forbids guessing its type, an unforeseen error's too."""
    engine.failure = RuntimeError()
    paths = ("/livez", "/nothing", "/v1/policies", "/v1/feeds/joel?k=0")
    with capture_logs():
        found = [client.get(path).headers.get_list("X-Content-Type-Options") for path in paths]
    assert found == [["nosniff"]] * 4


def test_a_client_that_leaves_is_no_failure() -> None:
    """A connection that ends before the body does is answered with a problem that nobody reads."""
    sent: list[Any] = []

    async def receive() -> dict[str, Any]:
        return {"type": "http.disconnect"}

    async def send(message: Any) -> None:
        sent.append(message)

    scope = {"type": "http", "method": "POST", "path": "/v1/events", "query_string": b"", "headers": []}
    asyncio.run(create_app(FakeEngine())(scope, receive, send))
    assert sent[0]["status"] == 400
