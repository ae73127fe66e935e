"""Apply many interactions at once: whole runs for each person and each post, in few large calls.

The steps are those of `ingest.py` and `drive.py`, and so are the outbox entries, so whatever breaks off here is carried
on there. Whatever is not plain here (an entry that somebody else has driven meanwhile, a post whose id is not the one
its hash stands for, an author learned or lost in between) is handed to the driver, entry by entry.
"""

import asyncio
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from service.store import bulk_calls, calls
from service.store.bulk_columns import (
    Edges,
    Groups,
    Hashes,
    PeopleSide,
    PostsSide,
    PostValues,
    grouped,
    hash_list,
    per_row,
)
from service.store.calls import Argument, Call, StoreLimits
from service.store.drive import Driver, Run
from service.store.pieces import Entry

Outcomes = NDArray[np.uint8]

APPLIED, REPEATED, ERASED, OTHER_ID, FULL, TAKEN_BACK = range(6)
"""Outcomes as in scripts/take_interactions.lua."""

CALLS_AT_ONCE: Final = 8
"""Calls packed and sent together."""

PARTS_AT_ONCE: Final = 3
"""How many such parts are under way, so that the server works on some while the next are packed."""

NAMED_CHANGES: Final = 4_096
"""Most people and posts that the change log names; past that, workers forget everything."""


@dataclass(frozen=True, slots=True)
class _Open:
    """An outbox entry made here."""

    bucket: int
    seq: int
    low: int


