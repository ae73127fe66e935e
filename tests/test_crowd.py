"""Crowd sums against direct loops, the reference running sum, and sums recomputed with pandas."""

import random
from collections import defaultdict

import numpy as np
import pytest

from scoring.bank import Bank
from scoring.crowd import raw_sums, running_sums
from scoring.curves import Curve, HalfLife
from scoring.policy import Policy
from scoring.ranking import Ranking, UnknownCodeError, compile_policy
from scoring.sums import DecayedSum
from tests.rankings import (
    DAY_MS,
    EXACT,
    FITTED,
    HORIZON_MS,
    HOUR_MS,
    KINDS,
    NOW_MS,
    WEIGHTS,
    PlainEdge,
    followed,
    hashes,
    random_edges,
    ranking,
)

LATEST_MS = NOW_MS + 300_000
POSTS = list(range(5))


def loops(edges: list[PlainEdge], compiled: Ranking, t_ms: int) -> list[float]:
    """Add up every edge of every post by itself."""
    totals = [0.0 for _ in POSTS]
    for edge in edges:
        totals[edge.post] += WEIGHTS[KINDS[edge.code]] * followed(compiled, t_ms - edge.at_ms)
    return totals


def raw(edges: list[PlainEdge], compiled: Ranking, t_ms: int) -> list[float]:
    """Sum edges as they are."""
    posts = np.array([edge.post for edge in edges], dtype=np.intp)
    return list(raw_sums(posts, hashes([edge.stamp for edge in edges]), len(POSTS), compiled, t_ms))


def running(edges: list[PlainEdge], compiled: Ranking, t_ms: int) -> list[float]:
    """Fold edges into one running sum for each post, kind and half-life, and read them as one table."""
    half_lives = compiled.bank.half_lives_ms
    kept: defaultdict[tuple[int, int], list[DecayedSum]] = defaultdict(lambda: [DecayedSum(one) for one in half_lives])
    for edge in edges:
        for one in kept[edge.post, edge.code]:
            one.update(edge.at_ms, 1.0)
    sums = running_sums(
        np.array([post for post, _ in kept], dtype=np.intp),
        np.array([code for _, code in kept], dtype=np.intp),
        np.array([some[0].as_of_ms for some in kept.values()], dtype=np.float64),
        np.array([[one.value for one in some] for some in kept.values()]).reshape(len(kept), len(half_lives)),
        len(POSTS),
        compiled,
        t_ms,
    )
    return list(sums)


@pytest.mark.parametrize("curve", [EXACT, FITTED], ids=["exact", "fitted"])
@pytest.mark.parametrize("seed", range(20))
def test_raw_edges_agree_with_loops(curve: Curve, seed: int) -> None:
    """Edges of every age, ahead of now and of weight 0 among them, sum to what loops sum them to."""
    rng, compiled = random.Random(seed), ranking(curve)
    edges = random_edges(rng, rng.choice([0, 1, 10, 60]), POSTS)
    assert raw(edges, compiled, NOW_MS) == pytest.approx(loops(edges, compiled, NOW_MS), rel=1e-9, abs=1e-12)


@pytest.mark.parametrize("curve", [EXACT, FITTED], ids=["exact", "fitted"])
@pytest.mark.parametrize("seed", range(20))
def test_running_sums_agree_with_loops(curve: Curve, seed: int) -> None:
    """Running sums fed in any order, read when no edge is ahead, hold what loops sum the edges to."""
    rng, compiled = random.Random(seed), ranking(curve)
    edges = random_edges(rng, rng.choice([0, 1, 10, 60]), POSTS)
    assert running(edges, compiled, LATEST_MS) == pytest.approx(loops(edges, compiled, LATEST_MS), rel=1e-9, abs=1e-12)


