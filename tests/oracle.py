"""The contract by brute force: every answer is recomputed from a set of events with dicts and loops.

Nothing here is fast, and nothing here is shared with the program under test.
"""

import math
import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Literal

Event = dict[str, Any]
Policy = Mapping[str, Any]
Ranking = Sequence[tuple[str, float | None]]

DAY_MS = 86_400_000
RETENTION_MS = 30 * DAY_MS
AHEAD_MS = 5 * 60_000
UNITS_MS = {"ms": 1, "s": 1_000, "m": 60_000, "h": 3_600_000, "d": DAY_MS}
ERASABLE = {"post", "interaction", "tie", "retract", "seen"}
FOLLOWING = {"follow", "friend"}
HIDING = {"mute", "block"}
TIE_REL = 1e-10


def duration_ms(text: str) -> float:
    """Read a duration such as `"12h"`.

    >>> duration_ms("12h")
    43200000.0
    """
    match = re.fullmatch(r"(\d+(?:\.\d+)?)(ms|s|m|h|d)", text)
    assert match, text
    return float(match[1]) * UNITS_MS[match[2]]


def look_up(kind: str, table: Mapping[str, float]) -> float | None:
    """Find a kind in a table, falling back step by step to the part before the last dot.

    >>> look_up("comment.photo.close", {"comment": 1.0})
    1.0
    """
    while kind not in table:
        if "." not in kind:
            return None
        kind = kind.rsplit(".", 1)[0]
    return float(table[kind])


def stands_after(event: Event) -> tuple[int, bytes]:
    """Order events so that the last one is the one that stands: latest time, then greatest id by bytes."""
    return event["at"], event["id"].encode()


@dataclass(frozen=True)
class Post:
    """A post as its surviving events make it; `created_ms` in Unix milliseconds."""

    author: str
    created_ms: int
    form: str
    audience: str
    topics: tuple[str, ...] = ()


@dataclass(frozen=True)
class Edge:
    """One fact that counts for a post; `at_ms` in Unix milliseconds."""

    post: str
    actor: str
    kind: str
    at_ms: int


