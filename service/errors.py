"""Every error that waxwane raises on purpose: one root and a shallow tree, each carrying its data."""

# ruff: noqa: N818  the names say what happened, and the root says that they are errors

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Protocol

MISSING: Any = object()
"""Stands for a value that was not sent, where None would be a value."""

SHOWN_CHARS = 100
"""The most of a caller's value that is sent back, characters."""


def shown(value: object) -> str | int | float | bool | None:
    """Make a value fit to be sent back: JSON can hold it and it is short.

    >>> shown(7), shown("x" * 300)[-5:], shown(["a"]), shown(float("nan"))
    (7, 'xx...', "['a']", 'nan')
    """
    if value is None or isinstance(value, bool):
        return value
    if isinstance(value, int) and abs(value) < 2**53:
        return value
    if isinstance(value, float) and math.isfinite(value):
        return value
    text = (value if isinstance(value, str) else repr(value)).encode("utf-8", "replace").decode("utf-8")
    return text if len(text) <= SHOWN_CHARS else text[: SHOWN_CHARS - 3] + "..."


@dataclass(frozen=True, slots=True)
class Fault:
    """One thing that was wrong.

    Args:
        field: name of the field, `""` for the whole input.
        value: what was sent; `MISSING` where nothing was.
        allowed: what would have been right, as a phrase without a full stop.

    """

    field: str
    value: Any
    allowed: str

    def sentence(self) -> str:
        """Say it in one plain sentence.

        >>> Fault("relation", "foe", "one of follow, friend").sentence()
        "relation 'foe' is not allowed; allowed: one of follow, friend"
        >>> Fault("actor", MISSING, "text").sentence()
        'actor is missing; allowed: text'
        """
        name = self.field or "the value"
        if self.value is MISSING:
            return f"{name} is missing; allowed: {self.allowed}"
        return f"{name} {shown(self.value)!r} is not allowed; allowed: {self.allowed}"

    def within(self, prefix: str) -> "Fault":
        """Name the field by its place in a larger input."""
        return Fault(f"{prefix}.{self.field}" if self.field else prefix, self.value, self.allowed)


class WaxwaneError(Exception):
    """The root of all errors.

    Args:
        detail: one plain sentence for whoever made the call.
        faults: the fields that were wrong, if the error is about fields.

    """

    def __init__(self, detail: str, faults: Sequence[Fault] = ()) -> None:
        super().__init__(detail)
        self.detail = detail
        self.faults = tuple(faults)


class InvalidField(WaxwaneError):
    """A field or parameter has a value that is not allowed."""

    def __init__(self, field: str, value: object, allowed: str) -> None:
        fault = Fault(field, value, allowed)
        super().__init__(fault.sentence(), [fault])


class MalformedBody(WaxwaneError):
    """The body can't be read at all."""


class UnsupportedMedia(WaxwaneError):
    """The body is of a type that this address does not take."""

    def __init__(self, field: str, value: str, allowed: str) -> None:
        super().__init__(
            f"{field} {shown(value)!r} is not supported; supported: {allowed}", [Fault(field, value, allowed)]
        )


class BodyTooLarge(WaxwaneError):
    """A call holds more than one call may hold.

    Args:
        limit: the most that is taken, in `unit`.
        unit: `bytes` or `events`.
        size: what was sent, where it is known.

    """

    def __init__(self, limit: int, unit: str = "bytes", size: int | None = None) -> None:
        sent = f"more than {limit}" if size is None else str(size)
        fault = Fault("body", f"{sent} {unit}", f"up to {limit} {unit} in one call")
        super().__init__(f"the body holds {sent} {unit}; allowed: {fault.allowed}", [fault])
        self.limit = limit
        self.unit = unit
        self.size = size


class NotFound(WaxwaneError):
    """What was asked for is not there, or not for this reader."""


