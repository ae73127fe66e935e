"""Fixtures that many tests share."""

import logging
import os
from collections.abc import Iterator
from pathlib import Path

import pytest
import redis
import structlog

from service.embedded import EmbeddedServer
from service.settings import PREFIX


@pytest.fixture(autouse=True)
def _no_settings_from_outside(monkeypatch: pytest.MonkeyPatch) -> None:
    """Keep the settings of whoever runs the tests out of them."""
    for name in [name for name in os.environ if name.upper().startswith(PREFIX)]:
        monkeypatch.delenv(name)


@pytest.fixture(autouse=True)
def _logging_as_it_was() -> Iterator[None]:
    """Leave logging as it was, whatever a test configures."""
    root = logging.getLogger()
    handlers, level = root.handlers[:], root.level
    yield
    root.handlers, root.level = handlers, level
    structlog.reset_defaults()


@pytest.fixture(scope="session")
def redis_url(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    """A real server for the whole run; TEST_SERVER_BINARY chooses its program."""
    chosen = os.environ.get("TEST_SERVER_BINARY")
    with EmbeddedServer(tmp_path_factory.mktemp("redis"), Path(chosen) if chosen else None) as server:
        yield server.url


@pytest.fixture
def redis_db(redis_url: str) -> str:
    """The real server's URL, with nothing stored there."""
    with redis.Redis.from_url(redis_url) as client:
        client.flushall()
    return redis_url
