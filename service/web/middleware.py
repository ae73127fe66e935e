"""What happens around every request: arrival time, raw paths, measuring, and the last resort."""

import time
from collections.abc import MutableMapping
from typing import Any, Final
from urllib.parse import quote, unquote_to_bytes

import structlog
from starlette.convertors import Convertor, register_url_convertor
from starlette.types import ASGIApp, Message, Receive, Scope, Send

from service.web import problems
from service.web.arrival import ARRIVED
from service.web.metrics import WebMetrics

UNMATCHED: Final = "unmatched"
_METHODS: Final = frozenset({"GET", "HEAD", "POST", "PUT", "DELETE", "PATCH", "OPTIONS"})
_NOSNIFF: Final = (b"x-content-type-options", b"nosniff")

_log = structlog.get_logger("waxwane.web")


class IdConvertor(Convertor[str]):
    """Takes an id out of an encoded path; what is not UTF-8 stays visible as lone surrogates."""

    regex = "[^/]+"

    def convert(self, value: str) -> str:
        """Decode one segment of a path."""
        return unquote_to_bytes(value).decode("utf-8", "surrogateescape")

    def to_string(self, value: str) -> str:
        """Encode an id for a path."""
        return quote(value, safe="")


register_url_convertor("id", IdConvertor())


def arrived_s(scope: Scope) -> float:
    """Tell when a request arrived, on the clock of `time.perf_counter`."""
    return float(scope["state"][ARRIVED])


class RawPath:
    """Routes on the path as it was sent, so that ids may hold an encoded slash.

    Servers decode the whole path before it is routed, and then `%2F` in an id is like any other slash.
    Here a route sees the encoded path, and `{reader:id}` decodes its own segment.
    """

    def __init__(self, app: ASGIApp) -> None:
        self.app = app

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Handle one connection."""
        if scope["type"] == "http":
            raw = scope.get("raw_path")
            scope["path"] = quote(scope["path"]) if raw is None else raw.partition(b"?")[0].decode("latin-1")
        await self.app(scope, receive, send)


class Observe:
    """Notes when a request arrives, counts it when it is answered, and answers what nobody caught."""

    def __init__(self, app: ASGIApp, metrics: WebMetrics) -> None:
        self.app = app
        self.metrics = metrics

    async def __call__(self, scope: Scope, receive: Receive, send: Send) -> None:
        """Handle one connection."""
        if scope["type"] != "http":
            await self.app(scope, receive, send)
            return
        start_s = scope.setdefault("state", {}).setdefault(ARRIVED, time.perf_counter())
        answer = _Answer(send)
        try:
            await self._guarded(scope, receive, answer)
        finally:
            self._note(scope, answer.status, time.perf_counter() - start_s)

    async def _guarded(self, scope: Scope, receive: Receive, answer: "_Answer") -> None:
        try:
            await self.app(scope, receive, answer)
        except Exception:
            if answer.status is not None:
                raise
            _log.exception("request failed", method=_method(scope), route=_route(scope))
            await problems.internal()(scope, receive, answer)

    def _note(self, scope: Scope, status: int | None, duration_s: float) -> None:
        route, method = _route(scope), _method(scope)
        self.metrics.request(route, method, status or 0, duration_s)
        _log.debug("request", method=method, route=route, status=status, ms=round(duration_s * 1000, 3))


class _Answer:
    """Remembers the status of an answer and adds a header that tells browsers to guess no type."""

    def __init__(self, send: Send) -> None:
        self._send = send
        self.status: int | None = None

    async def __call__(self, message: Message) -> None:
        if message["type"] == "http.response.start":
            self.status = message["status"]
            message["headers"] = [*message["headers"], _NOSNIFF]
        await self._send(message)


def _route(scope: MutableMapping[str, Any]) -> str:
    return getattr(scope.get("route"), "path_format", UNMATCHED)


def _method(scope: MutableMapping[str, Any]) -> str:
    method = str(scope["method"])
    return method if method in _METHODS else "other"
