"""What an import did: counts, and the lines that were rejected."""

import dataclasses
from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any, Final, Literal

SHOWN_REJECTED: Final = 20


@dataclass(frozen=True, slots=True)
class Rejected:
    """A line that was not taken.

    Args:
        file: the input it stands in.
        line: its number there, from 1.
        reason: what was wrong, in words.
        event_json: JSON of what the line held: the line itself, or its text where it is no JSON, or null where it is
            too long.

    """

    file: str
    line: int
    reason: str
    event_json: bytes


@dataclass(frozen=True, slots=True)
class Stop:
    """Why an import ended early, and where.

    Args:
        cause: a damaged file, a store that stayed away, or the operator.
        file: the input it stopped in.
        line: the first line of it that was not applied.
        reason: the cause in words.

    """

    cause: Literal["damaged", "store", "interrupted"]
    file: str
    line: int
    reason: str


@dataclass(slots=True)
class Summary:
    """Counts of an import so far; every line that was read is in one of them.

    Args:
        on_rejected: told of every rejected line, in order.

    """

    on_rejected: Callable[[Rejected], None] = lambda _: None
    applied: int = 0
    duplicate: int = 0
    expired: int = 0
    rejected: int = 0
    first_rejected: list[Rejected] = field(default_factory=list)
    stop: Stop | None = None

    @property
    def read(self) -> int:
        """How many lines were read and judged."""
        return self.applied + self.duplicate + self.expired + self.rejected

    def reject(self, rejected: Rejected) -> None:
        """Count a rejected line, and remember the first few."""
        self.rejected += 1
        if len(self.first_rejected) < SHOWN_REJECTED:
            self.first_rejected.append(rejected)
        self.on_rejected(rejected)


def rate_per_s(count: int, seconds: float) -> float:
    """Divide a count by a time, 0 where there is no time.

    >>> rate_per_s(500, 2.0), rate_per_s(0, 0.0)
    (250.0, 0.0)

    """
    return count / seconds if seconds > 0 else 0.0


def as_document(summary: Summary, seconds: float) -> dict[str, Any]:
    """Write a summary as JSON has it.

    Args:
        summary: what was done.
        seconds: how long it took.

    """
    stop = summary.stop
    return {
        "read": summary.read,
        "applied": summary.applied,
        "duplicate": summary.duplicate,
        "expired": summary.expired,
        "rejected": summary.rejected,
        "seconds": round(seconds, 3),
        "events_per_s": round(rate_per_s(summary.read, seconds), 1),
        "first_rejected": [
            {"file": one.file, "line": one.line, "reason": one.reason} for one in summary.first_rejected
        ],
        "stopped": None if stop is None else dataclasses.asdict(stop),
    }
