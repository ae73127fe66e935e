"""Why a post has its score for a reader: every part of it."""

import time

import numpy as np

from scoring.edges import EdgeRows
from scoring.reduce import by_ties, edge_terms, remainder
from service.errors import NotFound
from service.feed.deadline import Deadline
from service.feed.policies import PolicyBook
from service.feed.ranker import Ranker
from service.feed.readers import hash_number
from service.feed.reasons import names_of
from service.feed.sums import crowd_sums
from service.feed.types import CrowdPart, ExplainRequest, Explanation, Factor, TiePart
from service.feed.view import View
from service.feed.visible import Gate
from service.store.records import PostRecord
from service.store.store import Store

_ALL_THE_TIME_MS = 60_000.0


class Explainer:
    """Explains scores.

    Args:
        store: the state behind all feeds.
        policies: the loaded policies.
        ranker: gathers what a feed is ranked from.

    """

    def __init__(self, store: Store, policies: PolicyBook, ranker: Ranker) -> None:
        self._store = store
        self._policies = policies
        self._ranker = ranker

    async def explain(self, request: ExplainRequest, now_ms: int) -> Explanation:
        """Take a score apart.

        Raises:
            NotFound: the reader may not see the post, or there is none.
            UnknownPolicy: the policy is not loaded.
            StoreUnavailable: the store does not answer.

        """
        return await self._ranker.with_all_kinds(lambda: self._explain(request, now_ms))

    async def _explain(self, request: ExplainRequest, now_ms: int) -> Explanation:
        t_ms = now_ms if request.as_of_ms is None else max(request.as_of_ms, now_ms)
        policy = request.policy or self._policies.default
        deadline = Deadline(_ALL_THE_TIME_MS, time.perf_counter())
        view, _ = await self._ranker.view(request.reader, policy, t_ms, deadline, profile=True)
        post = self._store.hasher.hash(request.post)
        record = (await self._ranker.reads.records([post]))[0]
        if record is None or record.id != request.post or not Gate(view.reader).lets_through(record):
            raise NotFound("this reader may not see this post, or there is no such post")
        edges = view.edges()
        edges = edges.select(edges.post == np.uint64(hash_number(post)))
        ties, share = await self._parts(view, edges, t_ms)
        crowd = self._crowd(view, record, share, t_ms)
        factors = _factors(view, edges, hash_number(post))
        total = sum(part.product for part in ties) + crowd.product
        for factor in factors:
            total *= factor.value
        return Explanation(request.reader, request.post, t_ms, policy, total, factors, ties, crowd)

    async def _parts(self, view: View, edges: EdgeRows, t_ms: int) -> tuple[list[TiePart], float]:
        """Give a part for each edge by someone known, and the share of all of them in the crowd."""
        terms = edge_terms(edges, view.circle, view.ranking, t_ms)
        people = view.circle.person[edges.row]
        names = await names_of(self._store.connection, people.tolist())
        reader = hash_number(view.reader.hash)
        columns = zip(
            people.tolist(),
            edges.code().tolist(),
            edges.time_ms().tolist(),
            terms.affinity.tolist(),
            terms.weight.tolist(),
            terms.freshness.tolist(),
            strict=True,
        )
        parts = [
            TiePart(
                actor=names[person],
                kind=self._store.kinds.names[code],
                at_ms=int(at_ms),
                affinity=affinity,
                weight=weight,
                freshness=freshness,
                product=affinity * weight * freshness,
            )
            for person, code, at_ms, affinity, weight, freshness in columns
            if person != reader
        ]
        parts.sort(key=lambda part: (-part.product, part.at_ms, part.actor))
        return parts, float(np.sum(terms.weight * terms.crowd_freshness))

    def _crowd(self, view: View, record: PostRecord, share: float, t_ms: int) -> CrowdPart:
        total = crowd_sums([record], view.ranking, t_ms)
        left = float(remainder(total, np.array([share]))[0])
        stranger = view.ranking.policy.affinity.crowd
        return CrowdPart(stranger, left, stranger * left)


def _factors(view: View, edges: EdgeRows, post: int) -> list[Factor]:
    """Give what the sum is multiplied by: the seen factor, and 0 for a post that the reader wants no more."""
    factors = [Factor("seen", _seen_factor(view, edges, post))]
    if post in view.reader.hidden(view.ranking).tolist():
        factors.append(Factor("hidden", 0.0))
    return factors


def _seen_factor(view: View, edges: EdgeRows, post: int) -> float:
    """Give the policy's factor where the post was seen and no tie has added an edge since, else 1."""
    seen_ms = view.reader.seen_ms[view.reader.seen_post == np.uint64(post)]
    renewed_ms = edges.time_ms()[by_ties(edges, view.circle)]
    if not len(seen_ms) or renewed_ms.max(initial=-np.inf) > seen_ms[0]:
        return 1.0
    return view.ranking.policy.seen_factor
