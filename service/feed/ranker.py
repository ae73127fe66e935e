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
from scoring.gathering import Gathering
from service.feed.beyond import Places, outsider, reader_of, surely
from service.feed.board import CrowdBound
from service.feed.cache import WorkerCache
from service.feed.deadline import Deadline
from service.feed.exposure import ExposureLog, Pool
from service.feed.pages import CARRIED, CursorBook, Session, new_session
from service.feed.policies import PolicyBook
from service.feed.readers import Readers, ReaderState, Standing, hash_number
from service.feed.reading import Chosen, Reading
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
        reading = Reading(request, session, view, gathering, deadline, before, again)
        crowd = await self._bound(reading, now_ms)
        reading.narrow()
        chosen = await self._choose(reading)
        if crowd is not None and view.ranking.policy.goes_beyond:
            chosen = await self._with_beyond(reading, chosen, crowd)
        if again:
            chosen.put_in_order(again)
        deadline.stage("shortlist")
        page = again or [one.hash for one in chosen.found]
        cursor = await self._next(session, served, page, now_ms) if chosen.more else None
        answer = FeedAnswer(
            reader=request.reader,
            as_of_ms=session.as_of_ms,
            policy=session.policy,
            complete=chosen.certain and view.whole,
            items=await self._items(reading, chosen),
            next=cursor,
            stages_ms=deadline.stages_ms,
        )
        if self._exposures and chosen.pools:
            await self._exposures.log(view.reader.hash, session, answer, chosen.pools, now_ms)
            deadline.stage("exposure")
        return answer

    async def _with_beyond(self, reading: Reading, ties: Chosen, crowd: CrowdBound) -> Chosen:
        """Mix posts from beyond the ties into a page."""
        policy, request = reading.view.ranking.policy, reading.request
        places = Places(policy, reading.session.offset, request.k)
        need = request.k if reading.again else places.wanted(len(ties.found))
        found: list[Found] = []
        surely_all, more = True, True  # where nobody looks, the next page may turn out empty
        if need:
            reading.gathering.turn(np.concatenate((crowd.post, np.frombuffer(b"".join(reading.again), dtype="<u8"))))
            reading.set_bounds(crowd)
            reading.narrow()
            reader = outsider(reading.view.reader, request.forms, request.topics)
            shortlist = await Shortlister(self.reads, reader, reading.gathering, reading.deadline).best(need)
            unlisted = policy.affinity.crowd * crowd.others
            surely_all = bool(reading.again) or surely(shortlist, need, unlisted, reading.temperature)
            found, more = shortlist.found, shortlist.more
        page = [*ties.found, *found] if reading.again else places.mixed(ties.found, found)
        certain = ties.certain and surely_all
        more = ties.more or more or len(page) < len(ties.found) + len(found)
        pools = ties.pools | ({"beyond": self._pool(reading)} if ties.pools and found else {})
        ended = certain and len(page) < request.k
        return Chosen(page, certain, more and not ended, pools, {one.hash for one in ties.found})

    def _pool(self, reading: Reading) -> Pool:
        return Pool.of(reading.gathering, reading.temperature)

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

    async def _bound(self, reading: Reading, now_ms: int) -> CrowdBound | None:
        """Bound what the candidates stand in order by; newest first knows no crowd."""
        if reading.session.order == "newest":
            reading.gathering.by_newest()
            return None
        crowd = await self.reads.crowd(reading.view.prepared.board, reading.session.as_of_ms, now_ms)
        reading.set_bounds(crowd)
        return crowd

    async def _choose(self, reading: Reading) -> Chosen:
        """Choose a page's posts among those that ties have brought."""
        view, request = reading.view, reading.request
        reader = reader_of(view.reader, view.circle, request)
        shortlister = Shortlister(self.reads, reader, reading.gathering, reading.deadline)
        if reading.session.order == "newest":
            shortlist = await shortlister.newest(request.k)
            return Chosen(shortlist.found, shortlist.exhausted, shortlist.more)
        gap, need = view.ranking.policy.author_gap, request.k
        recent = await self._recent_authors(gap, reading.before)
        while True:
            shortlist = await shortlister.best(need)
            picked = _arrange(shortlist, gap, request.k, recent)
            if picked is not None or shortlist.certain < need:
                break
            need *= 2
        found = shortlist.found[: request.k] if picked is None else picked
        more = not shortlist.exhausted or shortlist.total > len(found)
        pools = {"tie": self._pool(reading)} if self._exposures and not reading.again else {}
        return Chosen(found, picked is not None, more, pools)

    async def _items(self, reading: Reading, chosen: Chosen) -> list[FeedItem]:
        items = [_item(one, reading.session) for one in chosen.found]
        if chosen.brought is not None:
            for item, one in zip(items, chosen.found, strict=True):
                item.source = "tie" if one.hash in chosen.brought else "beyond"
        if reading.request.why and items:
            posts, kinds = [one.hash for one in chosen.found], self._store.kinds.names
            t_ms = reading.session.as_of_ms
            found = await reasons(reading.view, posts, kinds, self._store.connection, t_ms)
            for item, one in zip(items, chosen.found, strict=True):
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
