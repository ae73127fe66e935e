"""One read of a feed, while it is under way."""

from dataclasses import dataclass, field

from scoring.gathering import Bounds, Gathering
from service.feed.board import CrowdBound
from service.feed.deadline import Deadline
from service.feed.exposure import Pool
from service.feed.pages import Session
from service.feed.shortlist import Found
from service.feed.types import FeedRequest
from service.feed.view import View


@dataclass(slots=True)
class Chosen:
    """What a page is made of.

    Attributes:
        found: its posts, in their order.
        certain: whether they are certainly the exact ones.
        more: whether further pages may follow.
        pools: what they were drawn from, by source, where that is logged.
        brought: hashes of those that ties brought, None where all are.

    """

    found: list[Found]
    certain: bool
    more: bool
    pools: dict[str, Pool] = field(default_factory=dict)
    brought: set[bytes] | None = None

    def put_in_order(self, again: list[bytes]) -> None:
        """Give a page that was served before the order it had."""
        places = {post: place for place, post in enumerate(again)}
        self.found.sort(key=lambda one: places[one.hash])
        self.more = True


@dataclass(frozen=True, slots=True)
class Reading:
    """A read.

    Attributes:
        request: what is asked for.
        session: of all its pages.
        view: what the feed is ranked from.
        gathering: the candidates.
        deadline: ends the work.
        before: hashes of what the pages before have served.
        again: hashes of what this page has served, where it was served before.

    """

    request: FeedRequest
    session: Session
    view: View
    gathering: Gathering
    deadline: Deadline
    before: list[bytes]
    again: list[bytes]

    @property
    def temperature(self) -> float:
        """The temperature of this read's randomness."""
        return self.view.ranking.policy.temperature if self.session.explore else 0.0

    def set_bounds(self, crowd: CrowdBound) -> None:
        """Bound what the candidates stand in order by."""
        reader = self.view.reader
        self.gathering.bound(
            Bounds(
                others=crowd.others,
                post=crowd.post,
                crowd=crowd.bound,
                seen_post=reader.seen_post,
                seen_ms=reader.seen_ms,
                factor=self.view.ranking.policy.seen_factor,
                seed=self.session.seed,
                temperature=self.temperature,
            )
        )

    def narrow(self) -> None:
        """Leave out what the pages before have served, and what is hidden; of a page again, all but its own."""
        if self.again:
            self.gathering.only(self.again)
        elif self.before:
            self.gathering.without(self.before)
        hidden = self.view.reader.hidden(self.view.ranking)
        if len(hidden) and self.session.order == "ranked":
            self.gathering.without([hidden.tobytes()])
