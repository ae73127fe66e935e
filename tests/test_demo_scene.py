"""Whose feed the demo shows, and what happens there."""

from collections.abc import Mapping, Sequence
from typing import Any

import pytest

from service.demo.answers import Explanation, Feed, Part
from service.demo.client import CallError, Client
from service.demo.scene import Scene, choose_reader
from service.demo.story import Skipped, tell
from service.errors import InvalidField
from tests.demo_samples import NOW_MS, week


class StubClient(Client):
    """Gives prepared answers without a service."""

    def __init__(self, applied: int = 1, parts: Sequence[Part] = ()) -> None:
        super().__init__("http://127.0.0.1:1")
        self.sent: list[Mapping[str, Any]] = []
        self.parts = list(parts)
        self.applied = applied

    def send(self, events: Sequence[Mapping[str, Any]]) -> dict[str, Any]:
        """Remember the events."""
        self.sent += events
        return {"applied": self.applied, "rejected": []}

    def feed(self, reader: str, **parameters: object) -> Feed:  # noqa: ARG002  the same for all
        """Give an empty feed."""
        return Feed(NOW_MS, complete=True, items=[])

    def explain(self, reader: str, post: str) -> Explanation | None:  # noqa: ARG002  as above
        """Explain with the prepared parts."""
        return Explanation(post, NOW_MS, 1.0, self.parts)


def scene(client: Client) -> Scene:
    """A scene with the usual reader."""
    return Scene(client, week(), choose_reader(week(), None), 8, lambda: NOW_MS)


def test_reader_has_friends_and_many_ties() -> None:
    """Unless somebody is asked for, the reader has six friends and between 20 and 35 ties; always the same one."""
    ties = week().community.ties()[choose_reader(week(), None)]
    assert list(ties.values()).count("friend") == 6
    assert 20 <= len(ties) <= 35
    assert choose_reader(week(), None) == choose_reader(week(), None)


def test_reader_asked_for() -> None:
    """Anybody of the community can be the reader; nobody else can."""
    last = week().community.people[-1].id
    assert choose_reader(week(), last) == last
    with pytest.raises(InvalidField, match=r"^reader 'nobody' is not allowed; allowed: one of the 300 people, such as"):
        choose_reader(week(), "nobody")


def test_what_happens_is_sent_with_the_time() -> None:
    """Each happening is an event with an id of its own and the time now."""
    client = StubClient()
    stage = scene(client)
    stage.happen("withdraw", "mina", post="p1")
    stage.happen("tie", "mina", target="joel", relation="mute")
    at = "2026-05-04T09:00:00.000Z"
    assert client.sent == [
        {"id": "story-1", "type": "withdraw", "at": at, "actor": "mina", "post": "p1"},
        {"id": "story-2", "type": "tie", "at": at, "actor": "mina", "target": "joel", "relation": "mute"},
    ]


def test_event_that_is_not_applied_is_an_error() -> None:
    """The story does not go on as if an event had been applied that was not."""
    with pytest.raises(CallError, match="story-1 was not applied"):
        scene(StubClient(applied=0)).happen("withdraw", "mina", post="p1")


def test_newest_part_and_affinity() -> None:
    """The newest act by somebody is found among the parts of a score; somebody without one is an error."""
    old, new = Part("mina", "like", 1, 2.0, 0.5, 1.0), Part("mina", "comment", 2, 2.0, 1.0, 2.0)
    stage = scene(StubClient(parts=[old, new, Part("", "", 3, 0.02, 1.0, 0.1)]))
    assert stage.newest_part("p1", "mina") == new
    assert (stage.affinity("mina", "p1"), stage.affinity("joel", "p1")) == (2.0, 0.0)
    with pytest.raises(CallError, match="holds nothing of joel"):
        stage.newest_part("p1", "joel")


def test_empty_feed_has_no_story() -> None:
    """A reader whose feed is empty gets every beat skipped with its reason, and nothing is sent."""
    client = StubClient()
    stage = scene(client)
    outcomes = list(tell(stage, stage.feed()))
    assert [outcome.name for outcome in outcomes] == ["renewal", "learning", "mute", "withdrawal", "tomorrow"]
    assert all(isinstance(outcome, Skipped) and outcome.reason for outcome in outcomes)
    assert client.sent == []
