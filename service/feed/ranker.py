"""A feed read: the reader's state, the circle's rows, the reduction, the look-ups, the page."""

from collections.abc import Awaitable, Callable
from dataclasses import dataclass
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from scoring.affinity import Circle, Dealings, circle
from scoring.arrange import keep_apart
from scoring.edges import EdgeRows, erasures, live
from scoring.noise import multipliers
from scoring.ranking import Ranking, UnknownCodeError
from scoring.reduce import Candidates, places_in, reduce_edges
from service.feed.cache import WorkerCache
from service.feed.deadline import Deadline
from service.feed.pages import CursorBook, Session, new_session
from service.feed.policies import PolicyBook, PreparedPolicy
from service.feed.readers import ReaderState, hash_number, load_reader, load_rows
from service.feed.reads import Reads
from service.feed.shortlist import Found, Shortlist, Shortlister
from service.feed.types import FeedAnswer, FeedItem, FeedRequest
from service.feed.visible import Gate
from service.store.store import Store

Answer = TypeVar("Answer")


@dataclass(frozen=True, slots=True)
class View:
    """All that a reader's feed is ranked from.

    `whole` is False where the deadline passed before all rows were fetched.
    """

    reader: ReaderState
    circle: Circle
    edges: EdgeRows
    prepared: PreparedPolicy
    whole: bool

    @property
    def ranking(self) -> Ranking:
        """The compiled policy."""
        return self.prepared.ranking


class Ranker:
    """Ranks feeds.

    Args:
        store: the state behind all feeds; started.
        policies: the loaded policies.
        cache: what this worker remembers between reads.
        budget_ms: time that a ranking may take where the request says nothing, milliseconds.

    """

    def __init__(self, store: Store, policies: PolicyBook, cache: WorkerCache, budget_ms: float) -> None:
        self._store = store
        self._policies = policies
        self._budget_ms = budget_ms
        self.reads = Reads(store.connection, cache)
        self._cursors = CursorBook(store.connection, store.meta[b"hash_key"])

    async def feed(self, request: FeedRequest, now_ms: int, arrived_s: float) -> FeedAnswer:
        """Rank one page.

        Args:
            request: what is asked for.
            now_ms: now, Unix milliseconds.
            arrived_s: `time.perf_counter()` when the request arrived.

        Raises:
            UnknownPolicy: the policy is not loaded.
            CursorInvalid: the cursor is not one of this feed.
            CursorExpired: the cursor's pages are no longer kept.
            StoreUnavailable: the store does not answer.

        """
        deadline = Deadline(request.budget_ms or self._budget_ms, arrived_s)
        session, served = await self._session(request, now_ms)
        return await self.with_all_kinds(lambda: self._page(request, session, served, deadline))

    async def with_all_kinds(self, read: Callable[[], Awaitable[Answer]]) -> Answer:
        """Read, and once more where another worker has registered a kind meanwhile."""
        try:
            return await read()
        except UnknownCodeError:
            await self._store.kinds.refresh()
            return await read()

    async def _page(
        self, request: FeedRequest, session: Session, served: list[bytes], deadline: Deadline
    ) -> FeedAnswer:
        profile = session.order == "ranked"
        view = await self.view(request.reader, session.policy, session.as_of_ms, deadline, profile=profile)
        candidates = reduce_edges(view.edges, view.circle, view.ranking, session.as_of_ms)
        deadline.stage("reduce")
        before, again = served[: session.offset], served[session.offset : session.offset + request.k]
        candidates = _narrowed(candidates, before, again)
        chosen, certain, more = await self._choose(request, session, view, candidates, before, deadline)
        if again:
            places = {post: place for place, post in enumerate(again)}
            chosen.sort(key=lambda one: places[one.hash])
            more = True
        deadline.stage("shortlist")
        cursor = await self._next(request, session, served, again or [one.hash for one in chosen], more=more)
        return FeedAnswer(
            reader=request.reader,
            as_of_ms=session.as_of_ms,
            policy=session.policy,
            complete=certain and view.whole,
            items=[_item(one, session) for one in chosen],
            next=cursor,
            stages_ms=deadline.stages_ms,
        )

    async def view(self, reader: str, policy: str, t_ms: int, deadline: Deadline, *, profile: bool) -> View:
        """Gather what a reader's feed is ranked from.

        Args:
            reader: the reader's id.
            policy: name of a loaded policy.
            t_ms: the time of the feed, Unix milliseconds.
            deadline: ends the fetching of rows.
            profile: False leaves out what the reader did.

        Raises:
            UnknownPolicy: the policy is not loaded.
            StoreUnavailable: the store does not answer.

        """
        state = await load_reader(self.reads, reader, self._store.hasher.hash(reader), profile=profile)
        deadline.stage("reader")
        prepared = self._policies.prepared(policy, self._store.kinds.names)
        known = _circle(state, state.dealings, prepared.ranking, t_ms)
        rows, whole = await load_rows(self.reads, known, deadline)
        deadline.stage("rows")
        edges = live(rows)
        erased = {int(known.person[row]): until_ms for row, until_ms in erasures(rows).items()}
        erased.pop(hash_number(state.hash), None)
        if erased and np.isin(state.dealings.author, list(erased)).any():
            dealings = await self._without_erased(state, erased)
            known = _circle(state, dealings, prepared.ranking, t_ms, keep=known)
        return View(state, known, edges, prepared, whole)

    async def _session(self, request: FeedRequest, now_ms: int) -> tuple[Session, list[bytes]]:
        if request.cursor is not None:
            session = self._cursors.read(request)
            return session, await self._cursors.served(session, request.cursor)
        as_of_ms = now_ms if request.as_of_ms is None else max(request.as_of_ms, now_ms)
        return new_session(request, as_of_ms, request.policy or self._policies.default), []

    async def _choose(
        self,
        request: FeedRequest,
        session: Session,
        view: View,
        candidates: Candidates,
        before: list[bytes],
        deadline: Deadline,
    ) -> tuple[list[Found], bool, bool]:
        """Choose a page's posts; say whether they are certain, and whether more may follow."""
        shortlister = Shortlister(self.reads, Gate(view.reader), view.ranking, session.as_of_ms, deadline)
        if session.order == "newest":
            shortlist = await shortlister.newest(candidates)
            more = len(shortlist.found) > request.k or not shortlist.exhausted
            return shortlist.found[: request.k], shortlist.exhausted, more
        factors = _seen_factors(view, candidates)
        temperature = view.ranking.policy.temperature if session.explore else 0.0
        noise = multipliers(session.seed, candidates.post, temperature)
        board = view.prepared.board
        bound = board.bound(*await self.reads.board(board, session.as_of_ms), session.as_of_ms)
        recent = await self._recent_authors(view.ranking.policy.author_gap, before)
        need = request.k
        while True:
            shortlist = await shortlister.best(candidates, factors, noise, bound, need)
            picked = _arrange(shortlist, view.ranking.policy.author_gap, request.k, recent)
            if picked is not None or deadline.passed():
                break
            need *= 2
        certain = picked is not None
        chosen = picked if picked is not None else shortlist.found[: request.k]
        return chosen, certain, len(shortlist.found) > len(chosen) or not shortlist.exhausted

    async def _recent_authors(self, gap: int, before: list[bytes]) -> list[bytes]:
        if not gap or not before:
            return []
        records = await self.reads.posts(before[-gap:])
        return [record.author_hash if record else b"" for record in records]

    async def _next(
        self, request: FeedRequest, session: Session, served: list[bytes], page: list[bytes], *, more: bool
    ) -> str | None:
        """Keep the page and write the cursor of the one after it."""
        if not more:
            return None
        end = session.offset + len(page)
        if end > len(served):
            await self._cursors.keep(session, served[: session.offset] + page)
        return self._cursors.write(session, request.reader, end)

    async def _without_erased(self, state: ReaderState, erased: dict[int, int]) -> Dealings:
        """Leave out dealings with people since erased: those up to then, and those with posts that went."""
        dealings = state.dealings
        until_ms = np.array([erased.get(author, -1) for author in dealings.author.tolist()])
        kept = dealings.time_ms > until_ms
        doubtful = np.flatnonzero(kept & (until_ms >= 0))
        posts = [int(state.dealt_post[at]).to_bytes(8, "little") for at in doubtful]
        records = await self.reads.posts(posts)
        for at, record in zip(doubtful, records, strict=True):
            kept[at] = record is not None and hash_number(record.author_hash) == int(dealings.author[at])
        return Dealings(dealings.author[kept], dealings.code[kept], dealings.time_ms[kept])


