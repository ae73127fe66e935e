"""Hostile requests to the whole service over HTTP: none breaks it, and a refused one leaves the store as it was.

`TEST_HOSTILE` sets how many are drawn; some 2,300 that the document leads to without drawing come besides.
"""

import hashlib
import http.client
import json
import logging
import os
import threading
import time
from collections.abc import Iterator
from contextlib import closing, contextmanager
from dataclasses import dataclass
from typing import Any

import pytest
import redis
import schemathesis
import uvicorn
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from service.settings import BUILT_IN_POLICY
from service.web.app import create_app
from tests.engines import flush, make_engine
from tests.fake_engine import FakeEngine
from tests.hostile import OPERATIONS, judge
from tests.polling import until

log = logging.getLogger(__name__)
COUNT = int(os.environ.get("TEST_HOSTILE", "600"))
HEAD = {"deadline": None, "suppress_health_check": list(HealthCheck)}
FROM_DOCUMENT = settings(max_examples=max(1, COUNT // 2 // OPERATIONS), **HEAD)  # type: ignore[arg-type]  # a bundle
MUTATED = settings(max_examples=max(1, COUNT // 2), **HEAD)  # type: ignore[arg-type]  # as above

PASSING = (b"page:",)
"""Keys that leave after minutes, while the test may run."""

BOOKKEEPING = (b"seq:", b"applied:", b"change", b"kinds", b"name:", b"heard:", b"ids:", b"row:", b"who:")
"""What an event that is refused only where its effects lie may have touched: counters and traces, no more."""

REFUSED_IN_STORE = ("another id has the same", "another person has published")


class Answer:
    """An answer as `judge` takes it."""

    def __init__(self, answer: http.client.HTTPResponse) -> None:
        self.status_code = answer.status
        self.text = answer.read().decode()
        self.headers = {name.lower(): [value] for name, value in answer.getheaders()}

    def json(self) -> Any:
        """Read the body."""
        return json.loads(self.text)


class Watched:
    """A running service, and whether a call has changed its store.

    Args:
        url: of the service.
        client: of the store.

    """

    def __init__(self, url: str, client: redis.Redis) -> None:
        self.url = url
        self.calls: dict[int, int] = {}
        self._client: Any = client
        self._seen = self._writes()
        self._digests = self._digest()

    def fetch(self, method: str, path: str, body: bytes | None = None, headers: dict[str, str] | None = None) -> Answer:
        """Make one call on a connection of its own."""
        with closing(http.client.HTTPConnection(self.url.removeprefix("http://"), timeout=10)) as connection:
            connection.request(method, path, body, headers or {})
            return Answer(connection.getresponse())

    def summary(self) -> tuple[int, dict[int, int]]:
        """Count the calls, all and by status."""
        return sum(self.calls.values()), dict(sorted(self.calls.items()))

    def judge(self, response: Any) -> None:
        """Assert that an answer is one a caller may get, and that a refusal changed nothing."""
        status = response.status_code
        self.calls[status] = self.calls.get(status, 0) + 1
        assert status < 500, response.text
        judge(response)
        writes = self._writes()
        if writes == self._seen:
            return
        before, self._digests, self._seen = self._digests, self._digest(), writes
        if status >= 400:
            place = 1 if any(reason in response.text for reason in REFUSED_IN_STORE) else 0
            assert self._digests[place] == before[place], response.text

    def _writes(self) -> int:
        writes: int = self._client.info("persistence")["rdb_changes_since_last_save"]
        return writes

    def _digest(self) -> tuple[bytes, bytes]:
        """Hash what all keys hold, without bookkeeping in the second; lifetimes are no part of it."""
        names = sorted(name for name in self._client.scan_iter(count=10_000) if not name.startswith(PASSING))
        pipe = self._client.pipeline(transaction=False)
        for name in names:
            pipe.dump(name)
        whole, lasting = hashlib.blake2b(), hashlib.blake2b()
        for name, dumped in zip(names, pipe.execute(), strict=True):
            whole.update(b"%d %b %b" % (len(name), name, dumped or b""))
            if not name.startswith(BOOKKEEPING):
                lasting.update(b"%d %b %b" % (len(name), name, dumped or b""))
        return whole.digest(), lasting.digest()


@contextmanager
def served(url: str) -> Iterator[str]:
    """Run the application in a thread, and give its address."""
    server = uvicorn.Server(
        uvicorn.Config(create_app(make_engine(url, BUILT_IN_POLICY.read_text())), port=0, log_config=None)
    )
    thread = threading.Thread(target=server.run)
    thread.start()
    try:
        until(lambda: server.started)
        yield f"http://127.0.0.1:{server.servers[0].sockets[0].getsockname()[1]}"
    finally:
        server.should_exit = True
        thread.join()


@pytest.fixture(scope="module")
def service(redis_url: str) -> Iterator[Watched]:
    """One service for all hostile calls; afterwards it still works."""
    flush(redis_url)
    begun_s = time.perf_counter()
    with redis.Redis.from_url(redis_url) as client, served(redis_url) as url:
        watched = Watched(url, client)
        yield watched
        assert client.ping()
        log.info("%d calls, by status %s, in %.0f s", *watched.summary(), time.perf_counter() - begun_s)


schema = schemathesis.openapi.from_dict(create_app(FakeEngine()).openapi())


def test_the_document_is_the_services(service: Watched) -> None:
    """The requests are made from the document that the running service gives of itself."""
    assert json.loads(service.fetch("GET", "/openapi.json").text) == schema.raw_schema


@schema.parametrize()
@FROM_DOCUMENT
def test_no_request_breaks_the_service(case: Any, service: Watched) -> None:
    """Whatever the document lets a caller send is answered well or refused with a field named and no trace left."""
    service.judge(case.call(base_url=service.url))


IDS = st.sampled_from(["mina", "joel", "ada", "bed", "plot", "e1", "e2", "e3", "🌱", "a/b", "x" * 128, "é", " "])
TIMES = st.one_of(
    st.integers(-3 * 86_400_000, 400_000).map(lambda ms: time.time_ns() // 1_000_000 + ms),
    st.sampled_from(
        ["2026-05-04T08:15:00Z", "2026-02-30T00:00:00Z", "now", 0, -1, 2**63, 1e308, "1985-04-12T23:20:50Z"]
    ),
)
GARBAGE = st.recursive(
    st.none() | st.booleans() | st.integers(-(2**70), 2**70) | st.floats() | st.text(max_size=200) | IDS,
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=9), inner, max_size=4),
    max_leaves=8,
)
FIELDS: dict[str, dict[str, Any]] = {
    "post": {
        "post": IDS,
        "form": st.sampled_from(["note", "photo", "weed", "a.b"]),
        "audience": st.sampled_from(["everyone", "followers", "friends", "nobody", "all"]),
        "topics": st.lists(IDS, max_size=3),
    },
    "interaction": {"post": IDS, "kind": st.sampled_from(["like", "comment.photo.near", "hide", "wave", "", "."])},
    "tie": {"target": IDS, "relation": st.sampled_from(["follow", "friend", "mute", "block", "none", "foe"])},
    "retract": {"event": IDS},
    "withdraw": {"post": IDS},
    "seen": {"posts": st.lists(IDS, max_size=5)},
    "erase": {},
    "unknown": {},
}


@st.composite
def events(draw: st.DrawFn) -> dict[str, Any]:
    """Draw events of which many are valid and many are nearly so."""
    kind = draw(st.sampled_from(list(FIELDS)))
    event = {"id": draw(IDS) + str(draw(st.integers(0, 40))), "type": kind, "at": draw(TIMES), "actor": draw(IDS)}
    event |= {name: draw(values) for name, values in FIELDS[kind].items()}
    for change in draw(st.sampled_from([[], [], [], ["drop"], ["spoil"], ["spoil"], ["add"], ["spoil", "drop"]])):
        name = draw(st.sampled_from(sorted(event))) if event else "id"
        if change == "drop":
            event.pop(name, None)
        elif change == "spoil":
            event[name] = draw(GARBAGE)
        else:
            event[draw(st.text(max_size=9))] = draw(GARBAGE)
    return event


def cloud_event(event: dict[str, Any]) -> dict[str, Any]:
    return {"specversion": "1.0", "id": event.get("id"), "source": "/plots", "type": "event", "data": event}


@dataclass(frozen=True)
class Body:
    """What is sent, and what it is said to be."""

    content: bytes
    media: str | None


@st.composite
def bodies(draw: st.DrawFn) -> Body:
    """Draw bodies: single events, lists, lines, CloudEvents, cut or spoilt ones, and bytes that are nothing."""
    made = draw(st.lists(events(), min_size=1, max_size=6))
    form = draw(st.sampled_from(["one", "list", "lines", "cloud", "clouds", "cut", "bytes", "deep"]))
    text = {
        "one": lambda: json.dumps(made[0]),
        "list": lambda: json.dumps(made),
        "lines": lambda: "\n".join(map(json.dumps, made)),
        "cloud": lambda: json.dumps(cloud_event(made[0])),
        "clouds": lambda: json.dumps([cloud_event(event) for event in made]),
        "cut": lambda: json.dumps(made)[: draw(st.integers(0, 80))],
        "bytes": lambda: draw(st.binary(max_size=300)).decode("latin-1"),
        "deep": lambda: "[" * 5_000 + "]" * draw(st.sampled_from([0, 5_000])),
    }[form]()
    fitting = {"lines": "application/x-ndjson", "cloud": "application/cloudevents+json"}
    fitting["clouds"] = "application/cloudevents-batch+json"
    others = [*fitting.values(), "text/plain", "application/json; charset=latin-1", "", None, "application/json;"]
    media = draw(st.sampled_from([fitting.get(form, "application/json")] * 9 + others))
    return Body(text.encode("latin-1" if form == "bytes" else "utf-8"), media)


@MUTATED
@given(body=bodies())
def test_no_body_breaks_the_service(service: Watched, body: Body) -> None:
    """Whatever is sent as events, valid or spoilt, is answered well or refused with a field named and no trace left."""
    headers = {} if body.media is None else {"Content-Type": body.media}
    service.judge(service.fetch("POST", "/v1/events", body.content, headers))


@pytest.mark.parametrize("reader", ["mina", "joel", "ada", "nobody"])
def test_the_service_still_ranks(service: Watched, reader: str) -> None:
    """After all that, feeds and exports are read as ever."""
    for path in (f"/v1/feeds/{reader}?budget_ms=5000", f"/v1/people/{reader}"):
        answer = service.fetch("GET", path)
        service.judge(answer)
        assert answer.status_code == 200
        assert answer.json().get("complete") is not False
