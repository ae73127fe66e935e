"""Bodies of events: each form that is taken, and what each makes of what is wrong."""

from typing import Any

import orjson
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from service.errors import BodyTooLarge, MalformedBody, UnsupportedMedia, WaxwaneError
from service.events.bodies import MEDIA_TYPES, NDJSON, ParsedBatch, parse_body
from service.web.examples import EVENTS

ALL = list(EVENTS.values())
LIKE = EVENTS["interaction"]


def parse(body: bytes, content_type: str | None = None, max_batch: int = 1000) -> ParsedBatch:
    return parse_body(body, content_type, {}, max_batch=max_batch)


def lines(*events: Any) -> bytes:
    return b"\n".join(orjson.dumps(event) for event in events)


@pytest.mark.parametrize(
    "content_type", [None, "application/json", "Application/JSON; charset=UTF-8", 'application/json;charset="utf-8"']
)
def test_one_event(content_type: str | None) -> None:
    """An object is one event, with or without a content type."""
    batch = parse(orjson.dumps(LIKE), content_type)
    assert [(index, event.id) for index, event in batch.events] == [(0, "e2")]
    assert (batch.single, batch.total, batch.rejected) == (True, 1, [])


def test_an_array_of_events() -> None:
    """An array holds events in their order."""
    batch = parse(orjson.dumps(ALL))
    assert [(index, event.type) for index, event in batch.events] == list(enumerate(EVENTS))
    assert batch.single is False


def test_an_empty_array() -> None:
    """An empty array holds nothing and is no error."""
    assert parse(b"[]").total == 0


def test_newline_delimited_events() -> None:
    """Each line is an event; blank lines count for nothing, and neither do carriage returns."""
    batch = parse(b"\n" + lines(ALL[0], ALL[1]) + b"\r\n  \n" + lines(ALL[2]) + b"\n\n", NDJSON)
    assert [(index, event.id) for index, event in batch.events] == [(0, "e1"), (1, "e2"), (2, "e3")]


def test_a_broken_line_is_one_rejected_event() -> None:
    """A line that is not JSON is rejected by its place and the other lines are taken."""
    batch = parse(lines(ALL[0]) + b'\n{"id": "e9",\n\xff\n' + lines(ALL[1]), NDJSON)
    assert [(index, event.id) for index, event in batch.events] == [(0, "e1"), (3, "e2")]
    assert [(one.index, one.id, one.reason) for one in batch.rejected] == [
        (1, None, "the line is not JSON in UTF-8"),
        (2, None, "the line is not JSON in UTF-8"),
    ]


def test_lines_do_not_join_to_an_event() -> None:
    """An event that is spread over two lines is two broken lines."""
    batch = parse(b'{"id": "e7", "type": "erase", "at": 5\n"actor": "joel"}', NDJSON)
    assert (len(batch.events), len(batch.rejected)) == (0, 2)


def test_no_lines() -> None:
    """An empty newline-delimited body holds nothing and is no error."""
    assert parse(b"\n\n", NDJSON).total == 0


def test_wrong_events_are_rejected_by_place() -> None:
    """A wrong event does not keep the others from being taken."""
    batch = parse(orjson.dumps([ALL[0], {**LIKE, "kind": "a..b"}, "text", {"type": "tie", "id": 4}, ALL[6]]))
    assert [index for index, _ in batch.events] == [0, 4]
    assert [(one.index, one.id) for one in batch.rejected] == [(1, "e2"), (2, None), (3, None)]
    assert batch.rejected[0].reason == (
        "kind 'a..b' is not allowed; allowed: names of letters, digits, _ and -, joined by single dots"
    )


@pytest.mark.parametrize(
    "body", [b"", b" ", b"{", b"[1,", b"nul", b'{"a": NaN}', b"\xff", b"\xef\xbb\xbf{}", b'"\\ud800"', b"[" * 5_000]
)
def test_what_is_not_json_is_refused_whole(body: bytes) -> None:
    """A body that is not JSON in UTF-8 can't be read."""
    with pytest.raises(MalformedBody, match="not JSON"):
        parse(body)


@pytest.mark.parametrize("body", [b"1", b"null", b'"text"', b"true"])
def test_other_json_is_refused_whole(body: bytes) -> None:
    """A body is an object or an array."""
    with pytest.raises(MalformedBody, match="an event or an array of events"):
        parse(body)


@pytest.mark.parametrize(
    "content_type",
    [
        "text/plain",
        "application/x-www-form-urlencoded",
        "application/xml",
        "",
        ";",
        "application/json; charset=latin-1",
    ],
)
def test_other_media_types_are_refused(content_type: str) -> None:
    """Another media type or character set is not supported, and the error lists those that are."""
    with pytest.raises(UnsupportedMedia, match=r"utf-8|application/json"):
        parse(orjson.dumps(LIKE), content_type)


@pytest.mark.parametrize(
    ("body", "content_type"), [(orjson.dumps(ALL[:3]), None), (lines(*ALL[:3]), NDJSON), (lines(1, 2, 3), NDJSON)]
)
def test_a_batch_has_a_limit(body: bytes, content_type: str | None) -> None:
    """As many events as the limit are taken, and one more is too many, valid or not."""
    assert parse(body, content_type, max_batch=3).total == 3
    with pytest.raises(BodyTooLarge, match="up to 2 events in one call"):
        parse(body, content_type, max_batch=2)


def test_a_repeated_key_takes_the_last() -> None:
    """Of a key that stands twice in an object the last value counts."""
    [(_, event)] = parse(b'{"id": "e7", "type": "erase", "at": 5, "actor": "mina", "actor": "joel"}').events
    assert event.actor == "joel"


@given(
    body=st.binary(max_size=200) | st.lists(st.sampled_from([*ALL, 1, {}, {"type": "post"}])).map(orjson.dumps),
    content_type=st.sampled_from([None, *MEDIA_TYPES, "application/ndjson"]),
    headers=st.dictionaries(st.sampled_from(["ce-id", "ce-type", "ce-source"]), st.text(max_size=9), max_size=3),
)
@example(body=b"{}", content_type=None, headers={"ce-id": "€"})
def test_any_body_is_read_or_refused(body: bytes, content_type: str | None, headers: dict[str, str]) -> None:
    """Whatever is sent, each event is valid or rejected with a reason, or the whole is refused with an error."""
    try:
        batch = parse_body(body, content_type, headers, max_batch=50)
    except WaxwaneError:
        return
    places = [index for index, _ in batch.events] + [one.index for one in batch.rejected]
    assert sorted(places) == list(range(batch.total))
    assert all(one.reason for one in batch.rejected)