class Oracle:
    """Scores, eligibility and order over one set of accepted events under one policy.

    Args:
        accepted: Distinct events that passed `from_events`.
        policy: The policy document as a dict, durations as text.
    """

    def __init__(self, accepted: Sequence[Event], policy: Policy) -> None:
        self.accepted = list(accepted)
        self.policy = policy
        self.verdicts: list[str] = []
        self.erased_at = _latest_erase(self.accepted)
        self.standing = [event for event in self.accepted if not self._erased(event)]
        self.withdrawn = {event["post"] for event in self.accepted if event["type"] == "withdraw"}
        self.posts = _posts(self.standing)
        self.relations = _relations(self.standing)
        self.interactions = _interactions(self.standing)
        self.edges = _creation_edges(self.posts) + self.interactions

    @classmethod
    def from_events(
        cls, events: Iterable[Event], now_ms: int, retention_ms: int = RETENTION_MS, *, policy: Policy
    ) -> "Oracle":
        """Take events in order of arrival, repeats and all, as they would be answered at `now_ms`.

        Only one answer depends on the order: a post belongs to whoever's post event came first.
        `verdicts` holds one outcome per event.
        """
        accepted: dict[str, Event] = {}
        authors: dict[str, str] = {}
        verdicts = []
        window_ms = (now_ms - retention_ms, now_ms + AHEAD_MS)
        for event in events:
            outcome = _outcome(event, accepted, authors, policy, window_ms)
            verdicts.append(outcome)
            if outcome == "applied":
                accepted[event["id"]] = event
        oracle = cls(list(accepted.values()), policy)
        oracle.verdicts = verdicts
        return oracle

    def with_policy(self, policy: Policy) -> "Oracle":
        """Rank the same accepted events under another policy."""
        return Oracle(self.accepted, policy)

    def _erased(self, event: Event) -> bool:
        if event["type"] not in ERASABLE:
            return False
        names = [event["actor"]] + ([event["target"]] if event["type"] == "tie" else [])
        return any(name in self.erased_at and event["at"] <= self.erased_at[name] for name in names)

    def relation(self, person: str, other: str) -> str:
        """Return what `person` last declared about `other`, `none` where nothing stands."""
        return self.relations.get((person, other), "none")

    def follows(self, reader: str, other: str) -> bool:
        """Say whether the reader follows or befriended another person."""
        return reader != other and self.relation(reader, other) in FOLLOWING

    def _interactions_with(self, reader: str, person: str) -> list[Edge]:
        """List the reader's interactions with posts by a person that count in affinity."""
        found = []
        for edge in self.interactions:
            post = self.posts.get(edge.post)
            if edge.actor == reader and post is not None and post.author == person:
                erased = self.erased_at.get(person)
                if erased is None or edge.at_ms > erased:
                    found.append(edge)
        return found

    def affinity(self, reader: str, person: str, t_ms: int) -> float:
        """Return how much the reader cares about a person at a time."""
        rule = self.policy["affinity"]
        relation = self.relation(reader, person)
        if reader == person or relation in HIDING:
            return 0.0
        total = float(rule[relation if relation in FOLLOWING else "stranger"])
        for edge in self._interactions_with(reader, person):
            gain = look_up(edge.kind, rule.get("gain", {})) or 0.0
            age_ms = max(0, t_ms - edge.at_ms)
            total += gain * 2.0 ** (-age_ms / duration_ms(rule["half_life"]))
        return min(float(rule["ceiling"]), max(0.0, total))

    def weight(self, kind: str) -> float:
        """Return the weight of a kind, 0 where the policy does not know it."""
        return look_up(kind, self.policy["weights"]) or 0.0

    def freshness(self, age_ms: float) -> float:
        """Return what is left of an edge at an age; ages below 0 count as 0."""
        rule = self.policy["freshness"]
        age_ms = max(0.0, age_ms)
        if rule["curve"] == "half_life":
            return float(2.0 ** (-age_ms / duration_ms(rule["half_life"])))
        return float((1.0 + age_ms / duration_ms(rule["scale"])) ** -float(rule["exponent"]))

    def _product(self, reader: str, edge: Edge, t_ms: int) -> float:
        fresh = self.freshness(t_ms - edge.at_ms)
        return self.affinity(reader, edge.actor, t_ms) * self.weight(edge.kind) * fresh

    def seen_factor(self, reader: str, post: str) -> float:
        """Return the seen factor where the reader saw the post and no tie added a newer edge, else 1."""
        seen = [e["at"] for e in self.standing if e["type"] == "seen" and e["actor"] == reader and post in e["posts"]]
        if not seen:
            return 1.0
        for edge in self.edges:
            if edge.post == post and edge.at_ms > max(seen) and self.follows(reader, edge.actor):
                return 1.0
        return float(self.policy.get("seen", {}).get("factor", 1.0))

    def hidden(self, reader: str, post: str) -> bool:
        """Say whether the reader did something with a post whose gain is negative, and has not taken it back."""
        gains = self.policy["affinity"].get("gain", {})
        return any(
            (look_up(edge.kind, gains) or 0.0) < 0.0
            for edge in self.interactions
            if edge.actor == reader and edge.post == post
        )

    def score(self, reader: str, post: str, t_ms: int) -> float:
        """Return the score of a post for a reader at a time, the factors of seen and of hidden posts included."""
        if self.hidden(reader, post):
            return 0.0
        products = [self._product(reader, edge, t_ms) for edge in self.edges if edge.post == post]
        return self.seen_factor(reader, post) * math.fsum(products)

    def parts(self, reader: str, post: str, t_ms: int) -> list[dict[str, Any]]:
        """Split a score before its factors: one part per edge by someone known, then the crowd's.

        `source` is `tie`, `interaction` (no tie, but an interaction), `self` or `crowd`.
        """
        parts: list[dict[str, Any]] = []
        crowd = []
        for edge in self.edges:
            if edge.post != post:
                continue
            source = self._source(reader, edge.actor)
            weight, fresh = self.weight(edge.kind), self.freshness(t_ms - edge.at_ms)
            if source == "crowd":
                crowd.append(weight * fresh)
                continue
            part = {"source": source, "actor": edge.actor, "kind": edge.kind, "at": edge.at_ms}
            affinity = self.affinity(reader, edge.actor, t_ms)
            numbers = {"affinity": affinity, "weight": weight, "freshness": fresh}
            parts.append(part | numbers | {"product": affinity * weight * fresh})
        rule = self.policy["affinity"]
        stranger = min(float(rule["ceiling"]), max(0.0, float(rule["stranger"])))
        total = math.fsum(crowd)
        parts.append({"source": "crowd", "affinity": stranger, "sum": total, "product": stranger * total})
        return parts

    def _source(self, reader: str, actor: str) -> str:
        if actor == reader:
            return "self"
        if self.relation(reader, actor) != "none":
            return "tie"
        return "interaction" if self._interactions_with(reader, actor) else "crowd"

    def visible(self, reader: str, post_id: str) -> bool:
        """Say whether the reader may see a post at all."""
        post = self.posts.get(post_id)
        if post is None or post_id in self.withdrawn or post.author == reader:
            return False
        if self.relation(reader, post.author) in HIDING or self.relation(post.author, reader) == "block":
            return False
        if post.audience == "followers":
            return self.follows(reader, post.author)
        if post.audience == "friends":
            return self.relation(post.author, reader) == "friend"
        return post.audience == "everyone"

    def eligible(self, reader: str, post: str) -> bool:
        """Say whether a post may stand in the reader's feed."""
        by_ties = [edge for edge in self.edges if edge.post == post and self.follows(reader, edge.actor)]
        return bool(by_ties) and self.visible(reader, post)

    def feed(
        self, reader: str, k: int | None, t_ms: int, order: Literal["ranked", "newest"] = "ranked"
    ) -> list[tuple[str, float | None]]:
        """Return the reader's best `k` posts with their scores, all of them where `k` is None.

        In order `newest` there are no scores.
        """
        eligible = [post for post in self.posts if self.eligible(reader, post)]
        if order == "ranked":
            eligible = [post for post in eligible if not self.hidden(reader, post)]
        scores: dict[str, float | None] = dict.fromkeys(sorted(eligible, key=self._newest_first))
        if order == "ranked":
            scores = dict(self._ranked({post: self.score(reader, post, t_ms) for post in scores}))
        return list(scores.items())[:k]

    def popular(self, t_ms: int, reader: str | None = None) -> list[tuple[str, float]]:
        """Return the posts for everyone by the sum over all their edges, without those the reader may not see."""
        sums = {
            post: math.fsum(
                self.weight(edge.kind) * self.freshness(t_ms - edge.at_ms) for edge in self.edges if edge.post == post
            )
            for post, held in self.posts.items()
            if held.audience == "everyone" and post not in self.withdrawn
            if reader is None or self.visible(reader, post)
        }
        return self._ranked(sums)

    def beyond(self, reader: str, t_ms: int) -> list[tuple[str, float]]:
        """Return the posts for everyone that no tie of the reader has an edge on, by score."""
        chosen = [
            post
            for post, held in self.posts.items()
            if held.audience == "everyone" and self.visible(reader, post) and not self.hidden(reader, post)
            if not self.eligible(reader, post)
        ]
        return self._ranked({post: self.score(reader, post, t_ms) for post in chosen})

    def _newest_first(self, post: str) -> tuple[int, bytes]:
        return -self.posts[post].created_ms, post.encode()

    def _ranked(self, scores: Mapping[str, float]) -> list[tuple[str, float]]:
        """Order by score; scores equal to ten digits are a tie, and the newest post goes first."""
        ranked: list[str] = []
        tied: list[str] = []
        for post in sorted(scores, key=lambda each: -scores[each]):
            if tied and not math.isclose(scores[tied[0]], scores[post], rel_tol=TIE_REL):
                ranked += sorted(tied, key=self._newest_first)
                tied = []
            tied.append(post)
        ranked += sorted(tied, key=self._newest_first)
        return [(post, scores[post]) for post in ranked]


