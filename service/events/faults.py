"""Puts validation errors into plain words: the field, the value and what is allowed."""

import re
from collections.abc import Callable, Sequence
from typing import Any

from pydantic import ValidationError

from service.errors import MISSING, Fault
from service.events.fields import PATTERNS_IN_WORDS
from service.events.model import EVENT_TYPES

Details = dict[str, Any]

_SHOWN_FAULTS = 3


def _quoted(text: str) -> str:
    return "one of " + ", ".join(re.findall(r"'([^']*)'", text))


def _pattern(error: Details) -> str:
    pattern = error["ctx"]["pattern"]
    return PATTERNS_IN_WORDS.get(pattern, f"text that matches {pattern}")


_ALLOWED: dict[str, Callable[[Details], str]] = {
    "missing": lambda _: "a value, as it is required",
    "not_allowed": lambda error: str(error["ctx"]["allowed"]),
    "literal_error": lambda error: _quoted(error["ctx"]["expected"]),
    "union_tag_invalid": lambda _: "one of " + ", ".join(EVENT_TYPES),
    "union_tag_not_found": lambda _: "one of " + ", ".join(EVENT_TYPES),
    "string_type": lambda _: "text",
    "string_unicode": lambda _: "text that UTF-8 can hold",
    "string_too_short": lambda error: f"text of at least {error['ctx']['min_length']} character",
    "string_too_long": lambda error: f"text of at most {error['ctx']['max_length']} characters",
    "string_pattern_mismatch": _pattern,
    "too_short": lambda error: f"at least {error['ctx']['min_length']} entry",
    "too_long": lambda error: f"at most {error['ctx']['max_length']} entries",
    "tuple_type": lambda _: "a list",
    "model_attributes_type": lambda _: "an object",
    "int_parsing": lambda _: "a whole number",
    "int_from_float": lambda _: "a whole number",
    "float_parsing": lambda _: "a number",
    "finite_number": lambda _: "a finite number",
}


def _allowed(error: Details) -> str:
    phrase = _ALLOWED.get(error["type"])
    return phrase(error) if phrase else str(error["msg"]).removeprefix("Input should be ")


def _value(error: Details) -> object:
    kind, value = error["type"], error.get("input")
    if kind == "missing":
        return MISSING
    if kind.startswith("union_tag") and isinstance(value, dict):
        return value.get("type", MISSING)
    if kind in {"too_short", "too_long"}:
        return f"{error['ctx']['actual_length']} entries"
    return value


def path_of(location: Sequence[str | int]) -> str:
    """Write a place in a document.

    >>> path_of(("topics", 2))
    'topics[2]'
    """
    text = ""
    for step in location:
        text += f"[{step}]" if isinstance(step, int) else f".{step}" if text else step
    return text


def fault_of(error: Details, location: Sequence[str | int]) -> Fault:
    """Turn one of pydantic's errors into a fault at a place."""
    return Fault(path_of(location), _value(error), _allowed(error))


def _event_fault(error: Details) -> Fault:
    location = error["loc"]
    if error["type"].startswith("union_tag"):
        return fault_of(error, ("type",))
    if error["type"] == "extra_forbidden":
        known = ", ".join(EVENT_TYPES[location[0]].model_fields)
        return Fault(path_of(location[1:]), error.get("input"), f"only these fields: {known}")
    return fault_of(error, location[1:])


def event_faults(error: ValidationError) -> list[Fault]:
    """List what is wrong with an event, by field."""
    return [_event_fault(dict(details)) for details in error.errors(include_url=False)]


def describe_faults(faults: Sequence[Fault]) -> str:
    """Say in one line what is wrong; of many faults the first few."""
    text = "; ".join(fault.sentence() for fault in faults[:_SHOWN_FAULTS])
    more = len(faults) - _SHOWN_FAULTS
    return f"{text}; and {more} more" if more > 0 else text


def describe_validation_error(error: ValidationError) -> str:
    """Say in one line what is wrong with an event.

    Args:
        error: what validating an event raised.

    >>> from service.events.model import parse_event
    >>> try:
    ...     parse_event({"id": "e3", "type": "tie", "at": 0, "actor": "joel", "target": "mina", "relation": "foe"})
    ... except ValidationError as error:
    ...     print(describe_validation_error(error))
    relation 'foe' is not allowed; allowed: one of follow, friend, mute, block, none

    """
    return describe_faults(event_faults(error))
