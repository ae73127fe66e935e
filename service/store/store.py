"""One store: its connection, its lasting choices (hash key, bank), its kinds, and how events get in."""

import os
import struct
from collections.abc import Callable, Sequence
from dataclasses import dataclass

import structlog

from scoring.bank import Bank
from service.errors import StoreRefused, WaxwaneError
from service.events.model import AnyEvent
from service.periodic import Periodic
from service.store import keys
from service.store.bulk import BulkIngest
from service.store.calls import Call, StoreLimits, trim_board
from service.store.connection import Connection
from service.store.drive import Driver
from service.store.ids import BUCKETS, IdHasher
from service.store.ingest import Ingest
from service.store.kinds import KindRegistry
from service.store.pieces import SEQ_DIGITS, Entry
from service.store.verdict import Verdict

FORMAT = "1"
DAY_MS = 86_400_000
BOARD_POSTS = 10_000
_SWEEP_EVERY_S = 5.0
_SWEEP_AT_ONCE = 100
_LEFT_ALONE_S = 30
"""An entry this young may still be at work, as those of an import are for several seconds."""

log = structlog.get_logger(__name__)


class StoreMismatchError(WaxwaneError):
    """The store was set up in another way than the settings ask for."""


@dataclass(frozen=True, slots=True)
class StoreOptions:
    """How to reach a store and what to keep in it.

    Args:
        url: address of the server.
        bank: half-lives of the running sums; fixed when the store is first used.
        retention_ms: age at which edges may be forgotten, milliseconds.
        read_timeout_s: longest wait for a read, seconds.
        write_timeout_s: longest wait for a write, seconds.

    """

    url: str
    bank: Bank
    retention_ms: int
    read_timeout_s: float = 0.5
    write_timeout_s: float = 5.0