def _circle(state: ReaderState, dealings: Dealings, ranking: Ranking, t_ms: int, keep: Circle | None = None) -> Circle:
    """Compute the circle; with `keep`, on the same people as an earlier one, so that rows keep their places."""
    known = circle(hash_number(state.hash), state.tie_person, state.tie_relation, dealings, ranking, t_ms)
    if keep is None:
        return known
    affinity = np.full(len(keep.person), ranking.policy.affinity.crowd)
    affinity[np.searchsorted(keep.person, known.person)] = known.affinity
    return Circle(keep.person, keep.relation, affinity)


def _narrowed(candidates: Candidates, before: list[bytes], again: list[bytes]) -> Candidates:
    """Leave out the posts of the pages before; keep only those of a page that was served already."""
    if not before and not again:
        return candidates
    kept: NDArray[np.bool_]
    if again:
        kept = np.isin(candidates.post, np.frombuffer(b"".join(again), dtype="<u8"))
    else:
        kept = ~np.isin(candidates.post, np.frombuffer(b"".join(before), dtype="<u8"))
    return Candidates(candidates.post[kept], candidates.known[kept], candidates.share[kept], candidates.newest_ms[kept])


def _seen_factors(view: View, candidates: Candidates) -> NDArray[np.float64]:
    """Give the factor of each candidate: the policy's where the post was seen and no tie has added an edge since."""
    factors, factor = np.ones(len(candidates.post)), view.ranking.policy.seen_factor
    seen = view.reader.seen_post
    if factor == 1.0 or not len(seen):
        return factors
    place, found = places_in(candidates.post, seen)
    unrenewed = candidates.newest_ms[place] <= view.reader.seen_ms[found]
    factors[place[unrenewed]] = factor
    return factors


def _arrange(shortlist: Shortlist, gap: int, k: int, recent: list[bytes]) -> list[Found] | None:
    """Arrange the certain posts into a page; None where more must be looked up first."""
    sure = shortlist.found[: shortlist.certain]
    more = not shortlist.exhausted
    places = keep_apart([one.record.author_hash for one in sure], gap, k, recent, more=more)
    return None if places is None else [sure[place] for place in places]


def _item(one: Found, session: Session) -> FeedItem:
    score = one.score if session.order == "ranked" else None
    return FeedItem(one.record.id, one.record.author, one.record.form, one.record.posted_ms, score)
