"""Calls the service over HTTP, as any caller would."""

import http.client
import time
from collections.abc import Callable, Iterator, Mapping, Sequence
from http import HTTPStatus
from typing import Any
from urllib.parse import quote, urlencode, urlsplit

import orjson

from service.demo.answers import Explanation, Feed
from service.errors import WaxwaneError

BATCH = 1_000
_TIMEOUT_S = 30
_TRIES = 6
_LONGEST_WAIT_S = 5.0
_AGAIN = (HTTPStatus.TOO_MANY_REQUESTS, HTTPStatus.SERVICE_UNAVAILABLE)
_JSON = {"Content-Type": "application/json"}


class CallError(WaxwaneError):
    """The service refused a call, or could not be reached.

    Args:
        call: method and path.
        status: of the answer; None where there was none.
        reason: why, in words.

    """

    def __init__(self, call: str, status: int | None, reason: str) -> None:
        answered = f"was answered {status}" if status else "was not answered"
        super().__init__(f"{call} {answered}: {reason}")
        self.status = status


class Client:
    """Calls one service.

    Args:
        url: where it answers, such as `http://127.0.0.1:8321`.
        wait: called with seconds before a call that was put off is made again.

    """

    def __init__(self, url: str, wait: Callable[[float], None] = time.sleep) -> None:
        self.url = url
        self._connection = http.client.HTTPConnection(urlsplit(url).netloc, timeout=_TIMEOUT_S)
        self._wait = wait

    def close(self) -> None:
        """End the connection."""
        self._connection.close()

    def ready(self) -> bool:
        """Tell whether the service takes calls."""
        try:
            return self._once("GET", "/readyz", None)[0] == HTTPStatus.OK
        except CallError:
            return False

    def send(self, events: Sequence[Mapping[str, Any]]) -> dict[str, Any]:
        """Send up to 1,000 events.

        Returns:
            How many were applied, duplicate and expired, and a list of those rejected.

        Raises:
            CallError: the service refused the call; nothing of it was acknowledged.

        """
        answer: dict[str, Any] = orjson.loads(self._call("POST", "/v1/events", orjson.dumps(events))[0])
        return answer

    def load(self, events: Sequence[Mapping[str, Any]]) -> Iterator[dict[str, Any]]:
        """Send any number of events, 1,000 in a call, and yield each call's answer."""
        for start in range(0, len(events), BATCH):
            yield self.send(events[start : start + BATCH])

    def feed(self, reader: str, **parameters: object) -> Feed:
        """Read a feed; `parameters` are those of the query.

        Raises:
            CallError: the service refused the call.

        """
        query = f"?{urlencode(parameters)}" if parameters else ""
        body, timing = self._call("GET", f"/v1/feeds/{quote(reader, safe='')}{query}")
        return Feed.read(orjson.loads(body), timing)

    def explain(self, reader: str, post: str) -> Explanation | None:
        """Ask why a post has its score; None where the reader may not see it.

        Raises:
            CallError: the service refused the call.

        """
        try:
            body, _ = self._call("GET", f"/v1/feeds/{quote(reader, safe='')}/posts/{quote(post, safe='')}")
        except CallError as error:
            if error.status == HTTPStatus.NOT_FOUND:
                return None
            raise
        return Explanation.read(orjson.loads(body))

    def _call(self, method: str, path: str, body: bytes | None = None) -> tuple[bytes, str]:
        """Call until the service does not put it off; return body and Server-Timing.

        Events may be sent again as they were: each counts once.
        """
        for tries_left in reversed(range(_TRIES)):
            status, answer, headers = self._once(method, path, body)
            if status not in _AGAIN or not tries_left:
                break
            self._wait(min(float(headers.get("Retry-After", 1)), _LONGEST_WAIT_S))
        if status != HTTPStatus.OK:
            raise CallError(f"{method} {path.partition('?')[0]}", status, problem_in_words(answer))
        return answer, headers.get("Server-Timing", "")

    def _once(self, method: str, path: str, body: bytes | None) -> tuple[int, bytes, http.client.HTTPMessage]:
        try:
            self._connection.request(method, path, body, _JSON if body else {})
            answer = self._connection.getresponse()
            return answer.status, answer.read(), answer.headers
        except (OSError, http.client.HTTPException) as error:
            self._connection.close()
            raise CallError(f"{method} {path.partition('?')[0]}", None, str(error) or type(error).__name__) from error


def problem_in_words(body: bytes) -> str:
    """Say what a problem document (RFC 9457) says.

    >>> problem_in_words(b'{"title": "Not valid", "detail": "k 0 is not allowed; allowed: 1 to 200"}')
    'k 0 is not allowed; allowed: 1 to 200'

    """
    try:
        document = orjson.loads(body)
    except orjson.JSONDecodeError:
        return body.decode("utf-8", "replace")[:200] or "no reason was given"
    if not isinstance(document, dict):
        return str(document)[:200]
    rejected = [f"{one.get('id')}: {one.get('reason')}" for one in document.get("rejected", [])[:1]]
    told = [*rejected, document.get("detail"), document.get("title"), "no reason was given"]
    return str(next(filter(None, told)))
