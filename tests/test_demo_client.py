"""The demo's calls: problems told plainly, calls put off made again."""

import json
import threading
from collections.abc import Iterator
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer
from typing import Any

import pytest

from service.demo.answers import Feed, Item
from service.demo.client import CallError, Client, problem_in_words

Answers = list[tuple[int, dict[str, str], Any]]


class Stub:
    """A server that gives prepared answers in turn, and remembers the calls."""

    def __init__(self) -> None:
        self.answers: Answers = []
        self.calls: list[tuple[str, str, Any]] = []
        self.waits_s: list[float] = []
        stub = self

        class Handler(BaseHTTPRequestHandler):
            protocol_version = "HTTP/1.1"

            def do_GET(self) -> None:
                length = int(self.headers.get("Content-Length", 0))
                stub.calls.append((self.command, self.path, json.loads(self.rfile.read(length) or "null")))
                status, headers, document = stub.answers.pop(0)
                body = json.dumps(document).encode()
                self.send_response(status)
                for name, value in {**headers, "Content-Length": str(len(body))}.items():
                    self.send_header(name, value)
                self.end_headers()
                self.wfile.write(body)

            do_POST = do_GET  # noqa: N815  the base class's names

            def log_message(self, *_: object) -> None:
                pass

        self.server = ThreadingHTTPServer(("127.0.0.1", 0), Handler)
        self.client = Client(f"http://127.0.0.1:{self.server.server_port}", self.waits_s.append)


@pytest.fixture
def stub() -> Iterator[Stub]:
    """A server to prepare answers for."""
    made = Stub()
    thread = threading.Thread(target=made.server.serve_forever, kwargs={"poll_interval": 0.01})
    thread.start()
    yield made
    made.client.close()
    made.server.shutdown()
    thread.join()
    made.server.server_close()


def test_feed_is_read_with_its_times(stub: Stub) -> None:
    """A feed is asked for with an encoded reader and the parameters, and read with the server's times."""
    item = {"post": "p1", "author": "mina", "form": "photo", "posted_at": "2026-05-04T09:00:00Z", "score": 5.25}
    document = {"as_of": "2026-05-04T10:00:00Z", "complete": True, "items": [item]}
    stub.answers = [(200, {"Server-Timing": "rows;dur=0.5, total;dur=2.5"}, document)]
    feed = stub.client.feed("a/b", k=3)
    assert stub.calls == [("GET", "/v1/feeds/a%2Fb?k=3", None)]
    items = [Item("p1", "mina", "photo", 1_777_885_200_000, 5.25)]
    assert feed == Feed(1_777_888_800_000, complete=True, items=items, stages_ms={"rows": 0.5, "total": 2.5})


def test_events_go_in_batches_of_a_thousand(stub: Stub) -> None:
    """Any number of events goes in calls of at most 1,000, in order."""
    stub.answers = [(200, {}, {"applied": 1}) for _ in range(3)]
    assert len(list(stub.client.load([{"id": number} for number in range(2_100)]))) == 3
    assert [len(body) for _, _, body in stub.calls] == [1_000, 1_000, 100]
    assert [event["id"] for _, _, body in stub.calls for event in body] == list(range(2_100))


def test_call_that_is_put_off_is_made_again(stub: Stub) -> None:
    """After 429 or 503 the same call is made again when the server asks for it, but not after minutes."""
    stub.answers = [(429, {"Retry-After": "2"}, {}), (503, {"Retry-After": "600"}, {}), (200, {}, {"applied": 1})]
    assert stub.client.send([{"id": "e1"}]) == {"applied": 1}
    assert stub.calls == [("POST", "/v1/events", [{"id": "e1"}])] * 3
    assert stub.waits_s == [2.0, 5.0]


def test_call_that_stays_put_off_is_an_error(stub: Stub) -> None:
    """After six tries the problem is told."""
    stub.answers = [(503, {}, {"title": "Store away", "detail": "the store does not answer"})] * 6
    with pytest.raises(CallError, match=r"^POST /v1/events was answered 503: the store does not answer$"):
        stub.client.send([{"id": "e1"}])
    assert stub.waits_s == [1.0] * 5


def test_problem_is_told(stub: Stub) -> None:
    """A refused call is an error that names the call, the status and the problem's detail."""
    stub.answers = [(422, {}, {"title": "Not valid", "detail": "k 0 is not allowed; allowed: 1 to 200"})]
    with pytest.raises(CallError, match=r"^GET /v1/feeds/mina was answered 422: k 0 is not allowed") as caught:
        stub.client.feed("mina", k=0)
    assert caught.value.status == 422


def test_post_that_the_reader_may_not_see_has_no_explanation(stub: Stub) -> None:
    """A 404 for an explanation is None; other problems are errors."""
    stub.answers = [(404, {}, {"detail": "no"}), (422, {}, {"detail": "bad"})]
    assert stub.client.explain("mina", "p1") is None
    with pytest.raises(CallError, match="bad"):
        stub.client.explain("mina", "p1")


def test_no_service_is_told() -> None:
    """Where nobody answers the error says so, and the service is not ready."""
    client = Client("http://127.0.0.1:1")
    assert not client.ready()
    with pytest.raises(CallError, match=r"^GET /v1/feeds/mina was not answered: .*refused"):
        client.feed("mina")


@pytest.mark.parametrize(
    ("body", "words"),
    [
        (b'{"title": "T", "detail": "D", "rejected": [{"index": 0, "id": "e1", "reason": "R"}]}', "e1: R"),
        (b'{"title": "T"}', "T"),
        (b"{}", "no reason was given"),
        (b"[1]", "[1]"),
        (b"<html>", "<html>"),
        (b"", "no reason was given"),
    ],
)
def test_problem_in_words(body: bytes, words: str) -> None:
    """The most telling part of whatever came back is told."""
    assert problem_in_words(body) == words
