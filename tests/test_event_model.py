"""Events: what is valid, and how what is not is put into words."""

from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st
from pydantic import ValidationError

from service.events.faults import describe_validation_error, event_faults
from service.events.model import EVENT_TYPES, InteractionEvent, PostEvent, parse_event
from service.web.examples import EVENTS

AT_MS = 1_777_882_500_000


def of(kind: str, /, **changes: Any) -> dict[str, Any]:
    """Take the example of a type and change fields; None takes one out."""
    fields = {**EVENTS[kind], **changes}
    return {name: value for name, value in fields.items() if value is not None}


def reason(data: Any) -> str:
    with pytest.raises(ValidationError) as caught:
        parse_event(data)
    return describe_validation_error(caught.value)


@pytest.mark.parametrize("kind", EVENT_TYPES)
def test_each_example_is_valid(kind: str) -> None:
    """Every type's example is an event of that type."""
    event = parse_event(EVENTS[kind])
    assert (event.type, event.id, event.actor) == (kind, EVENTS[kind]["id"], EVENTS[kind]["actor"])


def test_a_post_holds_what_was_sent() -> None:
    """Times become Unix milliseconds, lists tuples, and the rest stays as it was."""
    event = parse_event(EVENTS["post"])
    assert isinstance(event, PostEvent)
    assert (event.at, event.post, event.form, event.audience, event.topics) == (
        AT_MS,
        "p1",
        "photo",
        "everyone",
        ("beans",),
    )


def test_a_post_has_defaults() -> None:
    """A post without form, audience and topics is a note for everyone about nothing."""
    event = parse_event(of("post", form=None, audience=None, topics=None))
    assert isinstance(event, PostEvent)
    assert (event.form, event.audience, event.topics) == ("note", "everyone", ())


def test_offsets_name_the_same_instant() -> None:
    """08:20 at two hours ahead is 06:20 in UTC."""
    event = parse_event(EVENTS["interaction"])
    assert isinstance(event, InteractionEvent)
    assert (event.at, event.kind) == (1_777_875_600_000, "comment.photo")


@pytest.mark.parametrize("value", ["a", "x" * 128, "é" * 64, "😀" * 32, "a b/c?d#e%f", "\u00a0", "\u2028"])
def test_ids_of_up_to_128_bytes_are_valid(value: str) -> None:
    """An id is 1 to 128 bytes of UTF-8, with spaces and slashes where it likes."""
    assert parse_event(of("withdraw", post=value)).model_dump()["post"] == value


@pytest.mark.parametrize(
    "value", ["", "x" * 129, "é" * 65, "😀" * 33, "a\n", "\x00", "\x7f", "\x85", "\ud800", 7, True]
)
@pytest.mark.parametrize("field", ["id", "actor", "post"])
def test_other_ids_are_refused(field: str, value: object) -> None:
    """Empty, longer, with control characters or lone surrogates, or no text: no id; the reason names the field."""
    assert reason(of("withdraw", **{field: value})).startswith(f"{field} ")


@pytest.mark.parametrize("kind", ["like", "comment.photo", "a.b.c", "A-1_z", "k" * 64, "posts", "postal.card"])
def test_kinds_are_dotted_names(kind: str) -> None:
    """A kind is words joined by dots, up to 64 bytes."""
    assert parse_event(of("interaction", kind=kind)).model_dump()["kind"] == kind


@pytest.mark.parametrize("kind", ["", ".", "a.", ".a", "a..b", "a b", "é", "k" * 65, "post", "post.photo", "like\n", 1])
def test_other_kinds_are_refused(kind: object) -> None:
    """Empty parts, other characters, and the kinds of creations are no kinds of interactions."""
    assert reason(of("interaction", kind=kind)).startswith("kind ")


@pytest.mark.parametrize("form", ["", "a.b", "a b", "f" * 65, 1])
def test_a_form_has_no_dots(form: object) -> None:
    """A form is one word."""
    assert reason(of("post", form=form)).startswith("form ")


@pytest.mark.parametrize(
    ("data", "words"),
    [
        (
            of("post", audience="all"),
            "audience 'all' is not allowed; allowed: one of everyone, followers, friends, nobody",
        ),
        (of("tie", relation="foe"), "relation 'foe' is not allowed; allowed: one of follow, friend, mute, block, none"),
        (of("tie", target="joel"), "target 'joel' is not allowed; allowed: a person other than the actor"),
        (of("tie", target=None), "target is missing; allowed: a value, as it is required"),
        (of("erase", post="p1"), "post 'p1' is not allowed; allowed: only these fields: id, at, actor, type"),
        (of("seen", posts=[]), "posts '0 entries' is not allowed; allowed: at least 1 entry"),
        (of("seen", posts=["p"] * 201), "posts '201 entries' is not allowed; allowed: at most 200 entries"),
        (of("seen", posts="p1"), "posts 'p1' is not allowed; allowed: a list"),
        (of("seen", posts=["p1", 2]), "posts[1] 2 is not allowed; allowed: text"),
        (of("post", topics=["b"] * 17), "topics '17 entries' is not allowed; allowed: at most 16 entries"),
        (
            of("post", topics=["b" * 65]),
            f"topics[0] '{'b' * 65}' is not allowed; allowed: text of at most 64 characters",
        ),
        (of("erase", type="gone"), "type 'gone' is not allowed; allowed: one of " + ", ".join(EVENT_TYPES)),
        (of("erase", type=None), "type is missing; allowed: one of " + ", ".join(EVENT_TYPES)),
        (7, "the value 7 is not allowed; allowed: an object"),
    ],
)
def test_reasons_name_field_value_and_what_is_allowed(data: Any, words: str) -> None:
    """A reason is one plain sentence for each field."""
    assert reason(data) == words


@pytest.mark.parametrize(
    "at", [True, 1.5, float("nan"), float("inf"), -1, 10**18, "yesterday", "2026-05-04T09:00:00", [], {}]
)
def test_other_times_are_refused(at: object) -> None:
    """Only RFC 3339 text and integers of Unix milliseconds are times."""
    words = reason(of("erase", at=at))
    assert words.startswith("at ")
    assert "RFC 3339" in words


def test_long_values_are_cut() -> None:
    """A reason shows no more than 100 characters of a value."""
    assert f"'{'x' * 97}...'" in reason(of("erase", actor="x" * 5_000))


def test_many_faults_are_counted() -> None:
    """A reason tells the first three faults and how many more there are."""
    with pytest.raises(ValidationError) as caught:
        parse_event({"type": "post"})
    assert [fault.field for fault in event_faults(caught.value)] == ["id", "at", "actor", "post"]
    assert describe_validation_error(caught.value).endswith("; and 1 more")


def test_events_can_not_be_changed() -> None:
    """An event stays as it was validated."""
    event = parse_event(EVENTS["erase"])
    with pytest.raises(ValidationError):
        setattr(event, "actor", "mina")  # noqa: B010  the type checker forbids it too


FIELDS = st.sampled_from(["id", "type", "at", "actor", "post"]) | st.text(max_size=3)
SCALARS = st.none() | st.booleans() | st.integers() | st.floats() | st.text() | st.sampled_from(list(EVENT_TYPES))


@given(st.recursive(SCALARS, lambda inner: st.lists(inner, max_size=3) | st.dictionaries(FIELDS, inner, max_size=5)))
def test_anything_is_an_event_or_refused_in_words(data: Any) -> None:
    """Whatever JSON can hold is an event or refused with a reason."""
    words = "allowed: "
    try:
        parse_event(data)
    except ValidationError as error:
        words = describe_validation_error(error)
    assert "allowed: " in words
