"""Reads the body of a call that sends events, in each of the forms that are taken."""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Final

import orjson
from pydantic import ValidationError

from service.errors import SHOWN_CHARS, BodyTooLarge, Fault, MalformedBody, UnsupportedMedia
from service.events import cloudevents
from service.events.cloudevents import EnvelopeError
from service.events.faults import describe_faults, event_faults
from service.events.model import MANY_EVENTS, AnyEvent, parse_event

JSON: Final = "application/json"
NDJSON: Final = "application/x-ndjson"
CLOUDEVENT: Final = "application/cloudevents+json"
CLOUDEVENT_BATCH: Final = "application/cloudevents-batch+json"
MEDIA_TYPES: Final = (JSON, NDJSON, CLOUDEVENT, CLOUDEVENT_BATCH)

_NDJSON_NAMES = frozenset({NDJSON, "application/ndjson"})
_UTF8_NAMES = frozenset({"utf-8", "utf8", "us-ascii"})
_BROKEN_LINE: Final = object()


@dataclass(frozen=True, slots=True)
class Rejection:
    """An event that was not taken.

    Args:
        index: its place in the call, from 0.
        id: its id as sent, None where it has none.
        reason: what was wrong, in words.
        faults: the fields that were wrong.

    """

    index: int
    id: str | None
    reason: str
    faults: Sequence[Fault] = ()


@dataclass(frozen=True, slots=True)
class ParsedBatch:
    """What a body held: valid events with their places, and what was rejected.

    `single` tells that the body was one event and no list.
    """

    events: list[tuple[int, AnyEvent]] = field(default_factory=list)
    rejected: list[Rejection] = field(default_factory=list)
    single: bool = False

    @property
    def total(self) -> int:
        """How many events the body held, valid or not."""
        return len(self.events) + len(self.rejected)


def parse_body(body: bytes, content_type: str | None, headers: Mapping[str, str], *, max_batch: int) -> ParsedBatch:
    """Read a body of events.

    A body that is not JSON is refused whole; so is a list that is too long. Otherwise each event stands
    for itself: what is wrong with one is a `Rejection` with its index, and so is a broken line of
    newline-delimited JSON. Blank lines count for nothing.

    Args:
        body: the bytes.
        content_type: the header's value; None is taken as JSON.
        headers: all headers, names in lower case, one character a byte; `ce-…` makes it a CloudEvent.
        max_batch: the most events one call may hold.

    Raises:
        UnsupportedMedia: another media type, or a character set that is not UTF-8.
        MalformedBody: the body can't be read.
        BodyTooLarge: more than `max_batch` events.

    """
    media_type = _media_type(content_type)
    if media_type == CLOUDEVENT:
        return _one(_loads(body), _from_cloudevent)
    if media_type == CLOUDEVENT_BATCH:
        return _each(_listed(_loads(body), max_batch), _from_cloudevent)
    if cloudevents.is_binary(headers):
        return _binary(body, media_type, headers)
    if media_type in _NDJSON_NAMES:
        return _plain(_lines(body, max_batch))
    if media_type == JSON:
        return _json(_loads(body), max_batch)
    raise UnsupportedMedia("Content-Type", content_type or "", ", ".join(MEDIA_TYPES))


def _binary(body: bytes, media_type: str, headers: Mapping[str, str]) -> ParsedBatch:
    if not cloudevents.is_json(media_type):
        raise UnsupportedMedia("Content-Type", media_type, f"{JSON} beside ce- headers")
    return _one(_loads(body), lambda data: cloudevents.to_event(cloudevents.from_headers(headers, data)), headers)


def _media_type(content_type: str | None) -> str:
    if content_type is None:
        return JSON
    media_type, *parameters = content_type.split(";")
    for parameter in parameters:
        name, _, value = parameter.partition("=")
        if name.strip().lower() == "charset" and value.strip().strip('"').lower() not in _UTF8_NAMES:
            raise UnsupportedMedia("Content-Type", content_type, "charset utf-8")
    return media_type.strip().lower()


def _loads(body: bytes) -> Any:  # noqa: ANN401  whatever the JSON held
    try:
        return orjson.loads(body)
    except orjson.JSONDecodeError as error:
        fault = Fault("body", body[:SHOWN_CHARS].decode("utf-8", "replace"), "JSON in UTF-8")
        raise MalformedBody(f"the body is not JSON in UTF-8: {error}", [fault]) from error


def _json(document: object, max_batch: int) -> ParsedBatch:
    if isinstance(document, dict):
        return _one(document, parse_event)
    return _plain(_listed(document, max_batch))


def _listed(document: object, max_batch: int) -> list[Any]:
    if not isinstance(document, list):
        fault = Fault("body", document, "an event or an array of events")
        raise MalformedBody(fault.sentence(), [fault])
    if len(document) > max_batch:
        raise BodyTooLarge(max_batch, "events", len(document))
    return document


def _lines(body: bytes, max_batch: int) -> list[Any]:
    documents: list[Any] = []
    for line in body.split(b"\n"):
        stripped = line.strip()
        if not stripped:
            continue
        if len(documents) == max_batch:
            raise BodyTooLarge(max_batch, "events")
        documents.append(_line(stripped))
    return documents


def _line(line: bytes) -> object:
    try:
        return orjson.loads(line)
    except orjson.JSONDecodeError:
        return _BROKEN_LINE


def _plain(documents: list[Any]) -> ParsedBatch:
    """Validate all in one pass, which is what a good batch needs, and one by one only after an error."""
    try:
        return ParsedBatch(list(enumerate(MANY_EVENTS.validate_python(documents))))
    except ValidationError:
        return _each(documents, parse_event)


def _from_cloudevent(document: object) -> AnyEvent:
    return cloudevents.to_event(cloudevents.from_object(document))


def _each(documents: Sequence[Any], parse: Callable[[Any], AnyEvent]) -> ParsedBatch:
    batch = ParsedBatch()
    for index, document in enumerate(documents):
        outcome = _parsed(index, document, parse)
        if isinstance(outcome, Rejection):
            batch.rejected.append(outcome)
        else:
            batch.events.append((index, outcome))
    return batch


def _one(document: object, parse: Callable[[Any], AnyEvent], headers: Mapping[str, str] | None = None) -> ParsedBatch:
    """Take a body that is one event; `headers` hold its id where the document does not."""
    if not isinstance(document, dict):
        fault = Fault("body", document, "an object")
        raise MalformedBody(fault.sentence(), [fault])
    outcome = _parsed(0, document, parse, (headers or {}).get("ce-id"))
    if isinstance(outcome, Rejection):
        return ParsedBatch(rejected=[outcome], single=True)
    return ParsedBatch(events=[(0, outcome)], single=True)


def _parsed(
    index: int, document: object, parse: Callable[[Any], AnyEvent], event_id: str | None = None
) -> AnyEvent | Rejection:
    try:
        return parse(document)
    except ValidationError as error:
        faults = event_faults(error)
    except EnvelopeError as error:
        faults = error.faults
    if document is _BROKEN_LINE:
        return Rejection(index, None, "the line is not JSON in UTF-8")
    return Rejection(index, event_id or _id_of(document), describe_faults(faults), faults)


def _id_of(document: object) -> str | None:
    """Find the id that a rejected event was sent with."""
    value = document.get("id") if isinstance(document, dict) else None
    return value if isinstance(value, str) else None
