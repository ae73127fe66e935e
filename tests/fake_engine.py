"""A small engine in memory, enough to test the HTTP edge: it keeps events and ranks nothing."""

from collections.abc import Sequence
from typing import Any

from scoring.policy import PolicyError, parse_policy
from service.errors import NotFound, PolicyRefused, UnknownPolicy
from service.events.model import AnyEvent, PostEvent
from service.feed.types import (
    CrowdPart,
    ExplainRequest,
    Explanation,
    Factor,
    FeedAnswer,
    FeedItem,
    FeedRequest,
    PolicyInfo,
    PopularAnswer,
    PopularRequest,
    TiePart,
)
from service.store.verdict import APPLIED, DUPLICATE, EXPIRED, Verdict

RETENTION_MS = 30 * 86_400_000
AHEAD_MS = 300_000
KNOWN_KINDS = ("comment", "like", "share")


class FakeEngine:
    """Answers as an engine would; `failure` is raised by every call, `asked` keeps what came in."""

    def __init__(self) -> None:
        self.events: dict[str, AnyEvent] = {}
        self.asked: list[Any] = []
        self.failure: Exception | None = None
        self.running = False

    async def start(self) -> None:
        """Note that it runs."""
        self.running = True

    async def close(self) -> None:
        """Note that it does not run."""
        self.running = False

    async def ping(self) -> None:
        """Fail where it is told to."""
        self._fail()

    async def apply(self, events: Sequence[AnyEvent], now_ms: int) -> list[Verdict]:
        """Keep each valid event once."""
        self._fail()
        return [self._verdict(event, now_ms) for event in events]

    async def feed(self, request: FeedRequest, now_ms: int, arrived_s: float) -> FeedAnswer:
        """List the posts, newest first."""
        self._ask(request, now_ms, arrived_s)
        self._known(request.policy)
        posts = [event for event in self.events.values() if isinstance(event, PostEvent)]
        items = [
            FeedItem(post.post, post.actor, post.form, post.at, None if request.order == "newest" else 3.0)
            for post in sorted(posts, key=lambda post: -post.at)[: request.k]
        ]
        at_ms = request.as_of_ms or now_ms
        stages_ms = {"state": 0.25, "rank": 1.5}
        return FeedAnswer(request.reader, at_ms, "allotments", True, items, None, stages_ms)

    async def popular(self, request: PopularRequest, now_ms: int, arrived_s: float) -> PopularAnswer:
        """List the posts, newest first."""
        self._ask(request, now_ms, arrived_s)
        self._known(request.policy)
        posts = [event for event in self.events.values() if isinstance(event, PostEvent)]
        items = [FeedItem(post.post, post.actor, post.form, post.at, 3.0) for post in posts[: request.k]]
        return PopularAnswer(request.as_of_ms or now_ms, "allotments", True, items, {"reader": 0.25})

    async def exposures(self, after: str, count: int) -> list[dict[str, Any]]:
        """Give one entry."""
        self._ask((after, count), 0, 0.0)
        return [{"id": "1-1", "reader": "joel"}]

    async def explain(self, request: ExplainRequest, now_ms: int) -> Explanation:
        """Give the same parts for every post."""
        self._ask(request, now_ms, 0.0)
        post = next((e for e in self.events.values() if isinstance(e, PostEvent) and e.post == request.post), None)
        if post is None:
            raise NotFound("no such post, or not for this reader")
        tie = TiePart(post.actor, f"post.{post.form}", post.at, 1.0, 3.0, 0.5, 1.5)
        crowd = CrowdPart(0.02, 12.1, 0.242)
        at_ms = request.as_of_ms or now_ms
        factors = [Factor("seen", 1.0)]
        return Explanation(request.reader, post.post, at_ms, "allotments", 1.742, factors, [tie], crowd)

    async def export(self, person: str, now_ms: int) -> dict[str, Any]:
        """List the ids of the person's events."""
        self._ask(person, now_ms, 0.0)
        own = [event.id for event in self.events.values() if event.actor == person]
        return {"person": person, "events": own}

    async def policies(self) -> list[PolicyInfo]:
        """List the one policy."""
        self._fail()
        return [PolicyInfo("allotments", "", exact=True, error=0.0, default=True, settings={})]

    async def put_policy(self, name: str, toml_text: str) -> PolicyInfo:
        """Parse a policy and keep none."""
        self._fail()
        try:
            policy = parse_policy(toml_text)
        except PolicyError as error:
            raise PolicyRefused(name, str(error), error.line, error.field, error.problems) from error
        return PolicyInfo(policy.name, toml_text, exact=True, error=0.0, default=False, settings={})

    def _fail(self) -> None:
        if self.failure is not None:
            raise self.failure

    def _ask(self, request: Any, now_ms: int, arrived_s: float) -> None:
        self._fail()
        self.asked.append((request, now_ms, arrived_s))

    def _known(self, policy: str | None) -> None:
        if policy not in {None, "allotments"}:
            raise UnknownPolicy(str(policy), ["allotments"])

    def _verdict(self, event: AnyEvent, now_ms: int) -> Verdict:
        if event.at > now_ms + AHEAD_MS:
            return Verdict("rejected", "at lies more than 5 minutes ahead")
        if event.at < now_ms - RETENTION_MS:
            return EXPIRED
        if event.type == "interaction" and event.kind.partition(".")[0] not in KNOWN_KINDS:
            return Verdict("rejected", f"kind {event.kind!r} is not known; known: {', '.join(KNOWN_KINDS)}")
        if event.id in self.events:
            return DUPLICATE
        self.events[event.id] = event
        return APPLIED
