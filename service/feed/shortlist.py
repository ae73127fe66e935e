"""Look candidates up in order of their bounds until the best are certain."""

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from scoring.crowd import raw_sums, running_sums
from scoring.ranking import Ranking
from scoring.reduce import Candidates, remainder
from scoring.topk import ByBound, kth_greatest, order_key, settled
from service.feed.board import CrowdBound
from service.feed.deadline import Deadline
from service.feed.reads import Reads
from service.feed.visible import Gate
from service.store.kinds import CODE_MASK
from service.store.records import PostRecord, crowd_state

FIRST_BATCH = 48
NEWEST_BATCH = 2000


@dataclass(frozen=True, slots=True)
class Found:
    """A post that the reader may see.

    `score` is the contract's, seen factor included; `order` is what it stands in order by, with randomness.
    """

    hash: bytes
    record: PostRecord
    score: float
    order: float


@dataclass(slots=True)
class Shortlist:
    """What was found.

    Attributes:
        found: visible posts, the best first.
        certain: how many of them, from the front, are certainly the best there are.
        exhausted: whether every candidate was looked up.

    """

    found: list[Found] = field(default_factory=list)
    certain: int = 0
    exhausted: bool = False


def crowd_sums(records: list[PostRecord], ranking: Ranking, t_ms: int) -> NDArray[np.float64]:
    """Compute the weighted, decayed sum over every edge of each post, shape (n,)."""
    state = crowd_state(records, len(ranking.bank.half_lives_ms))
    raw = raw_sums(state.edge_post, state.edge_stamp, len(records), ranking, t_ms)
    kinds = (state.kind_code & CODE_MASK).astype(np.intp)
    return raw + running_sums(state.kind_post, kinds, state.kind_as_of_ms, state.kind_sums, len(records), ranking, t_ms)


class Shortlister:
    """Looks up one feed's candidates.

    Args:
        reads: fetches for this worker.
        gate: says which posts the reader may see.
        ranking: the compiled policy.
        t_ms: the time of the feed, Unix milliseconds.
        deadline: ends the work.

    """

    def __init__(self, reads: Reads, gate: Gate, ranking: Ranking, t_ms: int, deadline: Deadline) -> None:
        self._reads = reads
        self._gate = gate
        self._ranking = ranking
        self._t_ms = t_ms
        self._deadline = deadline

    async def best(
        self,
        candidates: Candidates,
        factors: NDArray[np.float64],
        noise: NDArray[np.float64],
        bound: CrowdBound,
        need: int,
    ) -> Shortlist:
        """Find the best candidates by score.

        Args:
            candidates: n posts.
            factors: what each score is multiplied by, shape (n,).
            noise: what its place in the order is multiplied by besides, shape (n,).
            bound: of the crowd's sums.
            need: how many posts are wanted.

        Returns:
            At least `need` certain posts, unless there are fewer or the deadline passed.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        stranger = self._ranking.policy.affinity.crowd
        most = remainder(bound.of(candidates.post), candidates.share) if stranger else np.zeros(len(candidates.post))
        reach = (candidates.known + stranger * most) * noise
        bounds = np.where(factors > 0.0, reach, 0.0) * factors
        batch = max(FIRST_BATCH, need + 16)
        order = ByBound(bounds, 4 * batch)
        shortlist, at = Shortlist(), 0
        while at < len(order) and not self._enough(shortlist, need, order.bound(at)):
            if at and self._deadline.passed():
                break
            chosen = order.take(at, batch)
            shortlist.found += await self._look_up(candidates, factors, noise, chosen)
            at, batch = at + len(chosen), min(2 * batch, NEWEST_BATCH)
        shortlist.exhausted = at >= len(order)
        shortlist.found.sort(key=lambda one: order_key(one.order, one.record.posted_ms, one.record.id))
        next_bound = 0.0 if shortlist.exhausted else order.bound(at)
        shortlist.certain = (
            len(shortlist.found)
            if shortlist.exhausted
            else sum(settled(one.order, next_bound) for one in shortlist.found)
        )
        return shortlist

    async def newest(self, candidates: Candidates) -> Shortlist:
        """Find the candidates posted last: every one is looked up, those with the newest edges first."""
        shortlist, order = Shortlist(), ByBound(candidates.newest_ms, NEWEST_BATCH)
        ones, at = np.ones(len(order)), 0
        while at < len(order) and not (at and self._deadline.passed()):
            chosen = order.take(at, NEWEST_BATCH)
            shortlist.found += await self._look_up(candidates, ones, ones, chosen)
            at += len(chosen)
        shortlist.found.sort(key=lambda one: (-one.record.posted_ms, one.record.id.encode()))
        shortlist.exhausted = at >= len(order)
        shortlist.certain = len(shortlist.found) if shortlist.exhausted else 0
        return shortlist

    def _enough(self, shortlist: Shortlist, need: int, next_bound: float) -> bool:
        return settled(kth_greatest([one.order for one in shortlist.found], need), next_bound)

    async def _look_up(
        self,
        candidates: Candidates,
        factors: NDArray[np.float64],
        noise: NDArray[np.float64],
        chosen: NDArray[np.intp],
    ) -> list[Found]:
        packed = candidates.post[chosen].astype("<u8").tobytes()
        hashes = [packed[at : at + 8] for at in range(0, len(packed), 8)]
        looked_up = zip(chosen.tolist(), hashes, await self._reads.posts(hashes), strict=True)
        shown = [(place, post, record) for place, post, record in looked_up if self._gate.lets_through(record)]
        records = [record for _, _, record in shown if record is not None]
        places = np.array([place for place, _, _ in shown], dtype=np.intp)
        left = remainder(crowd_sums(records, self._ranking, self._t_ms), candidates.share[places])
        scores = (candidates.known[places] + self._ranking.policy.affinity.crowd * left) * factors[places]
        orders = scores * noise[places]
        return [
            Found(post, record, score, order)
            for (_, post, _), record, score, order in zip(shown, records, scores.tolist(), orders.tolist(), strict=True)
        ]
