"""What the HTTP edge needs of an engine and of the settings."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Protocol

from service.events.model import AnyEvent
from service.feed.types import (
    ExplainRequest,
    Explanation,
    FeedAnswer,
    FeedRequest,
    PolicyInfo,
    PopularAnswer,
    PopularRequest,
)
from service.store.verdict import Verdict


class FeedEngine(Protocol):
    """Takes events and ranks feeds; every method may raise a `WaxwaneError`."""

    async def start(self) -> None:
        """Open what the engine needs."""

    async def close(self) -> None:
        """Let go of it."""

    async def ping(self) -> None:
        """Raise `StoreUnavailable` unless the store answers."""

    async def apply(self, events: Sequence[AnyEvent], now_ms: int) -> list[Verdict]:
        """Apply events; one verdict for each, in their order."""

    async def feed(self, request: FeedRequest, now_ms: int, arrived_s: float) -> FeedAnswer:
        """Rank a page; `arrived_s` is when the call arrived, on the clock of `time.perf_counter`."""

    async def popular(self, request: PopularRequest, now_ms: int, arrived_s: float) -> PopularAnswer:
        """Rank what counts most for everybody."""

    async def exposures(self, after: str, count: int) -> list[dict[str, Any]]:
        """List what feeds have shown after an entry, oldest first."""

    async def explain(self, request: ExplainRequest, now_ms: int) -> Explanation:
        """Say why a post has its score; raise `NotFound` where the reader may not see it."""

    async def export(self, person: str, now_ms: int) -> dict[str, Any]:
        """Return all that is stored about a person."""

    async def policies(self) -> list[PolicyInfo]:
        """List the loaded policies."""

    async def put_policy(self, name: str, toml_text: str) -> PolicyInfo:
        """Load a policy; raise `PolicyRefused` where it has an error."""


class WebSettings(Protocol):
    """The settings that the edge reads."""

    @property
    def max_body_bytes(self) -> int:
        """The most bytes of a body of events."""

    @property
    def max_batch(self) -> int:
        """The most events of a call."""


@dataclass(frozen=True, slots=True)
class Limits:
    """The limits of calls, with their defaults."""

    max_body_bytes: int = 8 << 20
    max_batch: int = 1000
