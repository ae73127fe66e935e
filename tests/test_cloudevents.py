"""CloudEvents: the envelope, its three HTTP modes, and the identity of what it carries."""

import base64
from typing import Any

import orjson
import pytest

from service.errors import MalformedBody, UnsupportedMedia
from service.events.bodies import CLOUDEVENT, CLOUDEVENT_BATCH, ParsedBatch, parse_body
from service.events.cloudevents import decode_header
from service.events.model import InteractionEvent, RetractEvent
from service.web.examples import CLOUDEVENT as FULL_EXAMPLE

AT_MS = 1_777_882_800_000
DATA = {"type": "interaction", "at": "2026-05-04T08:20:00Z", "actor": "joel", "post": "p1", "kind": "like"}
EXAMPLE = {**FULL_EXAMPLE, "data": {"actor": "joel", "post": "p1", "kind": "like"}}
HEADERS = {"ce-specversion": "1.0", "ce-id": "e2", "ce-source": "/beds/4", "ce-type": "org.allotments.interaction"}


def structured(**changes: Any) -> ParsedBatch:
    """Send the example in structured mode with attributes changed; None takes one out."""
    document = {name: value for name, value in {**EXAMPLE, **changes}.items() if value is not None}
    return parse_body(orjson.dumps(document), CLOUDEVENT, {}, max_batch=10)


def binary(data: Any = DATA, content_type: str | None = "application/json", **headers: str) -> ParsedBatch:
    """Send data in binary mode."""
    sent = HEADERS | {f"ce-{name}": value for name, value in headers.items()}
    return parse_body(orjson.dumps(data), content_type, sent, max_batch=10)


def reason(batch: ParsedBatch) -> str:
    assert batch.events == []
    return batch.rejected[0].reason


def test_structured_mode_carries_an_event() -> None:
    """The data is the event; type and time of the envelope stand in where the data has none."""
    [(index, event)] = structured().events
    assert isinstance(event, InteractionEvent)
    assert (index, event.id, event.at, event.actor, event.kind) == (0, "/beds/4\ne2", AT_MS, "joel", "like")


def test_data_goes_before_the_envelope() -> None:
    """Type and time of the data count where both have them, and its id never does."""
    data = {**DATA, "id": "other", "at": 5, "type": "withdraw"}
    del data["kind"]
    [(_, event)] = structured(data=data).events
    assert (event.id, event.at, event.type) == ("/beds/4\ne2", 5, "withdraw")


def test_same_id_of_another_source_is_another_event() -> None:
    """Source and id together are the identity."""
    ids = {structured(source=source).events[0][1].id for source in ("/beds/4", "/beds/5")}
    assert ids == {"/beds/4\ne2", "/beds/5\ne2"}


def test_a_retract_names_an_event_of_its_own_source() -> None:
    """What a retract takes back came from the same source."""
    [(_, event)] = structured(id="e4", type="retract", data={"actor": "joel", "event": "e2"}).events
    assert isinstance(event, RetractEvent)
    assert (event.id, event.event) == ("/beds/4\ne4", "/beds/4\ne2")


def test_data_may_be_base64() -> None:
    """The data may come as JSON in base64."""
    [(_, event)] = structured(data=None, data_base64=base64.b64encode(orjson.dumps(DATA)).decode()).events
    assert event.actor == "joel"


def test_the_published_base64_example_is_decoded() -> None:
    """CloudEvents 1.0, the batch example: its data is {"xyz": 123}, which is JSON but no event."""
    batch = structured(type="interaction", data=None, data_base64="eyAieHl6IjogMTIzIH0=")
    assert "actor is missing" in reason(batch)
    assert "xyz" in {fault.field for fault in batch.rejected[0].faults}


def test_batched_mode_takes_each_for_itself() -> None:
    """In a batch a wrong envelope is rejected by its place and the others are taken."""
    body = orjson.dumps([EXAMPLE, {**EXAMPLE, "specversion": "0.3"}, 4, {**EXAMPLE, "id": "e3"}])
    batch = parse_body(body, CLOUDEVENT_BATCH, {}, max_batch=10)
    assert [(index, event.id) for index, event in batch.events] == [(0, "/beds/4\ne2"), (3, "/beds/4\ne3")]
    assert [(one.index, one.id) for one in batch.rejected] == [(1, "e2"), (2, None)]
    assert batch.rejected[0].reason == "specversion '0.3' is not allowed; allowed: 1.0"


