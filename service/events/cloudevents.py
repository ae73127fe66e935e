"""CloudEvents 1.0: reads an envelope and makes the waxwane event it carries.

The identity of such an event is its `source` and `id` together, joined by a line feed, which no plain id
can hold. `time` stands for `at` where the data has none, and the last part of the CloudEvent's type
(`org.allotments.tie`) for `type`. Extension attributes are ignored.
"""

import base64
import binascii
import re
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any, Final
from urllib.parse import unquote_to_bytes

import orjson
from pydantic import ValidationError

from service.errors import MISSING, Fault, MalformedBody
from service.events.faults import event_faults
from service.events.fields import CONTROLS
from service.events.model import AnyEvent, RetractEvent, parse_event

SEPARATOR: Final = "\n"
SOURCE_BYTES: Final = 256
SPECVERSION: Final = "1.0"
HEADER_PREFIX: Final = "ce-"
_REQUIRED: Final = ("specversion", "id", "source", "type")
_HEADERS: Final = frozenset(HEADER_PREFIX + name for name in _REQUIRED)
_NO_DATA: Final = object()


class EnvelopeError(Exception):
    """An envelope, or the event in it, is not valid."""

    def __init__(self, faults: list[Fault]) -> None:
        super().__init__(faults)
        self.faults = faults


@dataclass(frozen=True, slots=True)
class Envelope:
    """The attributes of a CloudEvent that matter here, and its data."""

    id: str
    source: str
    type: str
    time: str | None
    data: dict[str, Any]


def combined_id(source: str, event_id: str) -> str:
    """Join a CloudEvent's source and id to one identity."""
    return f"{source}{SEPARATOR}{event_id}"


def shown_id(event_id: str) -> str:
    """Take the id as its sender wrote it out of an identity.

    >>> shown_id(combined_id("/beds/4", "e1")), shown_id("e1")
    ('e1', 'e1')
    """
    return event_id.rpartition(SEPARATOR)[2]


def is_binary(headers: Mapping[str, str]) -> bool:
    """Tell whether a request is a CloudEvent in binary mode; header names in lower case."""
    return not _HEADERS.isdisjoint(headers)


def _unquoted(value: str) -> str:
    if len(value) > 1 and value[0] == value[-1] == '"':
        return re.sub(r"\\(.)", r"\1", value[1:-1])
    return value


def decode_header(name: str, value: str) -> str:
    """Decode a binary-mode header: quotes first, then one round of percent-decoding.

    Follows the HTTP protocol binding of CloudEvents 1.0, section 3.1.3.2.

    Args:
        name: the header, for the error.
        value: as received, one character a byte.

    Raises:
        MalformedBody: the bytes are not UTF-8.

    >>> decode_header("ce-subject", "Euro%20%E2%82%AC%20%F0%9F%98%80")
    'Euro € 😀'

    """
    try:
        return unquote_to_bytes(_unquoted(value).encode("latin-1")).decode("utf-8")
    except UnicodeError as error:
        fault = Fault(name, value, "percent-encoded UTF-8")
        raise MalformedBody(f"header {fault.sentence()}", [fault]) from error


def from_headers(headers: Mapping[str, str], data: object) -> Envelope:
    """Read the envelope of the binary mode.

    Args:
        headers: the request's headers, names in lower case, one character a byte.
        data: the body, read from JSON.

    Raises:
        MalformedBody: a header can't be decoded.
        EnvelopeError: a required attribute is missing or not allowed.

    """
    attributes: dict[str, Any] = {
        name.removeprefix(HEADER_PREFIX): decode_header(name, value)
        for name, value in headers.items()
        if name in _HEADERS or name == "ce-time"
    }
    return _envelope(attributes, data)


def from_object(document: object) -> Envelope:
    """Read the envelope of the structured and the batched mode.

    Args:
        document: what was read from JSON.

    Raises:
        EnvelopeError: it is no CloudEvent with JSON data.

    """
    if not isinstance(document, dict):
        raise EnvelopeError([Fault("", document, "an object")])
    return _envelope(document, _data_of(document))


def _data_of(document: Mapping[str, Any]) -> object:
    content_type = document.get("datacontenttype", "application/json")
    if not isinstance(content_type, str) or not is_json(content_type.partition(";")[0].strip().lower()):
        raise EnvelopeError([Fault("datacontenttype", content_type, "application/json, as the data is an event")])
    if "data_base64" not in document:
        return document.get("data", _NO_DATA)
    if "data" in document:
        raise EnvelopeError([Fault("data_base64", document["data_base64"], "either data or data_base64")])
    return _decoded(document["data_base64"])


def _decoded(text: object) -> object:
    try:
        return orjson.loads(base64.b64decode(text, validate=True))  # type: ignore[arg-type]
    except (binascii.Error, orjson.JSONDecodeError, TypeError, ValueError) as error:
        raise EnvelopeError([Fault("data_base64", text, "JSON in base64")]) from error


def is_json(media_type: str) -> bool:
    """Tell whether a media type, without parameters and in lower case, is JSON."""
    return media_type == "application/json" or media_type.endswith("+json")


def _envelope(attributes: Mapping[str, Any], data: object) -> Envelope:
    present = {name: value for name, value in attributes.items() if value is not None}
    faults = [fault for name in _REQUIRED if (fault := _attribute_fault(name, present.get(name, MISSING)))]
    time = present.get("time")
    if time is not None and not isinstance(time, str):
        faults.append(Fault("time", time, "an RFC 3339 time as text"))
    if not isinstance(data, dict):
        faults.append(Fault("data", MISSING if data is _NO_DATA else data, "an object with the event"))
        raise EnvelopeError(faults)
    if faults:
        raise EnvelopeError(faults)
    return Envelope(present["id"], present["source"], present["type"], time, data)


def _attribute_fault(name: str, value: object) -> Fault | None:
    if name == "specversion":
        return None if value == SPECVERSION else Fault(name, value, SPECVERSION)
    if not isinstance(value, str) or not value:
        return Fault(name, value, "text, not empty")
    if name == "source" and (len(value.encode()) > SOURCE_BYTES or CONTROLS.search(value)):
        return Fault(name, value, f"text of 1 to {SOURCE_BYTES} bytes of UTF-8 without control characters")
    return None


def to_event(envelope: Envelope) -> AnyEvent:
    """Make the event that an envelope carries.

    Args:
        envelope: attributes and data.

    Returns:
        The event, its `id` (and a retract's `event`) joined with the source.

    Raises:
        EnvelopeError: the data is no event.

    """
    data = {"type": envelope.type.rpartition(".")[2], **envelope.data, "id": envelope.id}
    at_from_time = "at" not in data and envelope.time is not None
    if at_from_time:
        data["at"] = envelope.time
    try:
        event = parse_event(data)
    except ValidationError as error:
        faults = event_faults(error)
        if at_from_time:
            faults = [replace(fault, field="time") if fault.field == "at" else fault for fault in faults]
        raise EnvelopeError(faults) from error
    changes = {"id": combined_id(envelope.source, envelope.id)}
    if isinstance(event, RetractEvent):
        changes["event"] = combined_id(envelope.source, event.event)
    return event.model_copy(update=changes)
