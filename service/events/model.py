"""The events that waxwane takes, strictly validated."""

from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, TypeAdapter, ValidationInfo, field_validator

from service.events.fields import At, Audience, Form, Id, Kind, Relation, SeenPosts, Topics, not_allowed


class Event(BaseModel):
    """What every event has.

    `id` is the event's identity: it counts once however often it is sent. `at` is in Unix milliseconds.
    """

    model_config = ConfigDict(strict=True, extra="forbid", frozen=True)

    id: Id
    at: At
    actor: Id


class PostEvent(Event):
    """A post was published, or its form, audience and topics were edited by its author."""

    type: Literal["post"]
    post: Id
    form: Form = "note"
    audience: Audience = "everyone"
    topics: Topics = ()


class InteractionEvent(Event):
    """The actor did something with a post."""

    type: Literal["interaction"]
    post: Id
    kind: Kind


class TieEvent(Event):
    """The actor declared a relation to the target; the latest stands."""

    type: Literal["tie"]
    target: Id
    relation: Relation

    @field_validator("target")
    @classmethod
    def _two_people(cls, target: str, info: ValidationInfo) -> str:
        if target == info.data.get("actor"):
            raise not_allowed("a person other than the actor")
        return target


class RetractEvent(Event):
    """The actor takes back an interaction of their own."""

    type: Literal["retract"]
    event: Id


class WithdrawEvent(Event):
    """A post is taken away for good."""

    type: Literal["withdraw"]
    post: Id


class SeenEvent(Event):
    """The actor was shown these posts."""

    type: Literal["seen"]
    posts: SeenPosts


class EraseEvent(Event):
    """All that the actor did, and all that is kept about the actor, up to `at` is taken out."""

    type: Literal["erase"]


AnyEvent = PostEvent | InteractionEvent | TieEvent | RetractEvent | WithdrawEvent | SeenEvent | EraseEvent
TaggedEvent = Annotated[AnyEvent, Field(discriminator="type")]

EVENT_TYPES: dict[str, type[Event]] = {
    "post": PostEvent,
    "interaction": InteractionEvent,
    "tie": TieEvent,
    "retract": RetractEvent,
    "withdraw": WithdrawEvent,
    "seen": SeenEvent,
    "erase": EraseEvent,
}
ONE_EVENT: TypeAdapter[AnyEvent] = TypeAdapter(TaggedEvent)
MANY_EVENTS: TypeAdapter[list[AnyEvent]] = TypeAdapter(list[TaggedEvent])


def parse_event(data: Any) -> AnyEvent:  # noqa: ANN401  whatever the JSON held
    """Validate one event.

    Args:
        data: what was read from JSON.

    Raises:
        pydantic.ValidationError: it is no event; `service.events.faults` puts the error into words.

    >>> event = parse_event({"id": "e7", "type": "erase", "at": "2026-05-04T09:00:00Z", "actor": "joel"})
    >>> event.type, event.at
    ('erase', 1777885200000)

    """
    return ONE_EVENT.validate_python(data)
