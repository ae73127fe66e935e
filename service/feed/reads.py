"""What a feed read fetches: the reader's own keys always, rows, posts and boards where they are not remembered."""

from collections.abc import Sequence
from dataclasses import dataclass

from service.feed.board import BoardReader, BoardState
from service.feed.cache import Watch, WorkerCache
from service.feed.deadline import Deadline
from service.store import keys
from service.store.connection import Connection
from service.store.records import PostRecord, read_record

ROWS_AT_ONCE = 1000
"""Rows fetched between two looks at the deadline."""

_BOARD_AGE_MS = 1000
_BOARD_CHANGES = 2000


@dataclass(frozen=True, slots=True)
class _HeldBoard:
    state: BoardState
    watch: Watch
    fetched_ms: int


class Reads:
    """Fetches for one worker.

    Args:
        connection: to the store.
        cache: what the worker remembers.

    """

    def __init__(self, connection: Connection, cache: WorkerCache) -> None:
        self._connection = connection
        self._cache = cache
        self._boards: dict[int, _HeldBoard] = {}

    async def own(self, person_keys: Sequence[bytes]) -> list[bytes]:
        """Begin a read: fetch the reader's own strings, and take into account what has changed.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        follower = self._cache.follower
        asked_at = follower.position
        answers = await self._connection.read_many([(b"MGET", *person_keys), *follower.commands()])
        self._cache.take(asked_at, answers[1:])
        return [value or b"" for value in answers[0]]

    async def rows(self, people: Sequence[bytes], deadline: Deadline) -> tuple[list[bytes], bool]:
        """Give the rows of people, as many as the deadline allows.

        Returns:
            One row for each of the first people, and whether that is all of them.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        remembered = self._cache.rows.get
        rows = [remembered(person) for person in people]
        missing = [place for place, row in enumerate(rows) if row is None]
        for at in range(0, len(missing), ROWS_AT_ONCE):
            if at and deadline.passed():
                break
            places = missing[at : at + ROWS_AT_ONCE]
            wanted = [people[place] for place in places]
            ticket = self._cache.follower.ticket()
            values = [value or b"" for value in await self._connection.mget(keys.keys("row", wanted))]
            self._cache.keep_rows(ticket, zip(wanted, values, strict=True))
            for place, value in zip(places, values, strict=True):
                rows[place] = value
        whole = all(row is not None for row in rows)
        return [row or b"" for row in rows], whole

    async def posts(self, posts: Sequence[bytes]) -> list[PostRecord | None]:
        """Give the records of posts, None where there is none.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        records: list[PostRecord | None] = [self._cache.posts.get(post) for post in posts]
        missing = [place for place, record in enumerate(records) if record is None]
        if missing:
            wanted = [posts[place] for place in missing]
            ticket = self._cache.follower.ticket()
            values = await self._connection.mget(keys.keys("post", wanted))
            found = [read_record(value) if value else None for value in values]
            self._cache.keep_posts(ticket, ((post, one) for post, one in zip(wanted, found, strict=True) if one))
            for place, record in zip(missing, found, strict=True):
                records[place] = record
        return records

    async def board(self, reader: BoardReader, now_ms: int) -> tuple[BoardState, set[bytes]]:
        """Give a board as it was at most a second ago, and the posts that have changed since.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        held = self._boards.get(reader.slot)
        if held is not None and self._still_good(held, now_ms):
            return held.state, held.watch.changed
        if held is not None:
            self._cache.stop(held.watch)
        watch = self._cache.watch()
        state = reader.read(await self._connection.read_many(reader.commands()))
        self._boards[reader.slot] = _HeldBoard(state, watch, now_ms)
        return state, watch.changed

    def _still_good(self, held: _HeldBoard, now_ms: int) -> bool:
        young = 0 <= now_ms - held.fetched_ms < _BOARD_AGE_MS
        return young and len(held.watch.changed) < _BOARD_CHANGES and self._cache.holds(held.watch)