class BulkIngest:
    """Applies many interactions at once.

    Args:
        run: runs calls in order and gives their answers.
        driver: carries out what is not plain.
        limits: of the store.
        board_slots: slots of the bank, from 0, that have a board.
        board_posts: how many posts a board keeps.

    """

    def __init__(
        self, run: Run, driver: Driver, limits: StoreLimits, board_slots: Sequence[int], board_posts: int
    ) -> None:
        self._run = run
        self._driver = driver
        self._limits = limits
        self._board_slots = board_slots
        self._board_posts = board_posts
        self._half_lives_ms: list[float] = np.frombuffer(limits.half_lives, "<f8").tolist()

    async def apply(self, edges: Edges, now_ms: int) -> Outcomes:
        """Apply interactions.

        Args:
            edges: of registered kinds, within retention and not too far ahead, none of them twice, and no two ids
                with one hash.
            now_ms: now, Unix milliseconds.

        Returns:
            What became of each, `APPLIED` to `TAKEN_BACK`. What is applied shows in every read that starts
            afterwards.

        Raises:
            StoreUnavailable: the store does not answer; the same again ends in the same state.

        """
        people = asyncio.create_task(asyncio.to_thread(PeopleSide, edges))
        groups = await asyncio.to_thread(grouped, edges.posts, edges.at_ms)
        authors = await self._authors(groups)
        building = asyncio.create_task(asyncio.to_thread(PostsSide, edges, groups, now_ms, self._half_lives_ms))
        try:
            outcomes, entries = await self._take(await people, authors, now_ms)
        finally:
            side = await building
        del people
        if not entries:
            return outcomes
        taken = np.flatnonzero(outcomes == APPLIED)
        if len(taken) < len(edges):
            some = edges.rows(taken)
            side = PostsSide(some, grouped(some.posts, some.at_ms), now_ms, self._half_lives_ms)
        answers = await self._add(side, entries, now_ms)
        if not self._plain(side.groups, answers, authors[taken]):
            refused = await self._drive(entries, now_ms)
            odd = np.isin(edges.ids, np.frombuffer(b"".join(refused), np.uint64))
            outcomes[odd & (outcomes == APPLIED)] = OTHER_ID
            return outcomes
        values = PostValues.read(answers, len(self._half_lives_ms))
        marks = values.marks(now_ms, [(slot, self._half_lives_ms[slot]) for slot in self._board_slots])
        await self._end(entries, edges.people[taken], side.groups, marks)
        return outcomes

    async def _authors(self, groups: Groups) -> Hashes:
        """Read the author of each row's post, 0 where it is not known."""
        hashes = hash_list(groups.keys)
        answers = await self._run([bulk_calls.bulk_read_authors(hashes[a:b]) for _, a, b in groups.buckets])
        return per_row(groups, np.frombuffer(b"".join(answers), np.uint64))

    async def _take(self, side: PeopleSide, authors: Hashes, now_ms: int) -> tuple[Outcomes, list[_Open]]:
        groups, ordered = side.groups, np.zeros(len(authors), np.uint8)
        packed = authors[groups.order].tobytes()
        answers = await self._many([self._taking(side, packed, now_ms, *place) for place in groups.buckets])
        entries: list[_Open] = []
        unsettled: list[Entry] = []
        for (number, first, _), (seq, low, exceptions, members) in zip(groups.buckets, answers, strict=True):
            for place, digits in zip(exceptions[::2], exceptions[1::2], strict=True):
                at = int(groups.first[first + place - 1])
                ordered[at : at + len(digits)] = np.frombuffer(digits, np.uint8) - ord("0")
            if seq:
                entries.append(_Open(number, seq, low))
            unsettled += [Entry.read(number, low, member) for member in members]
        for entry in sorted(unsettled, key=lambda entry: (entry.bucket, entry.seq)):
            await self._driver.drive([entry], now_ms, {})
        outcomes = np.empty_like(ordered)
        outcomes[groups.order] = ordered
        return outcomes, entries

    async def _add(self, side: PostsSide, entries: Sequence[_Open], now_ms: int) -> list[Any]:
        sources = ",".join(f"{entry.bucket}e,{entry.seq},{entry.low}" for entry in entries)
        return await self._many([self._adding(side, sources, now_ms, *place) for place in side.groups.buckets])

    def _taking(
        self, side: PeopleSide, authors: bytes, now_ms: int, number: int, first: int, end: int
    ) -> Callable[[], Call]:
        return lambda: bulk_calls.bulk_take_interactions(number, now_ms, self._limits, side.runs(authors, first, end))

    def _adding(
        self, side: PostsSide, sources: str, now_ms: int, number: int, first: int, end: int
    ) -> Callable[[], Call]:
        return lambda: bulk_calls.bulk_add_edges(number, sources, now_ms, self._limits, side.runs(first, end))

    def _plain(self, groups: Groups, answers: Sequence[Any], written: Hashes) -> bool:
        """Say whether everything was applied just now, with the authors that stand beside the rows."""
        if any(not answer or answer[4] for answer in answers):
            return False
        authors = np.frombuffer(b"".join(answer[0] for answer in answers), np.uint64)
        return bool(np.all((per_row(groups, authors) == written) | (per_row(groups, authors) == 0)))

    async def _drive(self, entries: Sequence[_Open], now_ms: int) -> dict[bytes, str]:
        """Hand entries to the driver, as far as they are still open."""
        members = await self._run([bulk_calls.open_entry(entry.bucket, entry.seq) for entry in entries])
        refused: dict[bytes, str] = {}
        for entry, found in zip(entries, members, strict=True):
            for member in found:
                await self._driver.drive([Entry.read(entry.bucket, entry.low, member)], now_ms, refused)
        return refused

    async def _end(self, entries: Sequence[_Open], people: Hashes, posts: Groups, marks: NDArray[np.float64]) -> None:
        """Raise the boards, log what has changed, then close the entries."""
        hashes = hash_list(posts.keys)
        boards = [self._board(slot, hashes, marks[:, i]) for i, slot in enumerate(self._board_slots)]
        changed = np.unique(people)
        named = len(changed) + len(hashes) <= NAMED_CHANGES
        log = calls.log_changes(hash_list(changed), hashes) if named else bulk_calls.leave_gap()
        closing = [bulk_calls.close_entry(entry.bucket, entry.seq) for entry in entries]
        await self._run([*boards, log, *closing])

    def _board(self, slot: int, posts: list[bytes], marks: NDArray[np.float64]) -> Call:
        """Raise the greatest marks; the others could not stay on the board, and only its floor must know of them."""
        places, left_out = np.flatnonzero(~np.isnan(marks)), None
        if len(places) > self._board_posts:
            order = places[np.argsort(marks[places])]
            left_out = float(marks[order[-self._board_posts - 1]])
            places = order[-self._board_posts :]
        pairs: list[Argument] = []
        for place, mark in zip(places.tolist(), marks[places].tolist(), strict=True):
            pairs += (repr(mark), posts[place])
        return bulk_calls.bulk_raise_board(slot, self._board_posts, left_out, pairs)

    async def _many(self, makers: Sequence[Callable[[], Call]]) -> list[Any]:
        """Make and run calls a few at a time: while the server works on some, the next are made.

        Never more than `PARTS_AT_ONCE` wait for the server, so that no wait comes near the time limit of a write.
        """
        parts = [makers[at : at + CALLS_AT_ONCE] for at in range(0, len(makers), CALLS_AT_ONCE)]
        turns = asyncio.Semaphore(PARTS_AT_ONCE)

        async def part(some: Sequence[Callable[[], Call]]) -> list[Any]:
            async with turns:
                return await self._run([make() for make in some])

        done = await asyncio.gather(*map(part, parts))
        return [answer for answers in done for answer in answers]
