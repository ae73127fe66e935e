"""What a caller asks of a feed and what it is answered."""

from dataclasses import dataclass, field
from typing import Any, Literal

Order = Literal["ranked", "newest"]
Source = Literal["tie", "beyond"]


@dataclass(frozen=True, slots=True)
class FeedRequest:
    """Ask for a reader's next posts.

    Args:
        reader: the reader's id.
        k: how many posts, 1 to 200.
        budget_ms: time that the ranking may take; None takes the setting.
        order: by score, or by posting time without the reader's profile.
        cursor: `next` of the page before, if any.
        policy: name of a loaded policy; None takes the reader's assigned one.
        as_of_ms: rank as at this time, Unix milliseconds; None is now.
        explore: False switches the policy's randomness off.
        forms: only posts of one of these forms; all where there are none.
        topics: only posts with one of these topics; all where there are none.
        why: also give the strongest edge of each post.

    """

    reader: str
    k: int = 20
    budget_ms: float | None = None
    order: Order = "ranked"
    cursor: str | None = None
    policy: str | None = None
    as_of_ms: int | None = None
    explore: bool = True
    forms: tuple[str, ...] = ()
    topics: tuple[str, ...] = ()
    why: bool = False


@dataclass(slots=True)
class FeedItem:
    """One post of a feed; `score` is None where the order is newest first.

    `source` tells, where the policy goes beyond the ties, whether a tie brought the post. Not frozen: that would double
    what making one costs.
    """

    post: str
    author: str
    form: str
    posted_ms: int
    score: float | None
    why: "Reason | None" = None
    source: Source | None = None


@dataclass(frozen=True, slots=True)
class Reason:
    """The edge by someone the reader knows that adds most to a post's score; `age_ms` is at the time of the feed."""

    actor: str
    kind: str
    at_ms: int
    age_ms: int
    relation: str
    product: float


@dataclass(frozen=True, slots=True)
class FeedAnswer:
    """A page of a feed.

    `complete` is True only where the items are certainly the exact top k.
    `stages_ms` holds the time of each stage, for the Server-Timing header.
    """

    reader: str
    as_of_ms: int
    policy: str
    complete: bool
    items: list[FeedItem]
    next: str | None
    stages_ms: dict[str, float] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class PopularRequest:
    """Ask for the posts that count most for everybody.

    Args:
        k: how many posts, 1 to 200.
        reader: whose blocks and mutes hold, and whose own posts are left out; None is nobody's.
        policy: name of a loaded policy; None takes the default.
        as_of_ms: rank as at this time, Unix milliseconds; None is now.
        forms: only posts of one of these forms; all where there are none.
        topics: only posts with one of these topics; all where there are none.

    """

    k: int = 20
    reader: str | None = None
    policy: str | None = None
    as_of_ms: int | None = None
    forms: tuple[str, ...] = ()
    topics: tuple[str, ...] = ()


@dataclass(frozen=True, slots=True)
class PopularAnswer:
    """The posts that count most for everybody; a score is the sum over all edges of weight times freshness.

    `complete` is True only where the items are certainly the exact top k.
    """

    as_of_ms: int
    policy: str
    complete: bool
    items: list[FeedItem]
    stages_ms: dict[str, float] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class ExplainRequest:
    """Ask why a post has its score for a reader."""

    reader: str
    post: str
    policy: str | None = None
    as_of_ms: int | None = None


@dataclass(frozen=True, slots=True)
class TiePart:
    """What one edge by a known person adds to a score."""

    actor: str
    kind: str
    at_ms: int
    affinity: float
    weight: float
    freshness: float
    product: float


@dataclass(frozen=True, slots=True)
class CrowdPart:
    """What everybody unknown to the reader adds: `affinity` times the weighted, decayed `sum`."""

    affinity: float
    sum: float
    product: float


@dataclass(frozen=True, slots=True)
class Factor:
    """A number that the sum of the parts is multiplied by."""

    name: str
    value: float


@dataclass(frozen=True, slots=True)
class Explanation:
    """Every part of a score; the products add up and, times the factors, are the score."""

    reader: str
    post: str
    as_of_ms: int
    policy: str
    score: float
    factors: list[Factor]
    ties: list[TiePart]
    crowd: CrowdPart


@dataclass(frozen=True, slots=True)
class PolicyInfo:
    """A loaded policy as callers see it; `error` is the certified error of its curve on the bank."""

    name: str
    toml: str
    exact: bool
    error: float
    default: bool
    settings: dict[str, Any]
