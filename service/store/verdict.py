"""What became of an event."""

from dataclasses import dataclass
from typing import Literal

Outcome = Literal["applied", "duplicate", "expired", "rejected"]


@dataclass(frozen=True, slots=True)
class Verdict:
    """The outcome of one event; `reason` is given where it was rejected."""

    outcome: Outcome
    reason: str | None = None


APPLIED = Verdict("applied")
DUPLICATE = Verdict("duplicate")
EXPIRED = Verdict("expired")
