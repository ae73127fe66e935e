"""A feed read: the reader's state, the circle's rows, the reduction, the look-ups, the page."""

from collections.abc import Awaitable, Callable
from dataclasses import replace
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from scoring.affinity import Circle
from scoring.arrange import keep_apart
from scoring.compiled import UnknownCodeError
from scoring.edges import erasures, join_rows
from scoring.gathering import Bounds, Gathering
from scoring.ranking import Ranking
from service.feed.beyond import Places, outsider, reader_of, surely
from service.feed.board import CrowdBound
from service.feed.cache import WorkerCache
from service.feed.deadline import Deadline
from service.feed.exposure import ExposureLog, Pool
from service.feed.pages import CARRIED, CursorBook, Session, new_session
from service.feed.policies import PolicyBook
from service.feed.readers import Readers, ReaderState, Standing, hash_number
from service.feed.reads import Reads
from service.feed.reasons import reasons
from service.feed.shortlist import Found, Shortlist, Shortlister
from service.feed.types import FeedAnswer, FeedItem, FeedRequest
from service.feed.view import View
from service.store.records import author_of, read_item
from service.store.store import Store

Answer = TypeVar("Answer")


ROWS_AT_ONCE = 500
"""Rows fetched and added up between two looks at the deadline."""

EDGES_A_PERSON = 60
"""About how many edges a row has: room for so many is made before rows come."""

ROWS_SHARE = 0.7
"""How much of the budget fetching rows may use up: the rest is for looking up the best."""