class CursorInvalid(WaxwaneError):
    """A cursor that no feed answer gave, or that belongs to another feed."""

    def __init__(self, cursor: str, reason: str = "it is not one that a feed answer gave") -> None:
        fault = Fault("cursor", cursor, "the next of an earlier page of the same feed, unchanged")
        super().__init__(f"the cursor can't be used: {reason}", [fault])


class CursorExpired(WaxwaneError):
    """A cursor whose pages are no longer kept."""

    def __init__(self, cursor: str) -> None:
        fault = Fault("cursor", cursor, "a cursor of a page read in the last minutes, or none to start anew")
        super().__init__("the pages of this cursor are no longer kept; read the first page again", [fault])


class UnknownPolicy(WaxwaneError):
    """No loaded policy has this name."""

    def __init__(self, name: str, known: Sequence[str]) -> None:
        allowed = f"one of {', '.join(sorted(known))}" if known else "none, as no policy is loaded"
        super().__init__(f"policy {shown(name)!r} is not loaded; allowed: {allowed}", [Fault("policy", name, allowed)])
        self.name = name
        self.known = tuple(known)


class PolicyProblem(Protocol):
    """One thing that is wrong in a policy's text."""

    @property
    def line(self) -> int | None:
        """The line, from 1, where one can be told."""

    @property
    def field(self) -> str | None:
        """The entry, for example `weights.like`, where one can be told."""

    @property
    def reason(self) -> str:
        """What is wrong, and what is allowed."""


class PolicyRefused(WaxwaneError):
    """A policy with an error: refused whole, the one in force stays.

    Args:
        policy: the name it was sent under.
        reason: what is wrong, and what is allowed.
        line: the line of the file, from 1, where one can be told.
        field: the entry of the file, for example `weights.like`, where one can be told.
        problems: everything that is wrong, where there is more to tell.

    """

    def __init__(
        self,
        policy: str,
        reason: str,
        line: int | None = None,
        field: str | None = None,
        problems: Sequence[PolicyProblem] = (),
    ) -> None:
        super().__init__(f"policy {shown(policy)!r} was refused: {reason}")
        self.policy = policy
        self.reason = reason
        self.line = line
        self.field = field
        self.problems = tuple(problems) or (self,)


class Conflict(WaxwaneError):
    """The call contradicts what is stored."""


class AllRejected(WaxwaneError):
    """Every event of a call was rejected.

    Args:
        answer: the counters and rejections that a call with a valid event would have been answered with.
        faults: the fields that were wrong.

    """

    def __init__(self, answer: Mapping[str, Any], faults: Sequence[Fault] = ()) -> None:
        count = len(answer["rejected"])
        reason = answer["rejected"][0]["reason"]
        detail = reason if count == 1 else f"each of the {count} events was rejected; the first: {reason}"
        super().__init__(detail, faults)
        self.answer = dict(answer)


class StoreUnavailable(WaxwaneError):
    """The store is away or too slow; nothing of the call was acknowledged.

    Args:
        reason: what went wrong, without addresses.
        retry_after_s: when another try makes sense, seconds.

    """

    def __init__(self, reason: str = "the store does not answer", retry_after_s: int = 1) -> None:
        super().__init__(f"{reason}; nothing of this call was acknowledged, send it again after {retry_after_s} s")
        self.retry_after_s = retry_after_s


class StoreRefused(StoreUnavailable):
    """The store is there and refused a command: out of memory, read-only, or a key that is not what it should be."""


class Overloaded(WaxwaneError):
    """The service is shedding load; nothing of the call was acknowledged.

    Args:
        reason: which limit was reached.
        retry_after_s: when another try makes sense, seconds.

    """

    def __init__(self, reason: str = "too many calls at once", retry_after_s: int = 1) -> None:
        super().__init__(f"{reason}; nothing of this call was acknowledged, send it again after {retry_after_s} s")
        self.retry_after_s = retry_after_s


class NotReady(WaxwaneError):
    """The service takes no new calls: it is starting or going away."""

    def __init__(self, reason: str, retry_after_s: int = 1) -> None:
        super().__init__(reason)
        self.retry_after_s = retry_after_s
