"""What the service answers, read from JSON."""

import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Self

from service.times import parse_rfc3339


@dataclass(frozen=True, slots=True)
class Item:
    """A post of a feed."""

    post: str
    author: str
    form: str
    posted_ms: int
    score: float


@dataclass(frozen=True, slots=True)
class Feed:
    """A reader's feed, best first.

    `stages_ms` holds the time of each stage on the server, and of all of them as `total`.
    """

    as_of_ms: int
    complete: bool
    items: list[Item]
    stages_ms: dict[str, float] = field(default_factory=dict)

    @classmethod
    def read(cls, document: Mapping[str, Any], server_timing: str = "") -> Self:
        """Read the answer and its Server-Timing header."""
        items = [
            Item(one["post"], one["author"], one["form"], parse_rfc3339(one["posted_at"]), one["score"])
            for one in document["items"]
        ]
        return cls(parse_rfc3339(document["as_of"]), document["complete"], items, read_timing(server_timing))

    def rank(self, post: str) -> int | None:
        """Tell a post's place, from 1; None where the feed does not hold it."""
        return next((place for place, item in enumerate(self.items, 1) if item.post == post), None)

    def score(self, post: str) -> float | None:
        """Tell a post's score; None where the feed does not hold it."""
        return next((item.score for item in self.items if item.post == post), None)


@dataclass(frozen=True, slots=True)
class Part:
    """What one edge adds to a score; `actor` and `kind` are empty for the crowd's part."""

    actor: str
    kind: str
    at_ms: int
    affinity: float
    weight: float
    product: float


@dataclass(frozen=True, slots=True)
class Explanation:
    """Why a post has its score: the parts add up to it."""

    post: str
    as_of_ms: int
    score: float
    parts: list[Part]

    @classmethod
    def read(cls, document: Mapping[str, Any]) -> Self:
        """Read the answer."""
        as_of_ms = parse_rfc3339(document["as_of"])
        parts = [_part(one, as_of_ms) for one in document["parts"]]
        return cls(document["post"], as_of_ms, document["score"], parts)


def _part(document: Mapping[str, Any], as_of_ms: int) -> Part:
    """Read a part; the crowd's has no actor, no time of its own and no weight beyond its sum."""
    at_ms = parse_rfc3339(document["at"]) if "at" in document else as_of_ms
    weight = document.get("weight", 1.0)
    return Part(
        document.get("actor", ""),
        document.get("kind", ""),
        at_ms,
        document["affinity"],
        weight,
        document["product"],
    )


def read_timing(header: str) -> dict[str, float]:
    """Read the durations of a Server-Timing header, milliseconds.

    >>> read_timing("rows;dur=0.412, total;dur=1.8")
    {'rows': 0.412, 'total': 1.8}

    """
    return {name: float(duration) for name, duration in re.findall(r"(\w+);dur=([\d.]+)", header)}