def test_an_empty_batch_is_valid() -> None:
    """CloudEvents 1.0, JSON batch format: an empty batch is valid."""
    assert parse_body(b"[]", CLOUDEVENT_BATCH, {}, max_batch=10).total == 0


def test_binary_mode_carries_an_event() -> None:
    """Attributes come as headers and the body is the event."""
    [(_, event)] = binary({name: DATA[name] for name in ("actor", "post", "kind")}, time="2026-05-04T08:20:00Z").events
    assert isinstance(event, InteractionEvent)
    assert (event.id, event.at, event.kind) == ("/beds/4\ne2", AT_MS, "like")


@pytest.mark.parametrize("content_type", [None, "application/json; charset=utf-8", "application/vnd.allotment+json"])
def test_binary_mode_takes_any_json(content_type: str | None) -> None:
    """Every JSON media type may carry the data."""
    assert binary(content_type=content_type).total == 1


def test_binary_mode_refuses_what_is_not_json() -> None:
    """Data of another media type is not supported."""
    with pytest.raises(UnsupportedMedia, match="text/xml"):
        binary(content_type="text/xml")


@pytest.mark.parametrize(
    ("value", "text"),
    [
        # CloudEvents 1.0, HTTP protocol binding, section 3.1.3.2.
        ("Euro%20%E2%82%AC%20%F0%9F%98%80", "Euro € 😀"),
        ("%e2%82%ac", "€"),
        ('"quoted \\"id\\""', 'quoted "id"'),
        ("plain", "plain"),
    ],
)
def test_headers_are_decoded(value: str, text: str) -> None:
    """Quotes are taken off first, then one round of percent-decoding follows."""
    assert decode_header("ce-id", value) == text


@pytest.mark.parametrize("value", ["%C0%A0", "%ff", "\xff", "%ED%A0%80"])
def test_headers_that_are_not_utf8_are_refused(value: str) -> None:
    """CloudEvents 1.0, HTTP protocol binding, section 3.1.3.2: bytes that are not UTF-8 must be rejected."""
    with pytest.raises(MalformedBody, match=r"^header ce-id"):
        binary(id=value)


@pytest.mark.parametrize(
    ("changes", "field"),
    [
        ({"specversion": None}, "specversion"),
        ({"specversion": 1.0}, "specversion"),
        ({"id": None}, "id"),
        ({"id": ""}, "id"),
        ({"id": 7}, "id"),
        ({"id": "x" * 129}, "id"),
        ({"id": "a\nb"}, "id"),
        ({"source": None}, "source"),
        ({"source": ""}, "source"),
        ({"source": "x" * 257}, "source"),
        ({"source": "a\nb"}, "source"),
        ({"type": None}, "type"),
        ({"type": "org.allotments.harvest"}, "type"),
        ({"time": 7}, "time"),
        ({"time": "noon"}, "time"),
        ({"time": None}, "at"),
        ({"data": None}, "data"),
        ({"data": "text"}, "data"),
        ({"data": [1]}, "data"),
        ({"data_base64": "e30="}, "data_base64"),
        ({"data": None, "data_base64": "!"}, "data_base64"),
        ({"data": None, "data_base64": "€"}, "data_base64"),
        ({"data": None, "data_base64": 7}, "data_base64"),
        ({"datacontenttype": "text/xml"}, "datacontenttype"),
        ({"datacontenttype": 7}, "datacontenttype"),
    ],
)
def test_wrong_envelopes_are_rejected_by_field(changes: dict[str, Any], field: str) -> None:
    """What is wrong with an envelope is named."""
    assert reason(structured(**changes)).startswith(f"{field} ")


def test_a_missing_header_is_named() -> None:
    """In binary mode a required attribute that was not sent is named."""
    sent = {name: value for name, value in HEADERS.items() if name != "ce-source"}
    batch = parse_body(orjson.dumps(DATA), None, sent, max_batch=10)
    assert reason(batch) == "source is missing; allowed: text, not empty"
    assert batch.rejected[0].id == "e2"


def test_extensions_are_ignored() -> None:
    """CloudEvents 1.0, its example's extension attributes: they change nothing."""
    batch = structured(comexampleextension1="value", comexampleothervalue=5, subject="123", dataschema=None)
    assert batch.total == len(batch.events) == 1


def test_the_longest_identity_is_taken() -> None:
    """A source of 256 bytes and an id of 128 make an identity of 385."""
    [(_, event)] = structured(id="i" * 128, source="s" * 256).events
    assert len(event.id.encode()) == 385
