"""Pieces of the OpenAPI document: bodies, answers and their examples."""

from collections.abc import Sequence
from http import HTTPStatus
from typing import Any, Final

import orjson
from pydantic import BaseModel

from service.events import bodies
from service.events.cloudevents import SOURCE_BYTES
from service.events.fields import ID_BYTES, NO_CONTROLS
from service.events.model import ONE_EVENT
from service.web import examples, problems, schemas

Schema = dict[str, Any]

REFERENCE: Final = "#/components/schemas/{model}"
_EVENT: Final = {"$ref": "#/components/schemas/Event"}
_CLOUDEVENT: Final = {"$ref": "#/components/schemas/CloudEvent"}
_BATCH_MAX: Final = 1000

EVENTS_DESCRIPTION: Final = """\
Takes one event, an array of events, newline-delimited JSON, or CloudEvents 1.0 in structured, batched or
binary mode (`ce-specversion`, `ce-id`, `ce-source`, `ce-type` and `ce-time` headers beside a JSON body).

Each event counts once, however often it is sent, and in any order. Each is applied whole or rejected with a
reason; a broken line of newline-delimited JSON is one rejected event. Where every event is rejected the
answer is 422 with the same counters.
"""

SERVER_TIMING: Final[Schema] = {
    "Server-Timing": {
        "description": "the time of each stage and in all, milliseconds",
        "schema": {"type": "string"},
        "example": "state;dur=0.412, rank;dur=0.933, total;dur=1.801",
    }
}

METRICS_ANSWER: Final[dict[int | str, Schema]] = {
    200: {"description": "Metrics", "content": {"text/plain": {"schema": {"type": "string"}}}},
}

_EXAMPLES: Final[dict[type[BaseModel], Any]] = {
    schemas.EventsAnswer: examples.EVENTS_ANSWER,
    schemas.FeedPage: examples.FEED,
    schemas.PopularPage: {name: examples.FEED[name] for name in ("as_of", "policy", "complete", "items")},
    schemas.ExplanationAnswer: examples.EXPLANATION,
    schemas.PersonAnswer: {"person": "joel"},
    schemas.PolicyAnswer: examples.POLICY,
    schemas.PoliciesAnswer: {"policies": [examples.POLICY]},
    schemas.Health: {"status": "ok"},
}


def problem_answer(description: str) -> Schema:
    """Describe an answer that is a problem document."""
    schema = {"$ref": "#/components/schemas/Problem"}
    return {"description": description, "content": {problems.MEDIA_TYPE: {"schema": schema}}}


def answers(model: type[BaseModel], *statuses: int, headers: Schema | None = None) -> dict[int | str, Schema]:
    """Describe the answers of an operation.

    Args:
        model: shape of the 200.
        statuses: of the problems it may answer.
        headers: of the 200.

    """
    good: Schema = {"model": model, "content": {"application/json": {"example": _EXAMPLES[model]}}}
    if headers:
        good["headers"] = headers
    described: dict[int | str, Schema] = {200: {"description": "Done", **good}}
    for status in statuses:
        described[status] = problem_answer(HTTPStatus(status).phrase)
        if status in {HTTPStatus.TOO_MANY_REQUESTS, HTTPStatus.SERVICE_UNAVAILABLE}:
            described[status]["headers"] = {"Retry-After": {"schema": {"type": "integer"}, "description": "seconds"}}
    return described


EXPOSURES_ANSWERS: Final[dict[int | str, Schema]] = {
    200: {
        "description": "Logged pages, one a line",
        "content": {bodies.NDJSON: {"schema": {"type": "string"}, "example": examples.EXPOSURES}},
    },
    **{status: problem_answer(HTTPStatus(status).phrase) for status in (422, 429, 503)},
}


def events_body() -> Schema:
    """Describe the body of a call that sends events."""
    lines = "".join(orjson.dumps(event).decode() + "\n" for event in examples.EVENTS.values())
    plain = {"oneOf": [_EVENT, {"type": "array", "items": _EVENT, "maxItems": _BATCH_MAX}]}
    batch = {"type": "array", "items": _CLOUDEVENT, "maxItems": _BATCH_MAX}
    named = {f"a {name} event": {"value": event} for name, event in examples.EVENTS.items()}
    content = {
        bodies.JSON: {"schema": plain, "examples": named | {"several": {"value": list(examples.EVENTS.values())}}},
        bodies.NDJSON: {"schema": {"type": "string", "description": "an event a line"}, "example": lines},
        bodies.CLOUDEVENT: {"schema": _CLOUDEVENT, "example": examples.CLOUDEVENT},
        bodies.CLOUDEVENT_BATCH: {"schema": batch, "example": [examples.CLOUDEVENT]},
    }
    return {"required": True, "content": content}


def policy_body(media_types: Sequence[str]) -> Schema:
    """Describe the body of a call that loads a policy."""
    content = {"schema": {"type": "string", "description": "a policy file"}, "example": examples.POLICY_TOML}
    return {"required": True, "content": dict.fromkeys(media_types, content)}


def event_schemas() -> dict[str, Schema]:
    """Make the component schemas of events, plain and as the data of a CloudEvent."""
    event = ONE_EVENT.json_schema(ref_template=REFERENCE)
    models: dict[str, Schema] = event.pop("$defs")
    data = {f"{name}Data": _as_data(name, schema) for name, schema in models.items()}
    union = {"oneOf": [{"$ref": REFERENCE.format(model=name)} for name in data]}
    return {**models, "Event": event, **data, "EventData": union, "CloudEvent": _cloudevent()}


def _as_data(name: str, schema: Schema) -> Schema:
    """An event as data needs no id, and no time where the envelope has one."""
    required = [field for field in schema["required"] if field not in {"id", "at"}]
    properties = {**schema["properties"], "id": {"description": "of no account; the envelope's id counts"}}
    return {**schema, "title": f"{name}Data", "required": required, "properties": properties}


def _cloudevent() -> Schema:
    text = {"type": "string", "minLength": 1}
    identifier = {**text, "maxLength": ID_BYTES, "pattern": NO_CONTROLS}
    return {
        "type": "object",
        "title": "CloudEvent",
        "description": "A CloudEvents 1.0 envelope; source and id together are the event's identity. "
        "Data without a type has the one that the last part of the envelope's type names.",
        "required": ["specversion", "id", "source", "type", "data"],
        "properties": {
            "specversion": {"const": "1.0"},
            "id": identifier,
            "source": {**identifier, "maxLength": SOURCE_BYTES},
            "type": text,
            "time": {"type": "string", "format": "date-time"},
            "datacontenttype": {"type": "string", "const": "application/json"},
            "data": {"$ref": REFERENCE.format(model="EventData")},
        },
        "anyOf": [{"required": ["time"]}, {"properties": {"data": {"required": ["at"]}}}],
    }