def board_slots(size: int) -> tuple[int, ...]:
    """Choose the half-lives that have a board: one short, one middling, the longest.

    >>> board_slots(10), board_slots(1)
    ((2, 4, 9), (0,))

    """
    return tuple(sorted({(size - 1) // 4, (size - 1) // 2, size - 1}))


class Store:
    """The state behind all feeds.

    Args:
        options: how to reach it.
        known: says whether some loaded policy knows a kind.
        known_kinds: lists the kinds that loaded policies know.

    """

    def __init__(
        self, options: StoreOptions, *, known: Callable[[str], bool], known_kinds: Callable[[], Sequence[str]]
    ) -> None:
        self.options = options
        self.connection = Connection(
            options.url,
            read_timeout_s=options.read_timeout_s,
            write_timeout_s=options.write_timeout_s,
        )
        self.kinds = KindRegistry(self.connection)
        self.board_slots = board_slots(len(options.bank.half_lives_ms))
        self.limits = StoreLimits(
            ttl_ms=options.retention_ms + DAY_MS,
            retention_ms=options.retention_ms,
            half_lives=struct.pack(f"<{len(options.bank.half_lives_ms)}d", *options.bank.half_lives_ms),
            bank_size=len(options.bank.half_lives_ms),
        )
        self.hasher = IdHasher(b"")
        self.meta: dict[bytes, bytes] = {}
        self._known, self._known_kinds = known, known_kinds
        self._set_up()
        self._open_before: frozenset[tuple[int, bytes]] = frozenset()
        self._sweeper = Periodic("sweep", self._sweep, _SWEEP_EVERY_S, at_once=True)

    def _set_up(self) -> None:
        self.driver = Driver(self.run, self.hasher, self.limits, self.options.bank, self.board_slots)
        self.bulk = BulkIngest(self.run, self.driver, self.limits, self.board_slots, BOARD_POSTS)
        self.ingest = Ingest(
            self.run,
            self.driver,
            self.hasher,
            self.kinds,
            self.limits,
            known=self._known,
            known_kinds=self._known_kinds,
        )

    async def run(self, calls: Sequence[Call]) -> list[object]:
        """Run calls in one round trip; every write passes through here."""
        return await self.connection.run(calls)

    async def start(self, *, sweep: bool = True) -> None:
        """Connect, agree on the lasting choices, and finish what a crash left open.

        Args:
            sweep: also start looking for entries left open, now and again.

        Raises:
            StoreUnavailable: the server does not answer.
            StoreMismatchError: the store has another format or bank.

        """
        await self.connection.start()
        await self._agree()
        await self.kinds.refresh()
        if sweep:
            self._sweeper.start()

    async def close(self) -> None:
        """Stop sweeping and disconnect."""
        await self._sweeper.stop()
        await self.connection.close()

    async def apply(self, events: Sequence[AnyEvent], now_ms: int) -> list[Verdict]:
        """Apply events; see `Ingest.apply`."""
        return await self.ingest.apply(events, now_ms)

    async def kind_codes(self, kinds: Sequence[str]) -> list[int]:
        """Register those kinds that loaded policies know.

        Returns:
            The code of each, -1 where it is not known or the store has no room for it.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        known = [kind for kind in kinds if self._known(kind)]
        await self.kinds.register(known)
        codes = {kind: self.kinds.code(kind) for kind in known}
        return [-1 if (code := codes.get(kind)) is None else code for kind in kinds]

    async def finish_open_entries(self, now_ms: int) -> int:
        """Drive all outbox entries that are open now.

        Args:
            now_ms: now, Unix milliseconds.

        Returns:
            How many entries were driven.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        return await self._drive_all(await self._open_entries(), now_ms)

    async def _open_entries(self) -> list[tuple[int, bytes]]:
        commands: list[tuple[bytes | str | int, ...]] = [
            (b"ZRANGE", keys.outbox(number), 0, _SWEEP_AT_ONCE - 1) for number in range(BUCKETS)
        ]
        answers = await self.connection.read_many(commands)
        return [(number, member) for number, members in enumerate(answers) for member in members]

    async def _drive_all(self, entries: Sequence[tuple[int, bytes]], now_ms: int) -> int:
        done = 0
        for number, member in entries:
            # Nothing is known of the low mark here: 0 prunes nothing and is always true.
            try:
                await self.driver.drive([Entry.read(number, 0, member)], now_ms, {})
            except (StoreRefused, ValueError, LookupError) as error:  # one that is broken must not keep others open
                log.warning("entry_left_open", bucket=number, reason=f"{type(error).__name__}: {error}")
            else:
                done += 1
        return done

    async def trim_boards(self) -> None:
        """Keep the boards to their greatest posts."""
        await self.run([trim_board(slot, BOARD_POSTS) for slot in self.board_slots])

    async def _agree(self) -> None:
        bank = ",".join(f"{half_life:.17g}" for half_life in self.options.bank.half_lives_ms)
        ours = {b"format": FORMAT.encode(), b"bank": bank.encode(), b"hash_key": os.urandom(16)}
        await self.connection.run([Call(None, [], [b"HSETNX", keys.META, name, value]) for name, value in ours.items()])
        self.meta = await self.connection.read_hash(keys.META)
        if self.meta[b"format"] != FORMAT.encode():
            raise StoreMismatchError(
                f"store: its format is {self.meta[b'format'].decode()}, this program writes {FORMAT}"
            )
        if self.meta[b"bank"] != bank.encode():
            raise StoreMismatchError(
                f"bank: {bank} is not allowed: this store keeps its sums for the half-lives "
                f"{self.meta[b'bank'].decode()} ms; allowed: the same, or a new store"
            )
        self.hasher = IdHasher(self.meta[b"hash_key"])
        self._set_up()

    async def _sweep(self) -> None:
        """Finish what was open at the sweep before and still is: no one is at work on it."""
        entries = await self._open_entries()
        server_time = await self.connection.read("TIME")
        newest_us = (int(server_time[0]) - _LEFT_ALONE_S) * 1_000_000
        left = [entry for entry in entries if entry in self._open_before and int(entry[1][:SEQ_DIGITS]) <= newest_us]
        self._open_before = frozenset(entries)
        if done := await self._drive_all(left, int(server_time[0]) * 1000):
            log.info("finished_open_entries", entries=done)
        await self.trim_boards()
