"""The engine: everything behind the HTTP routes, and behind the command line."""

import time
from collections.abc import Sequence
from pathlib import Path
from typing import Any

from scoring.bank import DEFAULT_BANK, Bank
from service.events.model import AnyEvent
from service.feed.cache import WorkerCache
from service.feed.deadline import Deadline
from service.feed.explain import Explainer
from service.feed.export import Exporter
from service.feed.exposure import ExposureLog
from service.feed.policies import PolicyBook
from service.feed.popular import Popular
from service.feed.ranker import Ranker
from service.feed.types import (
    ExplainRequest,
    Explanation,
    FeedAnswer,
    FeedRequest,
    PolicyInfo,
    PopularAnswer,
    PopularRequest,
)
from service.periodic import Periodic
from service.settings import Settings, SettingsError
from service.store.calls import Call
from service.store.keys import POLICIES
from service.store.store import Store, StoreOptions, board_slots
from service.store.verdict import Verdict

_POLICIES_EVERY_S = 1.0


class Engine:
    """Takes events and ranks feeds.

    Args:
        options: how to reach the store and what to keep in it.
        policies: texts of policy files; the first is the default.
        budget_ms: time that a ranking may take where a request says nothing, milliseconds.
        default_policy: name of the default policy where it is not the first.
        log_exposures: keep what feeds have shown, and with what chance, in the store.
        cache_bytes: most memory for rows remembered between reads, and about as much for posts, bytes.

    Raises:
        PolicyRefused: a policy has an error.

    """

    def __init__(
        self,
        options: StoreOptions,
        policies: Sequence[str],
        *,
        budget_ms: float = 50.0,
        default_policy: str | None = None,
        cache_bytes: int = 64 << 20,
        log_exposures: bool = False,
    ) -> None:
        slots = board_slots(len(options.bank.half_lives_ms))
        self._policies = PolicyBook(options.bank, slots, options.retention_ms)
        for text in policies:
            self._policies.put(self._policies.read(text))
        if default_policy is not None:
            self._policies.default = default_policy
        self._policies.prepared(None, [])
        self.store = Store(options, known=self._policies.knows, known_kinds=self._policies.known_kinds)
        self._budget_ms = budget_ms
        self._log_exposures = log_exposures
        self._cache = WorkerCache(row_bytes=cache_bytes, post_bytes=cache_bytes)
        self._watcher = Periodic("policies", self._load_policies, _POLICIES_EVERY_S, at_once=False)

    @classmethod
    def from_settings(cls, settings: Settings) -> "Engine":
        """Make an engine as the settings say.

        Raises:
            PolicyRefused: a policy has an error.
            SettingsError: the store's address is not one that can be used, or a policy file can't be read.

        """
        if settings.store_kind != "single":
            raise SettingsError([f"store: {settings.store_kind} is not an address that the engine can connect to"])
        bank = Bank(settings.bank_half_lives_ms) if settings.bank_half_lives_ms else DEFAULT_BANK
        options = StoreOptions(
            url=settings.store,
            bank=bank,
            retention_ms=settings.retention_ms,
            read_timeout_s=settings.store_timeout_ms / 1000,
            write_timeout_s=settings.write_timeout_ms / 1000,
        )
        texts = [_policy_text(path) for path in settings.policies]
        return cls(
            options,
            texts,
            budget_ms=settings.budget_ms,
            default_policy=settings.default_policy,
            cache_bytes=settings.cache_mb << 20,
            log_exposures=settings.exposure == "log",
        )

    async def start(self, *, background: bool = True) -> None:
        """Connect, and start what runs in the background.

        Args:
            background: sweep what crashes left open and watch for pushed policies.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        await self.store.start(sweep=background)
        self._exposures = ExposureLog(self.store)
        logged = self._exposures if self._log_exposures else None
        self._ranker = Ranker(self.store, self._policies, self._cache, self._budget_ms, logged)
        self._explainer = Explainer(self.store, self._policies, self._ranker)
        self._popular = Popular(self.store, self._policies, self._ranker)
        self._exporter = Exporter(self.store)
        await self._load_policies()
        if background:
            self._watcher.start()

    async def close(self) -> None:
        """Stop the background work and disconnect."""
        await self._watcher.stop()
        await self.store.close()

    async def apply(self, events: Sequence[AnyEvent], now_ms: int) -> list[Verdict]:
        """Apply events; see `service.store.ingest.Ingest.apply`."""
        return await self.store.apply(events, now_ms)

    async def feed(self, request: FeedRequest, now_ms: int, arrived_s: float | None = None) -> FeedAnswer:
        """Rank a page of a feed; see `service.feed.ranker.Ranker.feed`."""
        return await self._ranker.feed(request, now_ms, time.perf_counter() if arrived_s is None else arrived_s)

    async def popular(self, request: PopularRequest, now_ms: int, arrived_s: float | None = None) -> PopularAnswer:
        """Rank what counts most for everybody; see `service.feed.popular.Popular.popular`."""
        deadline = Deadline(self._budget_ms, time.perf_counter() if arrived_s is None else arrived_s)
        return await self._popular.popular(request, now_ms, deadline)

    async def exposures(self, after: str, count: int) -> list[dict[str, Any]]:
        """Give what feeds have shown; see `service.feed.exposure.ExposureLog.read`."""
        return await self._exposures.read(after, count)

    async def explain(self, request: ExplainRequest, now_ms: int) -> Explanation:
        """Take a score apart; see `service.feed.explain.Explainer.explain`."""
        return await self._explainer.explain(request, now_ms)

    async def export(self, person: str, now_ms: int) -> dict[str, Any]:  # noqa: ARG002  the port's signature
        """Give all that is stored about a person."""
        return await self._exporter.export(person)

    async def policies(self) -> list[PolicyInfo]:
        """Describe the loaded policies."""
        return self._policies.infos()

    async def put_policy(self, name: str, toml_text: str) -> PolicyInfo:
        """Put a policy in force, here at once and in every other worker within seconds.

        Raises:
            PolicyRefused: it has an error; the one in force stays.
            StoreUnavailable: the store does not answer.

        """
        loaded = self._policies.read(toml_text, name)
        await self.store.run([Call(None, [], [b"HSET", POLICIES, name, toml_text])])
        self._policies.put(loaded)
        return self._policies.infos([name])[0]

    async def ping(self) -> None:
        """Ask the store for a sign of life.

        Raises:
            StoreUnavailable: it gives none.

        """
        await self.store.connection.read("PING")

    async def _load_policies(self) -> None:
        stored = await self.store.connection.read_hash(POLICIES)
        self._policies.load_all({name.decode(): text.decode() for name, text in stored.items()})


def _policy_text(path: Path) -> str:
    try:
        return path.read_text(encoding="utf-8")
    except OSError as error:
        raise SettingsError([f"policies: {path} can't be read: {error.strerror}"]) from error
    except UnicodeDecodeError as error:
        raise SettingsError([f"policies: {path} can't be read: it is not UTF-8 from byte {error.start} on"]) from error
