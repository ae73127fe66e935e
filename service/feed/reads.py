"""What a feed read fetches: the reader's own keys always, rows, posts and boards where they are not remembered."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import cast

from service.feed.board import BoardReader, BoardState, CrowdBound
from service.feed.cache import Recent, Watch, WorkerCache
from service.store import keys
from service.store.connection import Connection
from service.store.records import PostRecord, read_record

_BOARD_AGE_MS = 1000
_BOARD_CHANGES = 2000


@dataclass(slots=True)
class _HeldBoard:
    """A board as it was read, and what it came to for a policy the last time."""

    state: BoardState
    watch: Watch
    fetched_ms: int
    policy: BoardReader | None = None
    t_ms: int = 0
    unknown: int = 0
    bound: CrowdBound | None = None

    def bound_for(self, policy: BoardReader, t_ms: int) -> CrowdBound:
        """Bound the crowd at a time; a bound for a little earlier holds too, as all sums only fall."""
        unknown = len(self.watch.changed)
        if self.bound is None or policy is not self.policy or unknown != self.unknown or t_ms < self.t_ms:
            self.policy, self.t_ms, self.unknown = policy, t_ms, unknown
            self.bound = policy.bound(self.state, self.watch.changed, t_ms)
        return self.bound


def _present(values: list[bytes | None]) -> list[bytes]:
    """Put an empty value in place of each that is not there."""
    return [value or b"" for value in values] if None in values else cast("list[bytes]", values)


def _filled(values: list[bytes | None], fetched: list[bytes]) -> list[bytes]:
    """Put what was fetched in place of what was not remembered, in order."""
    if len(fetched) == len(values):
        return fetched
    coming = iter(fetched)
    return [next(coming) if value is None else value for value in values]


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

    async def begin(self) -> None:
        """Begin a read that is nobody's: take into account what has changed.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        follower = self._cache.follower
        asked_at = follower.position
        self._cache.take(asked_at, await self._connection.read_many(follower.commands()))

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

    async def rows(self, people: Sequence[bytes]) -> list[bytes]:
        """Give the row of each person, empty where there is none.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        return await self._values("row", self._cache.rows, people)

    async def posts(self, posts: Sequence[bytes]) -> list[bytes]:
        """Give the value of each post, empty where there is none.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        return await self._values("post", self._cache.posts, posts)

    async def records(self, posts: Sequence[bytes]) -> list[PostRecord | None]:
        """Give the record of each post, None where there is none.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        return [read_record(value) if value else None for value in await self.posts(posts)]

    async def _values(self, name: str, remembered: Recent[bytes], wanted: Sequence[bytes]) -> list[bytes]:
        values = remembered.get_all(wanted)
        if None not in values:
            return cast("list[bytes]", values)
        hashes = [one for one, value in zip(wanted, values, strict=True) if value is None]
        ticket = self._cache.follower.ticket()
        fetched = _present((await self._connection.read_packed(keys.packed_mget(name, hashes), 1))[0])
        self._cache.keep(remembered, ticket, zip(hashes, fetched, strict=True))
        return _filled(values, fetched)

    async def crowd(self, reader: BoardReader, t_ms: int, now_ms: int) -> CrowdBound:
        """Bound the crowd at a time, by a board as it was at most a second ago, and what has changed since.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        held = self._boards.get(reader.slot)
        if held is not None and self._still_good(held, now_ms):
            return held.bound_for(reader, t_ms)
        if held is not None:
            self._cache.stop(held.watch)
        watch = self._cache.watch()
        state = reader.read(await self._connection.read_many(reader.commands()))
        held = self._boards[reader.slot] = _HeldBoard(state, watch, now_ms)
        return held.bound_for(reader, t_ms)

    def _still_good(self, held: _HeldBoard, now_ms: int) -> bool:
        young = 0 <= now_ms - held.fetched_ms < _BOARD_AGE_MS
        return young and len(held.watch.changed) < _BOARD_CHANGES and self._cache.holds(held.watch)
