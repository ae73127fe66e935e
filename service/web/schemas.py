"""Shapes of the answers, for the OpenAPI document; answers are written without them."""

from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field

Time = Annotated[str, Field(json_schema_extra={"format": "date-time"}, description="RFC 3339 in UTC")]


class Answer(BaseModel):
    """What every answer's shape has in common: no other members."""

    model_config = ConfigDict(extra="forbid")


class RejectedEvent(Answer):
    """An event that was not taken."""

    index: int = Field(ge=0, description="its place in the call, from 0")
    id: str | None = Field(description="its id as sent; null where it has none")
    reason: str


class EventsAnswer(Answer):
    """What became of a call's events."""

    applied: int = Field(ge=0)
    duplicate: int = Field(ge=0)
    expired: int = Field(ge=0, description="older than retention")
    rejected: list[RejectedEvent]


class Why(Answer):
    """The edge by someone the reader knows that adds most to a post's score."""

    actor: str
    relation: Literal["follow", "friend", "none"] = Field(description="the reader's to the actor")
    kind: str
    at: Time
    age_s: int = Field(ge=0, description="its age at the time of the feed, seconds")
    product: float = Field(description="affinity times weight times freshness")


class Post(Answer):
    """A post of a feed."""

    post: str
    author: str
    form: str
    posted_at: Time
    score: float | None = Field(description="null where the order is newest")
    source: Literal["tie", "beyond"] | None = Field(
        None, description="only where the policy goes beyond the ties: whether a tie brought the post"
    )
    why: Why | None = Field(None, description="only with why=1; null where only strangers brought the post")


class FeedPage(Answer):
    """A page of a feed."""

    reader: str
    as_of: Time
    policy: str
    complete: bool = Field(description="true only where this is certainly the exact top k")
    items: list[Post]
    next: str | None = Field(description="the cursor of the next page; null at the end")


class PopularPage(Answer):
    """What counts most for everybody."""

    as_of: Time
    policy: str
    complete: bool = Field(description="true only where this is certainly the exact top k")
    items: list[Post] = Field(description="a score is the sum over all edges of weight times freshness")


class TiePart(Answer):
    """What one edge by someone the reader knows adds."""

    source: Literal["tie"]
    actor: str
    kind: str
    at: Time
    affinity: float
    weight: float
    freshness: float
    product: float


class CrowdPart(Answer):
    """What everybody else adds."""

    source: Literal["crowd"]
    affinity: float
    sum: float
    product: float


class Factor(Answer):
    """What the sum of the parts is multiplied by."""

    name: str
    value: float


class ExplanationAnswer(Answer):
    """Why a post has its score: the products add up and, times the factors, are the score."""

    reader: str
    post: str
    as_of: Time
    policy: str
    score: float
    factors: list[Factor]
    parts: list[Annotated[TiePart | CrowdPart, Field(discriminator="source")]]


class PersonAnswer(BaseModel):
    """All that is stored about a person."""

    model_config = ConfigDict(extra="allow")


class PolicyAnswer(Answer):
    """A loaded policy."""

    name: str
    default: bool = Field(description="whether readers without an assigned policy get it")
    exact: bool = Field(description="whether the running sums hold its curve exactly")
    error: float = Field(description="the largest error of its curve, as a part of the value at age 0")
    settings: dict[str, Any]
    toml: str


class PoliciesAnswer(Answer):
    """The loaded policies."""

    policies: list[PolicyAnswer]


class Health(Answer):
    """The process is well."""

    status: Literal["ok"]


class ProblemEntry(BaseModel):
    """One thing that was wrong."""

    field: str = Field(description="the field, parameter or header")
    value: Any = Field(None, description="what was sent, cut to 100 characters; absent where nothing was")
    allowed: str | None = Field(None, description="what would have been right")
    reason: str | None = Field(None, description="what was wrong")
    line: int | None = Field(None, description="the line of a policy's text, from 1")


class Problem(BaseModel):
    """Problem details as RFC 9457 has them; a call whose events were all rejected adds its counters."""

    model_config = ConfigDict(extra="allow")

    type: str = Field(description="about:blank: the status tells the sort of problem")
    title: str
    status: int = Field(ge=400, le=599)
    detail: str
    errors: list[ProblemEntry] | None = Field(None)