@pytest.mark.parametrize("curve", [EXACT, FITTED], ids=["exact", "fitted"])
@pytest.mark.parametrize("seed", range(10))
def test_wherever_the_raw_edges_end_the_crowd_is_the_same(curve: Curve, seed: int) -> None:
    """After every split of a post's edges into raw ones and running sums, both together are the whole."""
    rng, compiled = random.Random(seed), ranking(curve)
    edges = random_edges(rng, 24, POSTS)
    expected = loops(edges, compiled, LATEST_MS)
    for cut in range(len(edges) + 1):
        parts = zip(running(edges[:cut], compiled, LATEST_MS), raw(edges[cut:], compiled, LATEST_MS), strict=True)
        assert [older + newer for older, newer in parts] == pytest.approx(expected, rel=1e-9, abs=1e-12)


def test_as_time_passes_an_exact_crowd_halves() -> None:
    """A half-life later each sum is half of what it was, from raw edges and running sums alike."""
    compiled = ranking()
    edges = [PlainEdge(0, 1, NOW_MS), PlainEdge(1, 2, NOW_MS - 1_000), PlainEdge(1, 0, NOW_MS)]
    for total in (raw, running):
        now, later = total(edges, compiled, NOW_MS), total(edges, compiled, NOW_MS + round(12 * HOUR_MS))
        assert later == pytest.approx([value / 2.0 for value in now], rel=1e-14)
        assert now[0] == 1.0


# A stream with a burst, a tie and long silences: times from its start and weights; the sum at its last event was
# recomputed with pandas 3.1 (ewm over irregular times), as tests/test_sums.py does it.
GOLDEN = [(0.0, 1.0), (7_000.0, 4.0), (3.5 * HOUR_MS, 2.5), (3.5 * HOUR_MS, 8.0), (34 * HOUR_MS, 1.0)]
GOLDEN_LAST = (8 * DAY_MS + 1_000.0, 3.0)
GOLDEN_SUM = 3.000000016653831


@pytest.mark.parametrize("split", range(7))
def test_the_golden_stream_has_the_sum_that_pandas_gives(split: int) -> None:
    """Each weight as a kind of its own, the first `split` edges in running sums: the recomputed sum."""
    stream = [*GOLDEN, GOLDEN_LAST]
    kinds = [f"k{place}" for place in range(len(stream))]
    weights = {kind: weight for kind, (_, weight) in zip(kinds, stream, strict=True)}
    bank = Bank((HOUR_MS, 6 * HOUR_MS))
    compiled = compile_policy(Policy("golden", weights, HalfLife(6 * HOUR_MS)), bank, kinds, HORIZON_MS)
    times = [NOW_MS + int(after_ms) for after_ms, _ in stream]
    t_ms = times[-1]
    older, newer = np.arange(split), np.arange(split, len(stream))
    stamps = hashes([times[code] << 16 | code for code in newer.tolist()])
    places = np.zeros(len(stream), dtype=np.intp)
    total = raw_sums(places[newer], stamps, 1, compiled, t_ms) + running_sums(
        places[older], older, np.array(times, dtype=np.float64)[older], np.ones((split, 2)), 1, compiled, t_ms
    )
    assert total.tolist() == pytest.approx([GOLDEN_SUM], rel=1e-13)


def test_posts_without_edges_have_no_crowd() -> None:
    """Posts never acted on sum to 0.0, and no posts to nothing."""
    compiled = ranking()
    assert raw([], compiled, NOW_MS) == running([], compiled, NOW_MS) == [0.0] * len(POSTS)
    nothing = np.empty(0, dtype=np.intp)
    assert raw_sums(nothing, hashes([]), 0, compiled, NOW_MS).tolist() == []


def test_a_sum_of_a_kind_newer_than_the_policy_is_not_guessed() -> None:
    """Raw edges and running sums of an unknown code ask for a new compilation."""
    edges = [PlainEdge(0, len(KINDS), NOW_MS)]
    for total in (raw, running):
        with pytest.raises(UnknownCodeError, match=str(len(KINDS))):
            total(edges, ranking(), NOW_MS)
