"""Lines read as columns are what the model reads; whatever is not plainly valid is left to it."""

import random

import orjson
import pytest
from pydantic import ValidationError

from service import times
from service.events.model import InteractionEvent, parse_event
from service.importing.columns import Reader
from service.importing.instants import read_times
from service.store.ids import IdHasher

HASHER = IdHasher(b"key")
GOOD = {"id": "e1", "type": "interaction", "at": 1_777_885_200_000, "actor": "joel", "post": "p1", "kind": "like"}
ODD_VALUES = (
    None,
    True,
    7,
    -1,
    1.5,
    [],
    {},
    "",
    "x",
    "x" * 128,
    "x" * 129,
    "ø" * 64,
    "ø" * 65,
    "a\u0000",
    "\u0085",
    "a b",
)
ODD_TIMES = (
    *("2026-05-04T08:15:00Z", "2026-05-04T08:15:00.5Z", "2026-05-04T08:15:00.123Z", "2026-05-04t08:15:00z"),
    *("2026-02-29T00:00:00Z", "2024-02-29T00:00:00Z", "2026-13-01T00:00:00Z", "2026-00-10T00:00:00Z"),
    *("2026-05-04T24:00:00Z", "2026-05-04T23:59:60Z", "2026-05-04T22:59:60Z", "1969-12-31T23:59:59Z"),
    *("2026-05-04T08:15:00+02:00", "2026-05-04 08:15:00Z", "2026-05-04T08:15:0٣Z", "9999-12-31T23:59:59.999Z"),
    *(True, None, -1, 0, times.MAX_MS, times.MAX_MS + 1, 10**30, "", "1777885200000", [], 1.0),
)


@pytest.mark.parametrize("field", ["id", "type", "at", "actor", "post", "kind", "more"])
@pytest.mark.parametrize("value", [*ODD_VALUES, "post", "post.photo", "like.", "comment.photo.close", "_"], ids=repr)
def test_nothing_is_taken_that_the_model_refuses(field: str, value: object) -> None:
    """With any odd value in any field, a line is a row only where the model takes it, and then means the same."""
    document = GOOD | {field: value}
    columns = Reader(HASHER.hash_many).read([orjson.dumps(document), orjson.dumps(GOOD)])
    assert columns.places.tolist() == ([0, 1] if 0 not in columns.others else [1])
    if 0 in columns.others:
        return
    event = parse_event(document)
    assert isinstance(event, InteractionEvent)
    hashes = [int.from_bytes(HASHER.hash(text), "little") for text in (event.id, event.actor, event.post)]
    assert [column[0] for column in (columns.ids, columns.people, columns.posts)] == hashes
    assert columns.at_ms[0] == event.at
    assert columns.kind_names[columns.kinds[0]] == event.kind
    assert (columns.person_ids[hashes[1]], columns.post_ids[hashes[2]]) == (event.actor, event.post)


def test_plain_lines_are_all_taken() -> None:
    """Good lines are rows, whatever stands beside them; blank ones count for nothing, broken ones are left."""
    lines = [orjson.dumps(GOOD | {"id": f"e{number}"}) for number in range(5)]
    mixed = [lines[0], b"", b"  \r", b"compost", None, b" " + lines[1] + b"\r", b"[1]", b'"x"', *lines[2:]]
    columns = Reader(HASHER.hash_many).read(mixed)
    assert columns.places.tolist() == [0, 5, 8, 9, 10]
    assert columns.others == [3, 4, 6, 7]


@pytest.mark.parametrize("seed", range(3))
def test_times_are_those_of_the_model(seed: int) -> None:
    """In any mixture, each time is what is read of it alone, and -1 where it is none."""
    rng = random.Random(seed)
    made = [times.format_ms(rng.randrange(times.MAX_MS)) for _ in range(300)]
    values = [*ODD_TIMES, *made, *(text[:-5] + "Z" for text in made), *("9" * len(text) for text in made[:5])]
    rng.shuffle(values)
    expected = []
    for value in values:
        try:
            expected.append(times.parse_time(value))
        except times.TimeError:
            expected.append(-1)
    assert read_times(values).tolist() == expected


def test_a_refused_line_is_one_the_model_refuses_or_reads_in_its_own_way() -> None:
    """The odd values above do reach the model: of the fields' values it refuses some and takes some."""
    outcomes = set()
    for value in ODD_VALUES:
        try:
            parse_event(GOOD | {"actor": value})
        except ValidationError:
            outcomes.add("refused")
        else:
            outcomes.add("taken")
    assert outcomes == {"refused", "taken"}
