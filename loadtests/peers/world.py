"""The reference world as each way of ranking needs it: loaded into waxwane, and as plain columns."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from loadtests.reference import READER, Shape, events
from scoring.bank import DEFAULT_BANK
from scoring.policy import Policy, parse_policy
from service.engine import Engine
from service.events.model import parse_event
from service.settings import BUILT_IN_POLICY
from service.store.store import DAY_MS, StoreOptions

BATCH = 500
TOP = 64
POLICY = BUILT_IN_POLICY.read_text()


@dataclass(frozen=True)
class Columns:
    """Every edge of a world, and the reader's ties; people and posts are numbered.

    Attributes:
        person: who made each edge, shape (n,).
        post: on what, shape (n,).
        weight: the policy's for its kind, shape (n,).
        at_ms: when, Unix milliseconds, shape (n,).
        affinity: the reader's to each person, 0.0 where there is no tie, shape (people,).
        people: name of each person.
        posts: name of each post.
        policy: the policy all ways rank by.
        t_ms: the time they rank at, Unix milliseconds.
    """

    person: NDArray[np.intp]
    post: NDArray[np.intp]
    weight: NDArray[np.float64]
    at_ms: NDArray[np.float64]
    affinity: NDArray[np.float64]
    people: list[str]
    posts: list[str]
    policy: Policy
    t_ms: int

    @property
    def stranger(self) -> float:
        """Affinity of the crowd."""
        return self.policy.affinity.crowd

    def value(self) -> NDArray[np.float64]:
        """Return weight times freshness of each edge, shape (n,)."""
        return self.weight * self.policy.curve.freshness(self.t_ms - self.at_ms)

    def crowd(self) -> NDArray[np.float64]:
        """Return the sum over every edge of each post, shape (posts,)."""
        return np.bincount(self.post, self.value(), len(self.posts))

    def tied(self) -> NDArray[np.intp]:
        """Return the numbers of the reader's ties."""
        return np.flatnonzero(self.affinity)


def columns(shape: Shape, t_ms: int) -> Columns:
    """Read a world's events into columns."""
    policy = parse_policy(POLICY)
    rule = policy.affinity
    bases = {"follow": rule.follow, "friend": rule.friend}
    people: dict[str, int] = {}
    posts: dict[str, int] = {}
    edges: list[tuple[int, int, str, int]] = []
    ties: dict[int, float] = {}
    for event in events(shape, t_ms):
        if event["type"] == "tie":
            ties[people.setdefault(event["target"], len(people))] = bases[event["relation"]]
            continue
        kind = event["kind"] if event["type"] == "interaction" else f"post.{event['form']}"
        actor = people.setdefault(event["actor"], len(people))
        edges.append((actor, posts.setdefault(event["post"], len(posts)), kind, event["at"]))
    person, post, kinds, at_ms = zip(*edges, strict=True)
    known = sorted(set(kinds))
    weights = dict(zip(known, policy.weights_for(known).tolist(), strict=True))
    affinity = np.zeros(len(people))
    affinity[list(ties)] = list(ties.values())
    return Columns(
        np.array(person),
        np.array(post),
        np.array([weights[kind] for kind in kinds]),
        np.array(at_ms, dtype=np.float64),
        affinity,
        list(people),
        list(posts),
        policy,
        t_ms,
    )


async def started(url: str, *, cache_bytes: int = 64 << 20) -> Engine:
    """Start an engine without background work."""
    engine = Engine(StoreOptions(url, DEFAULT_BANK, 30 * DAY_MS, read_timeout_s=5.0), [POLICY], cache_bytes=cache_bytes)
    await engine.start(background=False)
    return engine


async def load(engine: Engine, happenings: Sequence[dict[str, Any]], now_ms: int) -> None:
    """Send events to an engine, as a caller would over HTTP."""
    for at in range(0, len(happenings), BATCH):
        verdicts = await engine.apply([parse_event(event) for event in happenings[at : at + BATCH]], now_ms)
        if any(verdict.outcome != "applied" for verdict in verdicts):
            raise SystemExit("an event of the reference world was not applied")


__all__ = ["READER", "TOP", "Columns", "Shape", "columns", "load", "started"]
