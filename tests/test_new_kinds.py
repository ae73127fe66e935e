"""Kinds that another worker registers while this one reads."""

from service.feed.types import ExplainRequest
from service.settings import BUILT_IN_POLICY
from tests.engines import ranked, running, send

NOW_MS = 1_777_885_200_000


async def test_a_kind_registered_elsewhere_counts_at_once(redis_db: str) -> None:
    """An edge of a kind this worker has never heard of counts in rows, in the crowd, in affinity and in reasons."""
    policy = BUILT_IN_POLICY.read_text()
    start = [
        {"id": "f", "type": "tie", "at": NOW_MS, "actor": "joel", "target": "mina", "relation": "follow"},
        {"id": "p", "type": "post", "at": NOW_MS, "actor": "mina", "post": "bed", "form": "note"},
    ]
    async with running(redis_db, policy) as ours, running(redis_db, policy) as other:
        await send(ours, start, NOW_MS)
        assert await ranked(ours, "joel", NOW_MS) == [("bed", 1.5)]
        crowd = {"id": "1", "type": "interaction", "at": NOW_MS, "actor": "ada", "post": "bed", "kind": "comment.photo"}
        await send(other, [crowd], NOW_MS)
        assert await ranked(ours, "joel", NOW_MS) == [("bed", 1.5 + 0.02 * 2.0)]
        tied = {"id": "2", "type": "interaction", "at": NOW_MS, "actor": "mina", "post": "bed", "kind": "share.far"}
        await send(other, [tied], NOW_MS)
        explained = await ours.explain(ExplainRequest("joel", "bed"), NOW_MS)
        assert explained.score == 1.5 + 0.02 * 2.0 + 2.0
        own = {"id": "3", "type": "interaction", "at": NOW_MS, "actor": "joel", "post": "bed", "kind": "like.twice"}
        await send(other, [own], NOW_MS)
        assert await ranked(ours, "joel", NOW_MS) == [("bed", 1.1 * 3.5 + 0.02 * 2.0)]