def _outcome(
    event: Event, accepted: Mapping[str, Event], authors: dict[str, str], policy: Policy, window_ms: tuple[int, int]
) -> str:
    oldest_ms, latest_ms = window_ms
    if event["id"] in accepted:
        return "duplicate"
    if event["at"] > latest_ms or not _known(event, policy):
        return "rejected"
    if event["at"] < oldest_ms:
        return "expired"
    if event["type"] == "post" and authors.setdefault(event["post"], event["actor"]) != event["actor"]:
        return "rejected"
    return "applied"


def _known(event: Event, policy: Policy) -> bool:
    kinds = {"post": f"post.{event.get('form')}", "interaction": event.get("kind")}
    kind = kinds.get(event["type"])
    return kind is None or look_up(kind, policy["weights"]) is not None


def _latest_erase(events: Iterable[Event]) -> dict[str, int]:
    latest: dict[str, int] = {}
    for event in events:
        if event["type"] == "erase":
            latest[event["actor"]] = max(event["at"], latest.get(event["actor"], event["at"]))
    return latest


def _posts(events: Iterable[Event]) -> dict[str, Post]:
    by_post: dict[str, list[Event]] = {}
    for event in events:
        if event["type"] == "post":
            by_post.setdefault(event["post"], []).append(event)
    posts = {}
    for post, versions in by_post.items():
        last = max(versions, key=stands_after)
        created_ms = min(event["at"] for event in versions)
        audience, topics = last.get("audience", "everyone"), tuple(last.get("topics", ()))
        posts[post] = Post(last["actor"], created_ms, last["form"], audience, topics)
    return posts


