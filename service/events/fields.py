"""Types of an event's fields, each with its limits at run time and in JSON Schema."""

import re
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BeforeValidator, Field, WithJsonSchema
from pydantic_core import PydanticCustomError

from scoring.kinds import KIND_PATTERN, MAX_KIND_BYTES
from service import times

ID_BYTES = 128
TOPIC_BYTES = 64
TOPICS_MAX = 16
SEEN_MAX = 200

Audience = Literal["everyone", "followers", "friends", "nobody"]
Relation = Literal["follow", "friend", "mute", "block", "none"]

# Category Cc of Unicode is exactly these two ranges; written out, as regex dialects differ in \p.
CONTROLS = re.compile(r"[\u0000-\u001f\u007f-\u009f]")
NO_CONTROLS = r"^[^\u0000-\u001f\u007f-\u009f]+$"
_UNDOTTED = r"^[A-Za-z0-9_-]+$"

PATTERNS_IN_WORDS = {
    NO_CONTROLS: "text without control characters",
    KIND_PATTERN: "names of letters, digits, _ and -, joined by single dots",
    _UNDOTTED: "a name of letters, digits, _ and -, without dots",
}


def not_allowed(allowed: str) -> PydanticCustomError:
    """Make the error of a validator, which says what would have been right."""
    return PydanticCustomError("not_allowed", "{allowed}", {"allowed": allowed})


def _bytes_up_to(text: str, limit: int) -> str:
    if not text.isascii() and len(text.encode()) > limit:
        raise not_allowed(f"text of 1 to {limit} bytes of UTF-8")
    return text


def _id_bytes(text: str) -> str:
    return _bytes_up_to(text, ID_BYTES)


def _topic_bytes(text: str) -> str:
    return _bytes_up_to(text, TOPIC_BYTES)


def _interaction_kind(kind: str) -> str:
    if kind == "post" or kind.startswith("post."):
        raise not_allowed("a kind that is not post and does not start with post., which are for creations")
    return kind


def _time(value: object) -> int:
    try:
        return times.parse_time(value)
    except times.TimeError as error:
        raise not_allowed(times.ALLOWED) from error


TIME_SCHEMA: dict[str, Any] = {
    "anyOf": [
        {"type": "string", "format": "date-time"},
        {"type": "integer", "minimum": times.MIN_MS, "maximum": times.MAX_MS},
    ],
    "description": "RFC 3339 with an offset, years 1970 to 9999, or Unix milliseconds",
}

Id = Annotated[
    str,
    Field(
        min_length=1,
        max_length=ID_BYTES,
        pattern=NO_CONTROLS,
        description=f"1 to {ID_BYTES} bytes of UTF-8, no control characters",
    ),
    AfterValidator(_id_bytes),
]
Topic = Annotated[
    str,
    Field(min_length=1, max_length=TOPIC_BYTES, pattern=NO_CONTROLS),
    AfterValidator(_topic_bytes),
]
Form = Annotated[
    str,
    Field(max_length=MAX_KIND_BYTES, pattern=_UNDOTTED, description="the creation edge is of kind `post.<form>`"),
]
Kind = Annotated[
    str,
    Field(
        max_length=MAX_KIND_BYTES,
        pattern=KIND_PATTERN,
        description="not `post` and not below it; a dotted kind falls back to the part before the dot",
        json_schema_extra={"not": {"pattern": r"^post(\.|$)"}},
    ),
    AfterValidator(_interaction_kind),
]
At = Annotated[int, BeforeValidator(_time), WithJsonSchema(TIME_SCHEMA)]
Topics = Annotated[tuple[Topic, ...], Field(strict=False, max_length=TOPICS_MAX)]
SeenPosts = Annotated[tuple[Id, ...], Field(strict=False, min_length=1, max_length=SEEN_MAX)]