class Ranker:
    """Ranks feeds.

    Args:
        store: the state behind all feeds; started.
        policies: the loaded policies.
        cache: what this worker remembers between reads.
        budget_ms: time that a ranking may take where the request says nothing, milliseconds.
        exposures: logs what is shown; None where it is not logged.

    """

    def __init__(
        self,
        store: Store,
        policies: PolicyBook,
        cache: WorkerCache,
        budget_ms: float,
        exposures: ExposureLog | None = None,
    ) -> None:
        self._exposures = exposures
        self._store = store
        self._policies = policies
        self._budget_ms = budget_ms
        self.reads = Reads(store.connection, cache)
        self.readers = Readers(self.reads, cache.size)
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
        return await self.with_all_kinds(lambda: self._page(request, session, served, deadline, now_ms))

    async def with_all_kinds(self, read: Callable[[], Awaitable[Answer]]) -> Answer:
        """Read, and once more where another worker has registered a kind meanwhile."""
        try:
            return await read()
        except UnknownCodeError:
            await self._store.kinds.refresh()
            return await read()

    async def _page(
        self, request: FeedRequest, session: Session, served: list[bytes], deadline: Deadline, now_ms: int
    ) -> FeedAnswer:
        profile = session.order == "ranked"
        view, gathering = await self.view(request.reader, session.policy, session.as_of_ms, deadline, profile=profile)
        before, again = served[: session.offset], served[session.offset : session.offset + request.k]
        crowd = await self._bound(session, view, gathering, now_ms)
        self._narrow(view, gathering, before, again, profile=profile)
        shortlister = Shortlister(self.reads, reader_of(view.reader, view.circle, request), gathering, deadline)
        chosen, certain, more = await self._choose(request, session, view.ranking, shortlister, before)
        temperature = view.ranking.policy.temperature if session.explore else 0.0
        pools = {"tie": Pool.of(gathering, temperature)} if self._exposures and crowd is not None else {}
        brought = None
        if crowd is not None and view.ranking.policy.goes_beyond:
            brought = {one.hash for one in chosen}
            beyond, surely_beyond, more_beyond = await self._beyond(
                request, session, view, gathering, before, again, deadline, len(chosen), crowd
            )
            places = Places(view.ranking.policy, session.offset, request.k)
            kept = [*chosen, *beyond] if again else places.mixed(chosen, beyond)
            certain = certain and surely_beyond
            if pools and len(beyond):
                pools["beyond"] = Pool.of(gathering, temperature)
            more = (more or more_beyond or len(kept) < len(chosen) + len(beyond)) and not (
                certain and len(kept) < request.k
            )
            chosen = kept
        if again:
            order = {post: place for place, post in enumerate(again)}
            chosen.sort(key=lambda one: order[one.hash])
            more = True
        deadline.stage("shortlist")
        page = again or [one.hash for one in chosen]
        cursor = await self._next(session, served, page, now_ms) if more else None
        answer = FeedAnswer(
            reader=request.reader,
            as_of_ms=session.as_of_ms,
            policy=session.policy,
            complete=certain and view.whole,
            items=await self._items(request, session, view, chosen, brought),
            next=cursor,
            stages_ms=deadline.stages_ms,
        )
        if self._exposures and pools:
            await self._exposures.log(view.reader.hash, session, answer, pools, now_ms)
            deadline.stage("exposure")
        return answer

    def _narrow(
        self, view: View, gathering: Gathering, before: list[bytes], again: list[bytes], *, profile: bool
    ) -> None:
        """Leave out what the pages before have served, and what is hidden; of a page again, all but its own."""
        if again:
            gathering.only(again)
        elif before:
            gathering.without(before)
        if profile and len(hidden := view.reader.hidden(view.ranking)):
            gathering.without([hidden.tobytes()])

    async def _beyond(
        self,
        request: FeedRequest,
        session: Session,
        view: View,
        gathering: Gathering,
        before: list[bytes],
        again: list[bytes],
        deadline: Deadline,
        ties: int,
        crowd: CrowdBound,
    ) -> tuple[list[Found], bool, bool]:
        """Find posts from beyond the ties; say whether they are certain, and whether more may follow."""
        places = Places(view.ranking.policy, session.offset, request.k)
        need = request.k if again else places.wanted(ties)
        if not need:
            return [], True, True  # nobody has looked: the next page may turn out empty
        gathering.turn(np.concatenate((crowd.post, np.frombuffer(b"".join(again), dtype="<u8"))))
        self._set_bounds(session, view, gathering, crowd)
        self._narrow(view, gathering, before, again, profile=True)
        reader = outsider(view.reader, request.forms, request.topics)
        shortlist = await Shortlister(self.reads, reader, gathering, deadline).best(need)
        policy = view.ranking.policy
        temperature = policy.temperature if session.explore else 0.0
        certain = bool(again) or surely(shortlist, need, policy.affinity.crowd * crowd.others, temperature)
        return shortlist.found, certain, shortlist.more

    async def view(
        self, reader: str, policy: str, t_ms: int, deadline: Deadline, *, profile: bool
    ) -> tuple[View, Gathering]:
        """Gather what a reader's feed is ranked from.

        Args:
            reader: the reader's id.
            policy: name of a loaded policy.
            t_ms: the time of the feed, Unix milliseconds.
            deadline: ends the fetching of rows.
            profile: False leaves out what the reader did.

        Returns:
            What was fetched, and the candidates gathered from it.

        Raises:
            UnknownPolicy: the policy is not loaded.
            StoreUnavailable: the store does not answer.

        """
        state = await self.readers.load(reader, self._store.hasher.hash(reader), profile=profile)
        deadline.stage("reader")
        prepared = self._policies.prepared(policy, self._store.kinds.names)
        standing = self.readers.standing(state, prepared.ranking, t_ms)
        gathering = Gathering(prepared.ranking, t_ms, EDGES_A_PERSON * len(standing.people))
        rows = await self._rows(standing, gathering, deadline)
        view = View(state, standing, rows, prepared, len(rows) == len(standing.people))
        _, _, markers = gathering.counts()
        if markers:
            view, gathering = await self._without_erased(view, gathering, t_ms)
        deadline.stage("rows")
        return view, gathering

    async def _rows(self, standing: Standing, gathering: Gathering, deadline: Deadline) -> list[bytes]:
        """Fetch and add up the rows of the circle, the strongest first, as many as the deadline allows."""
        fetched: list[bytes] = []
        for at in range(0, len(standing.people), ROWS_AT_ONCE):
            if at and deadline.passed(ROWS_SHARE):
                break
            part = slice(at, at + ROWS_AT_ONCE)
            rows = await self.reads.rows(standing.people[part])
            gathering.add(rows, standing.affinity[part], standing.relation[part])
            fetched += rows
        return fetched

    async def _session(self, request: FeedRequest, now_ms: int) -> tuple[Session, list[bytes]]:
        if request.cursor is not None:
            session = self._cursors.read(request, now_ms)
            return session, await self._cursors.served(session, request.cursor)
        as_of_ms = now_ms if request.as_of_ms is None else max(request.as_of_ms, now_ms)
        return new_session(request, as_of_ms, request.policy or self._policies.default), []

    async def _bound(self, session: Session, view: View, gathering: Gathering, now_ms: int) -> CrowdBound | None:
        """Bound what the candidates stand in order by; newest first knows no crowd."""
        if session.order == "newest":
            gathering.by_newest()
            return None
        crowd = await self.reads.crowd(view.prepared.board, session.as_of_ms, now_ms)
        self._set_bounds(session, view, gathering, crowd)
        return crowd

    def _set_bounds(self, session: Session, view: View, gathering: Gathering, crowd: CrowdBound) -> None:
        policy = view.ranking.policy
        gathering.bound(
            Bounds(
                others=crowd.others,
                post=crowd.post,
                crowd=crowd.bound,
                seen_post=view.reader.seen_post,
                seen_ms=view.reader.seen_ms,
                factor=policy.seen_factor,
                seed=session.seed,
                temperature=policy.temperature if session.explore else 0.0,
            )
        )

    async def _choose(
        self,
        request: FeedRequest,
        session: Session,
        ranking: Ranking,
        shortlister: Shortlister,
        before: list[bytes],
    ) -> tuple[list[Found], bool, bool]:
        """Choose a page's posts; say whether they are certain, and whether more may follow."""
        if session.order == "newest":
            shortlist = await shortlister.newest(request.k)
            return shortlist.found, shortlist.exhausted, shortlist.more
        gap, need = ranking.policy.author_gap, request.k
        recent = await self._recent_authors(gap, before)
        while True:
            shortlist = await shortlister.best(need)
            picked = _arrange(shortlist, gap, request.k, recent)
            if picked is not None or shortlist.certain < need:
                break
            need *= 2
        chosen = shortlist.found[: request.k] if picked is None else picked
        return chosen, picked is not None, not shortlist.exhausted or shortlist.total > len(chosen)

    async def _items(
        self, request: FeedRequest, session: Session, view: View, chosen: list[Found], brought: set[bytes] | None
    ) -> list[FeedItem]:
        items = [_item(one, session) for one in chosen]
        if brought is not None:
            for item, one in zip(items, chosen, strict=True):
                item.source = "tie" if one.hash in brought else "beyond"
        if request.why and items:
            posts, kinds = [one.hash for one in chosen], self._store.kinds.names
            found = await reasons(view, posts, kinds, self._store.connection, session.as_of_ms)
            for item, one in zip(items, chosen, strict=True):
                item.why = found.get(one.hash)
        return items

    async def _recent_authors(self, gap: int, before: list[bytes]) -> list[bytes]:
        if not gap or not before:
            return []
        records = await self.reads.records(before[-gap:])
        return [record.author_hash if record else b"" for record in records]

    async def _next(self, session: Session, served: list[bytes], page: list[bytes], now_ms: int) -> str:
        """Write the cursor of the page after this one, and keep this one where the cursor can't hold it."""
        end = session.offset + len(page)
        if not session.offset and end <= CARRIED:
            return self._cursors.write(session, end, page, now_ms)
        if end > len(served):
            await self._cursors.keep(session, served[: session.offset] + page)
        return self._cursors.write(session, end, [], now_ms)

    async def _without_erased(self, view: View, gathering: Gathering, t_ms: int) -> tuple[View, Gathering]:
        """Gather anew without the reader's dealings with people since erased, where there are any."""
        order = view.standing.order
        erased = {
            int(view.circle.person[order[row]]): until_ms for row, until_ms in erasures(join_rows(view.rows)).items()
        }
        erased.pop(hash_number(view.reader.hash), None)
        if not erased or not np.isin(view.reader.known.dealings.author, list(erased)).any():
            return view, gathering
        kept = await self._kept_dealings(view.reader, erased)
        affinity = view.reader.known.only(kept).affinity(view.ranking, t_ms)
        circle = Circle(view.circle.person, view.circle.relation, affinity)
        standing = replace(view.standing, affinity=affinity[order], circle=circle)
        gathering, rows = Gathering(view.ranking, t_ms), len(view.rows)
        gathering.add(view.rows, standing.affinity[:rows], standing.relation[:rows])
        return replace(view, standing=standing), gathering

    async def _kept_dealings(self, state: ReaderState, erased: dict[int, int]) -> NDArray[np.bool_]:
        """Say which dealings count still: none up to an erasure, and none with posts that went with it."""
        dealings = state.known.dealings
        until_ms = np.array([erased.get(author, -1) for author in dealings.author.tolist()])
        kept: NDArray[np.bool_] = dealings.time_ms > until_ms
        doubtful = np.flatnonzero(kept & (until_ms >= 0))
        posts = [int(state.dealt_post[at]).to_bytes(8, "little") for at in doubtful]
        records = await self.reads.records(posts)
        for at, record in zip(doubtful, records, strict=True):
            kept[at] = record is not None and hash_number(record.author_hash) == int(dealings.author[at])
        return kept


def _arrange(shortlist: Shortlist, gap: int, k: int, recent: list[bytes]) -> list[Found] | None:
    """Arrange the certain posts into a page; None where more must be looked up first."""
    sure = shortlist.found[: shortlist.certain]
    if not gap:
        return sure[:k] if len(sure) >= k or shortlist.exhausted else None
    authors = [author_of(one.value) for one in sure]
    places = keep_apart(authors, gap, k, recent, more=shortlist.more)
    return None if places is None else [sure[place] for place in places]


def _item(one: Found, session: Session) -> FeedItem:
    post, author, form, posted_ms = read_item(one.value)
    return FeedItem(post, author, form, posted_ms, one.score if session.order == "ranked" else None)
