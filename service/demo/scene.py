"""Where the story takes place: a service, a reader, and what is known of both."""

from collections.abc import Callable
from typing import Any

from service.demo.answers import Explanation, Feed, Part
from service.demo.chronicle import Chronicle
from service.demo.client import CallError, Client
from service.demo.community import Relation
from service.errors import InvalidField
from service.times import format_ms

DEPTH = 200
_BUDGET_MS = 2_000
_GOOD_TIES, _GOOD_FRIENDS = 26, 6


class Scene:
    """One reader's view of the service.

    Args:
        client: of the service, which holds the chronicle's events.
        chronicle: the community and its week.
        reader: whose feed it is.
        k: how many posts are shown.
        clock: reads the wall clock, Unix milliseconds.

    """

    def __init__(self, client: Client, chronicle: Chronicle, reader: str, k: int, clock: Callable[[], int]) -> None:
        self.client = client
        self.chronicle = chronicle
        self.reader = reader
        self.k = k
        self.clock = clock
        self.relations: dict[str, Relation] = dict(chronicle.community.ties()[reader])
        self.touched = {
            event["post"] for event in chronicle.events if event["type"] == "interaction" and event["actor"] == reader
        }
        self._sent = 0

    def feed(self, as_of_ms: int | None = None) -> Feed:
        """Read the feed deeper than it is shown, so that every move can be told."""
        ahead = {} if as_of_ms is None else {"as_of": as_of_ms}
        return self.client.feed(self.reader, k=DEPTH, budget_ms=_BUDGET_MS, **ahead)

    def explain(self, post: str) -> Explanation | None:
        """Ask why a post has its score; None where the reader may not see it."""
        return self.client.explain(self.reader, post)

    def affinity(self, author: str, post: str) -> float:
        """Tell how much the reader cares about the author of a post; 0.0 where that is not to be seen."""
        explanation = self.explain(post)
        parts = explanation.parts if explanation else []
        return next((part.affinity for part in parts if part.actor == author), 0.0)

    def newest_part(self, post: str, actor: str) -> Part:
        """Give what the newest act by somebody adds to a post's score.

        Raises:
            CallError: the score holds nothing of that person.

        """
        explanation = self.explain(post)
        parts = [part for part in explanation.parts if part.actor == actor] if explanation else []
        if not parts:
            raise CallError("GET /v1/feeds", 200, f"the score of {post} holds nothing of {actor}")
        return max(parts, key=lambda part: part.at_ms)

    def happen(self, event_type: str, actor: str, **fields: object) -> dict[str, Any]:
        """Let something happen now: send an event, and return it.

        Raises:
            CallError: the event was not applied.

        """
        self._sent += 1
        at = format_ms(self.clock())
        event = {"id": f"story-{self._sent}", "type": event_type, "at": at, "actor": actor, **fields}
        answer = self.client.send([event])
        if answer["applied"] != 1:
            raise CallError("POST /v1/events", 200, f"{event['id']} was not applied: {answer}")
        return event


def choose_reader(chronicle: Chronicle, wanted: str | None) -> str:
    """Choose whose feed is shown: the one asked for, or somebody with friends and a good number of ties.

    Raises:
        InvalidField: nobody of the community is called so.

    """
    ties = chronicle.community.ties()
    if wanted is not None:
        if wanted not in ties:
            some = ", ".join(list(ties)[:3])
            raise InvalidField("reader", wanted, f"one of the {len(ties)} people, such as {some}")
        return wanted
    return min(ties, key=lambda person: _unsuited(ties[person]))


def _unsuited(ties: dict[str, Relation]) -> tuple[int, int]:
    declared = list(ties.values())
    return abs(declared.count("friend") - _GOOD_FRIENDS), abs(len(declared) - _GOOD_TIES)
