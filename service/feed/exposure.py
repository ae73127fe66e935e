"""What feeds have shown, and with what chance: logged so that policies can be evaluated later.

An estimate of what another policy would have done needs the chance with which this one showed what it showed. Where
every candidate was looked up the chances are those of the closed form; where not, they lie between two that are.
"""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import orjson
from numpy.typing import NDArray

from scoring.gathering import Gathering
from scoring.noise import slot_chances
from service.feed.pages import Session
from service.feed.types import FeedAnswer
from service.store import calls
from service.store.store import Store
from service.times import format_ms

_AT_ONCE = 500


@dataclass(frozen=True, slots=True)
class Pool:
    """What a list was drawn from.

    Attributes:
        scores: of all candidates that were looked up and may be seen, shape (n,).
        unseen: most that the others weigh together, as a multiple of the greatest weight.
        temperature: of the randomness.

    """

    scores: NDArray[np.float64]
    unseen: float
    temperature: float

    @classmethod
    def of(cls, gathering: Gathering, temperature: float) -> "Pool":
        """Make the pool of what a gathering has found."""
        scores = np.array([score for _, score, _ in gathering.found(gathering.found_count())])
        greatest = float(scores.max(initial=0.0))
        unseen = gathering.unseen(greatest, temperature) if temperature and greatest else 0.0
        return cls(scores, unseen, temperature)

    def chances(self, chosen: Sequence[float]) -> tuple[list[float], list[float]]:
        """Give for each place, in order, the least and the greatest chance with which it was given as it was."""
        scores = np.array(chosen, dtype=np.float64)
        least, most = (slot_chances(scores, self.scores, self.temperature, mass) for mass in (self.unseen, 0.0))
        return least.tolist(), most.tolist()


class ExposureLog:
    """Logs what feeds have shown.

    Args:
        store: keeps the log.

    """

    def __init__(self, store: Store) -> None:
        self._store = store

    async def log(
        self, reader: bytes, session: Session, answer: FeedAnswer, pools: dict[str, Pool], served_ms: int
    ) -> None:
        """Log a page.

        Args:
            reader: the reader's hash.
            session: the page's.
            answer: the page.
            pools: what its posts were drawn from, by their source.
            served_ms: now, Unix milliseconds.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        slots: list[dict[str, Any]] = [
            {"place": session.offset + place, "post": item.post, "score": item.score, "source": item.source or "tie"}
            for place, item in enumerate(answer.items, 1)
        ]
        for source, pool in pools.items():
            mine = [slot for slot in slots if slot["source"] == source]
            for slot, least, most in zip(mine, *pool.chances([slot["score"] for slot in mine]), strict=True):
                slot["chance"], slot["chance_at_least"] = most, least
        document = {
            "served_at": format_ms(served_ms),
            "reader": answer.reader,
            "session": session.key.hex(),
            "as_of": format_ms(answer.as_of_ms),
            "policy": answer.policy,
            "temperature": max((pool.temperature for pool in pools.values()), default=0.0),
            "complete": answer.complete,
            "slots": slots,
        }
        await self._store.run([calls.log_exposure(reader, orjson.dumps(document))])

    async def of_person(self, reader: bytes) -> list[dict[str, Any]]:
        """Give all logged pages of a reader, by hash, oldest first.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        found: list[dict[str, Any]] = []
        after = b"0-0"
        while True:
            entries: Any = (await self._store.run([calls.read_exposures(after, _AT_ONCE)]))[0]
            found += [orjson.loads(fields[3]) for _, fields in entries if fields[1] == reader]
            if len(entries) < _AT_ONCE:
                return found
            after = entries[-1][0]

    async def read(self, after: str, count: int) -> list[dict[str, Any]]:
        """Give up to `count` logged pages after the one with this id, oldest first.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        [entries] = await self._store.run([calls.read_exposures(after.encode(), count)])
        found: list[dict[str, Any]] = [
            {"id": number.decode(), **orjson.loads(fields[3])}
            for number, fields in entries  # type: ignore[attr-defined]  # what XRANGE answers
        ]
        return found
