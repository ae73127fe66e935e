"""What counts most for everybody: the crowd board, judged post by post."""

import numpy as np

from scoring.affinity import Circle
from scoring.gathering import Bounds, Gathering, Reader
from service.feed.beyond import outsider
from service.feed.board import CrowdBound
from service.feed.deadline import Deadline
from service.feed.policies import PolicyBook, PreparedPolicy
from service.feed.ranker import Ranker
from service.feed.shortlist import Found, Shortlister
from service.feed.types import FeedItem, PopularAnswer, PopularRequest
from service.store.records import read_item
from service.store.store import Store

_EMPTY = Circle(np.empty(0, np.uint64), np.empty(0, np.uint8), np.empty(0))


class Popular:
    """Ranks what is popular.

    Only posts that everyone may see, and none that the reader, where one is given, may not. The sums are those of the
    policy: by its weights and its curve, over every edge, whoever made it.

    Args:
        store: the state behind all feeds; started.
        policies: the loaded policies.
        ranker: reads, and knows readers.

    """

    def __init__(self, store: Store, policies: PolicyBook, ranker: Ranker) -> None:
        self._store = store
        self._policies = policies
        self._ranker = ranker

    async def popular(self, request: PopularRequest, now_ms: int, deadline: Deadline) -> PopularAnswer:
        """Rank the most popular posts.

        Args:
            request: what is asked for.
            now_ms: now, Unix milliseconds.
            deadline: ends the work.

        Raises:
            UnknownPolicy: the policy is not loaded.
            StoreUnavailable: the store does not answer.

        """
        return await self._ranker.with_all_kinds(lambda: self._popular(request, now_ms, deadline))

    async def _popular(self, request: PopularRequest, now_ms: int, deadline: Deadline) -> PopularAnswer:
        t_ms = now_ms if request.as_of_ms is None else max(request.as_of_ms, now_ms)
        name = request.policy or self._policies.default
        prepared = self._policies.prepared(name, self._store.kinds.names)
        reader = await self._reader(request)
        deadline.stage("reader")
        crowd = await self._ranker.reads.crowd(prepared.board, t_ms, now_ms)
        shortlister = self._shortlister(prepared, crowd, reader, deadline, t_ms)
        shortlist = await shortlister.best(request.k)
        deadline.stage("shortlist")
        return PopularAnswer(
            as_of_ms=t_ms,
            policy=name,
            complete=_certain(shortlist.found, shortlist.certain, request.k, crowd, exhausted=shortlist.exhausted),
            items=[_item(one) for one in shortlist.found],
            stages_ms=deadline.stages_ms,
        )

    async def _reader(self, request: PopularRequest) -> Reader:
        if request.reader is None:
            await self._ranker.reads.begin()
            return Reader(0, _EMPTY, b"", request.forms, request.topics)
        readers, hash_of = self._ranker.readers, self._store.hasher.hash
        state = await readers.load(request.reader, hash_of(request.reader), profile=False)
        return outsider(state, request.forms, request.topics)

    def _shortlister(
        self, prepared: PreparedPolicy, crowd: CrowdBound, reader: Reader, deadline: Deadline, t_ms: int
    ) -> Shortlister:
        gathering = Gathering(prepared.ranking, t_ms, stranger=1.0)
        gathering.insert(crowd.post)
        nothing, never = np.empty(0, np.uint64), np.empty(0)
        gathering.bound(Bounds(crowd.others, crowd.post, crowd.bound, nothing, never))
        return Shortlister(self._ranker.reads, reader, gathering, deadline)


def _certain(found: list[Found], certain: int, k: int, crowd: CrowdBound, *, exhausted: bool) -> bool:
    """Say whether no post, listed or not, could stand among the found."""
    if len(found) < k:
        return exhausted and crowd.others <= 0.0
    return certain >= k and crowd.others * (1.0 + 1e-9) < found[k - 1].order


def _item(one: Found) -> FeedItem:
    post, author, form, posted_ms = read_item(one.value)
    return FeedItem(post, author, form, posted_ms, one.score)
