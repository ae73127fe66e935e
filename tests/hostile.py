"""Judges the answers to hostile requests; what makes the requests is the OpenAPI document."""

import os
from typing import Any, Final

import schemathesis
from hypothesis import HealthCheck, settings
from schemathesis import SerializationContext

from service.web.app import create_app
from tests.fake_engine import FakeEngine
from tests.web_client import is_problem

EXAMPLES: Final = int(os.environ.get("WAXWANE_TEST_HOSTILE", "300"))
URL: Final = os.environ.get("WAXWANE_TEST_HOSTILE_URL")
OPERATIONS: Final = 9
BUSY: Final = {429, 503}

hostile_settings = settings(
    max_examples=max(1, EXAMPLES // OPERATIONS), deadline=None, suppress_health_check=list(HealthCheck)
)


@schemathesis.serializer("application/x-ndjson", "application/toml")
def _as_text(_: SerializationContext, value: Any) -> bytes:
    return value if isinstance(value, bytes) else str(value).encode("utf-8", "replace")


def hostile_schema() -> Any:
    """Take the document of a running server, or of an application with a small engine."""
    if URL:
        return schemathesis.openapi.from_url(f"{URL}/openapi.json")
    return schemathesis.openapi.from_asgi("/openapi.json", create_app(FakeEngine()))


def judge(response: Any) -> None:
    """Assert that an answer is good, or a problem of the caller's that names a field."""
    if response.status_code == 200:
        return
    assert response.status_code < 500 or response.status_code in BUSY, response.text
    document = is_problem(_Flat(response), response.status_code)
    if response.status_code not in {404, *BUSY}:
        assert document["errors"]
        assert all(error["field"] for error in document["errors"])


class _Flat:
    """An answer with its headers as single values, as test clients have them."""

    def __init__(self, response: Any) -> None:
        self.status_code = response.status_code
        self.text = response.text
        self.json = response.json
        self.headers = {name: values[0] for name, values in response.headers.items()}
