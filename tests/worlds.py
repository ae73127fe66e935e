"""Small, dense, hostile worlds: a policy and a set of events in which every rule bites somewhere.

The same makers serve seeded generators (`random_world`, `random_policy`, `random_schedule`)
and Hypothesis strategies (`worlds`, `policies`, `schedules`).
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from random import Random
from typing import Any

import tomli_w
from hypothesis import strategies as st

from tests.oracle import AHEAD_MS, DAY_MS, RETENTION_MS, Event, Oracle

NOW_MS = 1_777_885_200_000
HOUR_MS = 3_600_000
BANK = ("15m", "1h", "3h", "6h", "12h", "1d", "3d", "7d", "14d", "30d")
OFF_BANK = ("90m", "2h", "5h", "10h", "36h", "2d", "5d")
PEOPLE = (
    "mina",
    "joel",
    "jürgen",
    "plot 7/b",
    "{bed:3}",
    "🌱",
    "e\u0301ric",
    "\u00e9ric",
    "人:一",
    "ø" * 64,
    "%2F?k=1#x",
    '"quoted"\\',
)
POSTS = (
    "p1",
    "p2",
    "P1",
    "post 3",
    "a/b/c",
    "{p}",
    "{}",
    "::",
    "🥕🥕",
    "\u00fcber",
    "u\u0308ber",
    "p10",
    "0",
    "豆" * 42,
    "p1\u00a0",
    "*",
)
FORMS = ("photo", "video", "note", "bean-photo")
KINDS = ("comment", "comment.photo", "comment.photo.close", "comment.note", "share", "share.far", "like", "hide")
UNKNOWN_KINDS = ("wave", "wave.comment", "commentary")
AUDIENCES = ("everyone", "everyone", "everyone", "followers", "friends", "nobody")
RELATIONS = ("follow", "follow", "follow", "friend", "friend", "mute", "block", "none")
TYPE_SHARES = {"post": 14, "interaction": 45, "tie": 20, "retract": 9, "seen": 7, "withdraw": 2, "erase": 3}


@dataclass(frozen=True)
class World:
    """A policy and events in some order; every event id and every post's author is unique.

    `exact` is true where the policy's curve and affinity have half-lives of the default bank.
    """

    policy: dict[str, Any]
    events: list[Event]
    people: tuple[str, ...]
    posts: tuple[str, ...]
    now_ms: int = NOW_MS

    @property
    def policy_toml(self) -> str:
        """Return the policy as the text of its file."""
        return tomli_w.dumps(self.policy)

    @property
    def exact(self) -> bool:
        """Say whether running sums hold the policy's curves exactly."""
        return self.policy["freshness"].get("half_life") in BANK and self.policy["affinity"]["half_life"] in BANK

    def oracle(self) -> Oracle:
        """Return the brute-force answers for this world."""
        return Oracle.from_events(self.events, self.now_ms, policy=self.policy)


@dataclass(frozen=True)
class Cast:
    """Who and what the events of one world are about; `moments_ms` are the times they crowd around."""

    people: tuple[str, ...]
    authors: dict[str, str]
    moments_ms: tuple[int, ...]


def _cast(rng: Random, people: int, posts: int, now_ms: int) -> Cast:
    names = tuple(rng.sample(PEOPLE, people))
    authors = {post: rng.choice(names) for post in rng.sample(POSTS, posts)}
    recent = [now_ms - int(HOUR_MS * 10 ** rng.uniform(-2, 2.7)) for _ in range(4)]
    edges = [now_ms, now_ms + AHEAD_MS, now_ms - RETENTION_MS]
    return Cast(names, authors, tuple(recent * 3 + edges + [now_ms - 1, now_ms + 2_000, now_ms - DAY_MS]))


def _time(rng: Random, cast: Cast) -> int:
    """Draw a time at or within a millisecond of a moment: some just expired, some just too far ahead."""
    return rng.choice(cast.moments_ms) + rng.choice((0, 0, 0, 0, 1, -1))


