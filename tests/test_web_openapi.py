"""The OpenAPI document: complete, valid, and true to what is accepted."""

from typing import Any

import pytest
from fastapi.testclient import TestClient
from jsonschema_rs import validator_for

from service.events.model import EVENT_TYPES
from service.web.examples import EVENTS
from tests.web_client import client, engine

__all__ = ["client", "engine"]

V1 = [
    "/v1/events",
    "/v1/exposures",
    "/v1/feeds/{reader}",
    "/v1/feeds/{reader}/posts/{post}",
    "/v1/people/{person}",
    "/v1/policies",
    "/v1/popular",
]


@pytest.fixture
def document(client: TestClient) -> dict[str, Any]:
    found: dict[str, Any] = client.get("/openapi.json").json()
    return found


def operations(document: dict[str, Any]) -> list[dict[str, Any]]:
    return [operation for path in document["paths"].values() for operation in path.values()]


def test_every_address_is_described(document: dict[str, Any]) -> None:
    """The document lists each address, without a converter in its template."""
    assert sorted(document["paths"]) == sorted([*V1, "/v1/policies/{name}", "/metrics", "/livez", "/readyz"])


def test_every_error_is_a_problem(document: dict[str, Any]) -> None:
    """Each error answer of each operation is a problem document."""
    for operation in operations(document):
        for status, answer in operation["responses"].items():
            if status != "200":
                assert answer["content"] == {
                    "application/problem+json": {"schema": {"$ref": "#/components/schemas/Problem"}}
                }
    assert "HTTPValidationError" not in document["components"]["schemas"]


def test_events_may_answer_with_each_status(document: dict[str, Any]) -> None:
    """What the contract lists for events is described."""
    statuses = document["paths"]["/v1/events"]["post"]["responses"]
    assert sorted(statuses) == ["200", "400", "413", "415", "422", "429", "503", "default"]


def test_every_body_is_described(document: dict[str, Any]) -> None:
    """Each media type of events is described, with an example of every type of event."""
    content = document["paths"]["/v1/events"]["post"]["requestBody"]["content"]
    assert sorted(content) == [
        "application/cloudevents+json",
        "application/cloudevents-batch+json",
        "application/json",
        "application/x-ndjson",
    ]
    shown = [example["value"] for example in content["application/json"]["examples"].values()]
    assert [example["type"] for example in shown if isinstance(example, dict)] == list(EVENT_TYPES)


def test_events_have_a_discriminator(document: dict[str, Any]) -> None:
    """An event's schema is chosen by its type."""
    discriminator = document["components"]["schemas"]["Event"]["discriminator"]
    assert discriminator["propertyName"] == "type"
    assert discriminator["mapping"]["tie"] == "#/components/schemas/TieEvent"


def test_references_lead_somewhere(document: dict[str, Any]) -> None:
    """Every reference names a schema that is there."""
    names = {text.split('"')[0] for text in str(document).replace("'", '"').split("#/components/schemas/")[1:]}
    assert names <= set(document["components"]["schemas"])


def test_parameters_have_no_null(document: dict[str, Any]) -> None:
    """What a query can't hold is not described."""
    assert '"null"' not in str(document["paths"]["/v1/feeds/{reader}"]["get"]["parameters"]).replace("'", '"')


def schema_of(document: dict[str, Any], media_type: str) -> Any:
    content = document["paths"]["/v1/events"]["post"]["requestBody"]["content"][media_type]
    return validator_for({**content["schema"], "components": document["components"]})


def test_examples_are_valid(document: dict[str, Any]) -> None:
    """Every example of a body is valid under the schema beside it."""
    for media_type, content in document["paths"]["/v1/events"]["post"]["requestBody"]["content"].items():
        shown = [example["value"] for example in content.get("examples", {}).values()] or [content["example"]]
        assert all(schema_of(document, media_type).is_valid(example) for example in shown)


@pytest.mark.parametrize(
    ("kind", "change"),
    [
        ("interaction", {"kind": "post.photo"}),
        ("interaction", {"kind": "post"}),
        ("interaction", {"kind": "a..b"}),
        ("interaction", {"kind": "k" * 65}),
        ("post", {"form": "a.b"}),
        ("post", {"audience": "all"}),
        ("post", {"topics": ["b"] * 17}),
        ("post", {"topics": [""]}),
        ("tie", {"relation": "foe"}),
        ("seen", {"posts": []}),
        ("erase", {"at": -1}),
        ("erase", {"at": True}),
        ("erase", {"actor": "a\nb"}),
        ("erase", {"actor": ""}),
        ("erase", {"post": "p1"}),
    ],
)
def test_the_schema_refuses_what_is_refused(document: dict[str, Any], kind: str, change: dict[str, Any]) -> None:
    """The schema has the limits that validation has."""
    schema = schema_of(document, "application/json")
    assert schema.is_valid(EVENTS[kind])
    assert not schema.is_valid({**EVENTS[kind], **change})


def test_a_cloudevent_needs_a_time_somewhere(document: dict[str, Any]) -> None:
    """The time may stand in the envelope or in the data, and one of them is needed."""
    schema = schema_of(document, "application/cloudevents+json")
    data = {"type": "erase", "actor": "joel"}
    envelope = {"specversion": "1.0", "id": "e7", "source": "/beds/4", "type": "erase"}
    assert schema.is_valid({**envelope, "data": {**data, "at": 5}})
    assert schema.is_valid({**envelope, "time": "2026-05-04T09:00:00Z", "data": data})
    assert not schema.is_valid({**envelope, "data": data})
