"""Logs: one structured line a message on standard error, the HTTP server's own among them."""

import logging
import sys
from collections.abc import MutableMapping
from typing import Any

import orjson
import structlog
from structlog.typing import Processor

# Ids of people and posts stay out of everything above debug.
ID_KEYS = frozenset({"reader", "person", "actor", "author", "target", "post", "posts", "event_id", "id", "path"})

_QUIET = ("uvicorn.access",)
_ROUTED = ("uvicorn", "uvicorn.error")


class _StderrHandler(logging.StreamHandler[Any]):
    """The one handler that this module installs, so that it can be found again."""


def configure(level: str, form: str) -> None:
    """Set up logging for this process; a second call replaces the first.

    Args:
        level: debug, info, warning, error or critical.
        form: `json`, or `text` for people.

    """
    structlog.configure(
        processors=[*_shared(), structlog.stdlib.ProcessorFormatter.wrap_for_formatter],
        logger_factory=structlog.stdlib.LoggerFactory(),
        wrapper_class=structlog.make_filtering_bound_logger(level),
        cache_logger_on_first_use=False,
    )
    handler = _StderrHandler(sys.stderr)
    handler.setFormatter(
        structlog.stdlib.ProcessorFormatter(
            foreign_pre_chain=_shared(),
            processors=[structlog.stdlib.ProcessorFormatter.remove_processors_meta, *_rendering(form)],
        )
    )
    _install(handler, level)


def withhold_ids(_logger: object, method: str, event: MutableMapping[str, Any]) -> MutableMapping[str, Any]:
    """Drop ids of people and posts from every message above debug.

    >>> withhold_ids(None, "info", {"event": "feed", "reader": "joel", "k": 20})
    {'event': 'feed', 'k': 20}

    """
    if method == "debug":
        return event
    for key in ID_KEYS.intersection(event):
        del event[key]
    return event


def _shared() -> list[Processor]:
    return [
        structlog.contextvars.merge_contextvars,
        structlog.stdlib.add_logger_name,
        structlog.stdlib.add_log_level,
        withhold_ids,
        structlog.processors.TimeStamper(fmt="iso", utc=True),
    ]


def _rendering(form: str) -> list[Processor]:
    if form == "json":
        return [structlog.processors.format_exc_info, structlog.processors.JSONRenderer(serializer=_json)]
    # The plain traceback shows no local variables, which may hold ids and passwords.
    return [
        structlog.dev.ConsoleRenderer(colors=sys.stderr.isatty(), exception_formatter=structlog.dev.plain_traceback)
    ]


def _json(event: object, **_options: object) -> str:
    return orjson.dumps(event, default=repr).decode()


def _install(handler: logging.Handler, level: str) -> None:
    root = logging.getLogger()
    for other in [other for other in root.handlers if isinstance(other, _StderrHandler)]:
        root.removeHandler(other)
    root.addHandler(handler)
    root.setLevel(level.upper())
    for name in (*_ROUTED, *_QUIET):
        logger = logging.getLogger(name)
        logger.handlers.clear()
        logger.setLevel(logging.NOTSET)
        logger.propagate = name not in _QUIET