def _post(rng: Random, cast: Cast, _: Sequence[Event]) -> Event:
    post = rng.choice(tuple(cast.authors))
    topics = rng.choice(([], ["beans"], ["beans", "süß"]))
    fields = {"form": rng.choice(FORMS), "audience": rng.choice(AUDIENCES), "topics": topics}
    return {"actor": cast.authors[post], "post": post} | fields


def _interaction(rng: Random, cast: Cast, _: Sequence[Event]) -> Event:
    kinds = UNKNOWN_KINDS if rng.random() < 0.02 else KINDS
    return {"actor": rng.choice(cast.people), "post": rng.choice(tuple(cast.authors)), "kind": rng.choice(kinds)}


def _tie(rng: Random, cast: Cast, _: Sequence[Event]) -> Event:
    actor, target = rng.sample(cast.people, 2)
    return {"actor": actor, "target": target, "relation": rng.choice(RELATIONS)}


def _retract(rng: Random, cast: Cast, others: Sequence[Event]) -> Event:
    """Take back mostly one's own interaction, sometimes another's, another type of event or nothing."""
    interactions = [event for event in others if event["type"] == "interaction"]
    if interactions and rng.random() < 0.8:
        event = rng.choice(interactions)
        return {"actor": event["actor"], "event": event["id"]}
    event_id = rng.choice(others)["id"] if others else "nothing"
    return {"actor": rng.choice(cast.people), "event": event_id}


def _withdraw(rng: Random, cast: Cast, _: Sequence[Event]) -> Event:
    return {"actor": rng.choice(cast.people), "post": rng.choice(tuple(cast.authors))}


def _seen(rng: Random, cast: Cast, _: Sequence[Event]) -> Event:
    posts = tuple(cast.authors)
    return {"actor": rng.choice(cast.people), "posts": rng.sample(posts, rng.randint(1, min(4, len(posts))))}


def _erase(rng: Random, cast: Cast, _: Sequence[Event]) -> Event:
    return {"actor": rng.choice(cast.people)}


MAKERS: dict[str, Callable[[Random, Cast, Sequence[Event]], Event]] = {
    "post": _post,
    "interaction": _interaction,
    "tie": _tie,
    "retract": _retract,
    "withdraw": _withdraw,
    "seen": _seen,
    "erase": _erase,
}


def _event(rng: Random, cast: Cast, others: Sequence[Event], shares: dict[str, int]) -> Event:
    """Make one event of a type drawn by its share; ids sort unlike the order in which events are made."""
    kind = rng.choices(tuple(shares), weights=tuple(shares.values()))[0]
    prefix = rng.choice(("e", "é", "{e}", "E 1/", "🌱:"))
    head = {"id": f"{prefix}{rng.randrange(100)}-{len(others)}", "type": kind, "at": _time(rng, cast)}
    return head | MAKERS[kind](rng, cast, others)


def _groundwork(rng: Random, cast: Cast) -> list[Event]:
    """Create most posts and tie most people, so that feeds are not empty."""
    events: list[Event] = []
    for post, author in cast.authors.items():
        if rng.random() < 0.85:
            made = _post(rng, cast, events) | {"post": post, "actor": author}
            events.append({"id": f"post-{len(events)}", "type": "post", "at": _time(rng, cast)} | made)
    for actor in cast.people:
        for target in cast.people:
            if actor != target and rng.random() < 0.5:
                tie = {"actor": actor, "target": target, "relation": rng.choice(("follow", "friend"))}
                events.append({"id": f"tie-{len(events)}", "type": "tie", "at": _time(rng, cast)} | tie)
    return events


