"""A client for tests of the HTTP edge, at a fixed time."""

from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import pytest
from fastapi.testclient import TestClient

from service.web import clock
from service.web.app import create_app
from service.web.port import Limits
from tests.fake_engine import FakeEngine

NOW_MS = 1_777_885_200_000  # 2026-05-04T09:00:00Z


@contextmanager
def client_of(engine: FakeEngine, limits: Limits | None = None) -> Iterator[TestClient]:
    with TestClient(create_app(engine, limits)) as client:
        yield client


@pytest.fixture
def engine() -> FakeEngine:
    return FakeEngine()


@pytest.fixture
def client(engine: FakeEngine, monkeypatch: pytest.MonkeyPatch) -> Iterator[TestClient]:
    monkeypatch.setattr(clock, "now_ms", lambda: NOW_MS)
    with client_of(engine) as client:
        yield client


def is_problem(response: Any, status: int) -> dict[str, Any]:
    """Assert that an answer is a problem document of a status, and return it."""
    assert response.status_code == status, response.text
    assert response.headers["content-type"] == "application/problem+json"
    document: dict[str, Any] = response.json()
    assert document["type"] == "about:blank"
    assert document["status"] == status
    assert document["title"]
    assert document["detail"]
    return document