def _relations(events: Iterable[Event]) -> dict[tuple[str, str], str]:
    ties = [event for event in events if event["type"] == "tie"]
    return {(tie["actor"], tie["target"]): tie["relation"] for tie in sorted(ties, key=stands_after)}


def _creation_edges(posts: Mapping[str, Post]) -> list[Edge]:
    return [Edge(name, post.author, f"post.{post.form}", post.created_ms) for name, post in posts.items()]


def _interactions(events: Sequence[Event]) -> list[Edge]:
    taken_back = {(event["actor"], event["event"]) for event in events if event["type"] == "retract"}
    return [
        Edge(event["post"], event["actor"], event["kind"], event["at"])
        for event in events
        if event["type"] == "interaction" and (event["actor"], event["id"]) not in taken_back
    ]


def close(left: float | None, right: float | None, rel: float) -> bool:
    """Compare two scores; below 1e-12 they differ by rounding of larger sums only."""
    if left is None or right is None:
        return left is right
    return math.isclose(left, right, rel_tol=rel, abs_tol=1e-12)


def assert_same_feed(expected: Ranking, actual: Ranking, rel: float = 1e-9, *, k: int | None = None) -> None:
    """Check length, set, scores and order; only posts whose scores are equal within `rel` may swap.

    Args:
        expected: The whole ranking where `k` is given, else exactly the posts due.
        actual: The ranking under test.
        rel: Largest relative difference of scores that are equal.
        k: Compare the first `k` only; equal scores may then also swap across the end.

    Orders without scores must agree exactly.
    """
    known = dict(expected)
    due_count = len(expected) if k is None else min(k, len(expected))
    assert len(actual) == due_count, f"{len(actual)} posts where {due_count} are due: {actual}, expected {expected}"
    assert len(dict(actual)) == len(actual), f"a post stands twice: {actual}"
    for place, ((post, score), (due, due_score)) in enumerate(zip(actual, expected, strict=False)):
        at = f"place {place}: {post!r} {score!r}, expected {due!r} {due_score!r}"
        assert post in known, f"not due at {at}"
        assert close(known[post], score, rel), f"its score is {known[post]!r} at {at}"
        assert post == due or (score is not None and close(due_score, score, rel)), f"out of order at {at}"


def assert_tie_order(expected: Ranking, actual: Ranking) -> None:
    """Check that exactly equal expected scores, clear of all others, stand in exactly the expected order."""
    groups: dict[float, list[str]] = {}
    for post, score in expected:
        if score is not None:
            groups.setdefault(score, []).append(post)
    place = {post: index for index, (post, _) in enumerate(actual)}
    for score, tied in groups.items():
        clear = not any(other != score and close(other, score, 1e-9) for other in groups)
        shown = [place[post] for post in tied if post in place]
        assert not clear or shown == sorted(shown), f"{tied} all score {score!r} but stand at {shown}"