def random_world(
    seed: int,
    people: int = 5,
    posts: int = 8,
    events: int = 80,
    *,
    policy: dict[str, Any] | None = None,
    now_ms: int = NOW_MS,
    shares: dict[str, int] | None = None,
) -> World:
    """Make a world from a seed.

    Args:
        seed: Seed of everything drawn.
        people: How many people, 2 to 12.
        posts: How many post ids, 1 to 16.
        events: How many events beyond the posts and ties it starts with.
        policy: The policy; None draws one whose half-lives are in the default bank.
        now_ms: The time that the events lie around, Unix milliseconds.
        shares: Relative frequency of each event type; None takes `TYPE_SHARES`.
    """
    rng = Random(seed)
    cast = _cast(rng, people, posts, now_ms)
    made = _groundwork(rng, cast)
    for _ in range(events):
        made.append(_event(rng, cast, made, shares or TYPE_SHARES))
    rng.shuffle(made)
    return World(policy or random_policy(rng), made, cast.people, tuple(cast.authors), now_ms)


def _curve(rng: Random, curves: str) -> dict[str, Any]:
    if curves == "power":
        exponent = rng.choice((0.5, 1.0, 1.5))
        return {"curve": "power", "scale": rng.choice(("4h", "6h", "12h")), "exponent": exponent}
    return {"curve": "half_life", "half_life": rng.choice(OFF_BANK if curves == "off_bank" else BANK)}


def random_policy(rng: Random, curves: str = "bank") -> dict[str, Any]:
    """Make a policy document.

    Args:
        rng: Generator to draw from.
        curves: Freshness: `bank`, `off_bank` (half-lives between those of the bank) or `power`.
    """
    weights = {"post": 1.0, "post.photo": 3.0, "post.video": 6, "comment": 1.0, "comment.photo": 2.0}
    weights |= {"share": rng.choice((2.0, 0.25)), "like": rng.choice((0.5, 0.0)), "hide": 0.0}
    gains = {"like": 0.1, "comment": rng.choice((0.3, -0.4)), "share": 0.5, "hide": rng.choice((-1.0, -0.2))}
    affinity = {
        "stranger": rng.choice((0.0, 0.02, 0.02, 0.5, 1.5)),
        "follow": rng.choice((1.0, 0.3)),
        "friend": rng.choice((2.0, 2.0, 0.7)),
        "ceiling": rng.choice((10.0, 2.25, 0.9)),
        "half_life": rng.choice(BANK),
        "gain": gains,
    }
    return {
        "name": "allotments",
        "weights": weights,
        "freshness": _curve(rng, curves),
        "affinity": affinity,
        "explore": {"temperature": 0.0},
        "arrange": {"author_gap": 0},
        "seen": {"factor": rng.choice((1.0, 0.5, 0.1, 0.0))},
    }


def random_schedule(rng: Random, events: Sequence[Event]) -> list[list[Event]]:
    """Shuffle events, repeat some, and cut them into batches of any size."""
    arrivals = list(events)
    if arrivals:
        arrivals += [rng.choice(arrivals) for _ in range(rng.randint(0, max(1, len(arrivals) // 4)))]
    rng.shuffle(arrivals)
    batches = []
    while arrivals:
        size = rng.choice((1, 1, 2, 3, 7, len(arrivals)))
        batches.append(arrivals[:size])
        arrivals = arrivals[size:]
    return batches


def _randoms() -> st.SearchStrategy[Random]:
    return st.randoms(use_true_random=False)


def policies(curves: str = "bank") -> st.SearchStrategy[dict[str, Any]]:
    """Draw policy documents with freshness curves as in `random_policy`."""
    return _randoms().map(lambda rng: random_policy(rng, curves))


@st.composite
def worlds(draw: st.DrawFn, max_events: int = 60, curves: str = "bank") -> World:
    """Draw worlds of 3 to 8 people; a failing one shrinks by losing events."""
    rng = draw(_randoms())
    cast = _cast(rng, draw(st.integers(3, 8)), draw(st.integers(1, 10)), NOW_MS)
    made = _groundwork(rng, cast)
    for each in draw(st.lists(_randoms(), max_size=max_events)):
        made.append(_event(each, cast, made, TYPE_SHARES))
    return World(draw(policies(curves)), made, cast.people, tuple(cast.authors))


def schedules(events: Sequence[Event]) -> st.SearchStrategy[list[list[Event]]]:
    """Draw ways in which the same events may arrive: order, repeats and batches."""
    return _randoms().map(lambda rng: random_schedule(rng, events))
