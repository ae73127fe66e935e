"""The reduction against dicts and loops, one edge at a time."""

import random
from collections import defaultdict
from dataclasses import dataclass, field

import numpy as np
import pytest

from scoring.affinity import BLOCK, FOLLOW, FRIEND, MUTE, NONE, Circle
from scoring.reduce import by_hash, by_ties, edge_terms, places_in, reduce_edges, remainder, sum_by
from tests.rankings import (
    EXACT,
    FITTED,
    KINDS,
    NOW_MS,
    WEIGHTS,
    PlainEdge,
    as_rows,
    followed,
    hashes,
    left_of,
    random_edges,
    ranking,
)

COLLIDING = [7 << 32, (7 << 32) + 5, (7 << 32) + 1, 7 << 48, 0, 1, 2**64 - 1, 2**64 - 2, 1 << 63]
"""Hashes that share their upper 32 bits, or only the upper or the lower 16 of these."""


@dataclass
class Plain:
    """What one post's edges come to."""

    known: float = 0.0
    share: float = 0.0
    tied_ms: list[int] = field(default_factory=list)


def by_loops(rows: list[list[PlainEdge]], circle: Circle, curve_name: str) -> dict[int, Plain]:
    """Add up edge by edge: what counts for the reader, what is in the crowd, when ties acted."""
    compiled = ranking(CURVES[curve_name])
    posts: defaultdict[int, Plain] = defaultdict(Plain)
    for place, row in enumerate(rows):
        for edge in row:
            post, weight, age_ms = posts[edge.post], WEIGHTS[KINDS[edge.code]], float(NOW_MS - edge.at_ms)
            post.known += circle.affinity[place] * weight * left_of(compiled.policy.curve, age_ms)
            post.share += weight * followed(compiled, age_ms)
            if circle.relation[place] in (FOLLOW, FRIEND):
                post.tied_ms.append(edge.at_ms)
    return {number: post for number, post in posts.items() if post.tied_ms}


CURVES = {"exact": EXACT, "fitted": FITTED}


def random_circle(rng: random.Random, people: int) -> Circle:
    relation = [rng.choice([NONE, FOLLOW, FRIEND, MUTE, BLOCK]) for _ in range(people)]
    affinity = [0.0 if one in (MUTE, BLOCK) else rng.choice([0.0, 0.02, 1.0, 2.5, 10.0]) for one in relation]
    return Circle(hashes(list(range(people))), np.array(relation, dtype=np.uint8), np.array(affinity))


@pytest.mark.parametrize("curve_name", CURVES)
def test_random_rows_agree_with_loops(curve_name: str) -> None:
    """Posts, sums and times of 200 random circles are those of the loops, with weights and affinities of 0 too."""
    rng, compiled = random.Random(3), ranking(CURVES[curve_name])
    for _ in range(200):
        circle = random_circle(rng, rng.randrange(1, 6))
        rows = [random_edges(rng, rng.choice([0, 1, 5, 20]), COLLIDING) for _ in circle.person]
        expected = by_loops(rows, circle, curve_name)
        found = reduce_edges(as_rows(rows), circle, compiled, NOW_MS)
        assert found.post.tolist() == sorted(expected)
        plain = [expected[post] for post in found.post.tolist()]
        assert found.known.tolist() == pytest.approx([one.known for one in plain], rel=1e-12, abs=1e-300)
        assert found.share.tolist() == pytest.approx([one.share for one in plain], rel=1e-9, abs=1e-15)
        assert found.newest_ms.tolist() == [max(one.tied_ms) for one in plain]


def test_no_edges_are_no_candidates() -> None:
    """A circle that never did anything gives empty columns, and so does one of strangers alone."""
    circle = Circle(hashes([1]), np.array([NONE], dtype=np.uint8), np.array([0.02]))
    several: list[list[list[PlainEdge]]] = [[[]], [[PlainEdge(5, 0, NOW_MS)]]]
    for rows in several:
        found = reduce_edges(as_rows(rows), circle, ranking(), NOW_MS)
        assert [len(column) for column in (found.post, found.known, found.share, found.newest_ms)] == [0, 0, 0, 0]


def test_a_tie_without_affinity_makes_a_candidate() -> None:
    """Eligibility is by the tie, not by what it adds: a post with a known part of 0 is a candidate."""
    circle = Circle(hashes([1]), np.array([FOLLOW], dtype=np.uint8), np.array([0.0]))
    found = reduce_edges(as_rows([[PlainEdge(5, 1, NOW_MS)]]), circle, ranking(), NOW_MS)
    assert (found.post.tolist(), found.known.tolist(), found.share.tolist()) == ([5], [0.0], [1.0])


def test_only_ties_make_a_post_newer() -> None:
    """The newest edge is the newest by someone followed or befriended; a muted person's later one does not count."""
    relation = np.array([FOLLOW, MUTE, NONE], dtype=np.uint8)
    circle = Circle(hashes([1, 2, 3]), relation, np.array([1.0, 0.0, 0.5]))
    rows = [[PlainEdge(5, 0, 10), PlainEdge(5, 0, 30)], [PlainEdge(5, 0, 90)], [PlainEdge(5, 0, 80)]]
    found = reduce_edges(as_rows(rows), circle, ranking(), NOW_MS)
    assert found.newest_ms.tolist() == [30.0]
    assert by_ties(as_rows(rows), circle).tolist() == [True, True, False, False]


def test_terms_are_the_factors_of_the_formula() -> None:
    """A comment half a day old by a friend: affinity 2, weight 1, freshness 1/2; one ahead of now is wholly fresh."""
    circle = Circle(hashes([1]), np.array([FRIEND], dtype=np.uint8), np.array([2.0]))
    rows = as_rows([[PlainEdge(5, 1, NOW_MS - 43_200_000), PlainEdge(5, 3, NOW_MS + 300_000)]])
    terms = edge_terms(rows, circle, ranking(), NOW_MS)
    assert (terms.affinity.tolist(), terms.weight.tolist()) == ([2.0, 2.0], [1.0, 0.0])
    assert terms.freshness.tolist() == terms.crowd_freshness.tolist() == [0.5, 1.0]


def test_a_fitted_curve_is_exact_for_ties_and_followed_for_the_crowd() -> None:
    """Where the bank only follows the curve, both values stand, within the certified error."""
    circle = Circle(hashes([1]), np.array([FRIEND], dtype=np.uint8), np.array([2.0]))
    compiled = ranking(FITTED)
    terms = edge_terms(as_rows([[PlainEdge(5, 1, NOW_MS - 21_600_000)]]), circle, compiled, NOW_MS)
    assert terms.freshness.tolist() == [0.5]
    assert 0.0 < abs(terms.crowd_freshness[0] - 0.5) <= compiled.fit.error < 0.005


def orders_to_sort() -> list[list[int]]:
    rng = random.Random(5)
    pool = COLLIDING + [rng.randrange(2**64) for _ in range(20)]
    low = [rng.randrange(2**32) for _ in range(50)]
    drawn = [[rng.choice(pool) for _ in range(rng.choice([2, 3, 10, 200]))] for _ in range(150)]
    return [[], [0], low, [*low, 2**63], *drawn]


def test_places_by_hash_are_a_stable_sort() -> None:
    """Radix order is that of a stable sort of whole hashes, with equal ones, and ones that share their upper bits."""
    for values in orders_to_sort():
        assert by_hash(hashes(values)).tolist() == sorted(range(len(values)), key=values.__getitem__)


def test_found_places_agree_with_a_dict() -> None:
    """Each hash wanted is found at its place or left out, repeated ones every time; both ends of the list count."""
    rng = random.Random(8)
    for _ in range(200):
        ordered = sorted({rng.choice(COLLIDING) for _ in range(rng.randrange(7))})
        wanted = [rng.choice([*COLLIDING, 5, 2**40]) for _ in range(rng.randrange(7))]
        places = {value: place for place, value in enumerate(ordered)}
        expected = [(places[value], at) for at, value in enumerate(wanted) if value in places]
        place, at = places_in(hashes(ordered), hashes(wanted))
        assert list(zip(place.tolist(), at.tolist(), strict=True)) == expected


@pytest.mark.parametrize("seed", range(5))
def test_sums_by_place_agree_with_a_loop(seed: int) -> None:
    """Places without values have 0."""
    rng = random.Random(seed)
    pairs = [(rng.randrange(9), rng.choice([0.0, 0.5, -2.25, 3.0])) for _ in range(rng.choice([1, 30]))]
    expected = [sum(value for place, value in pairs if place == wanted) for wanted in range(9)]
    found = sum_by(np.array([place for place, _ in pairs]), np.array([value for _, value in pairs]), 9)
    assert found.tolist() == expected


def test_sums_of_nothing_are_zeros() -> None:
    """Without values every place has the number 0.0."""
    found = sum_by(np.empty(0, dtype=np.intp), np.empty(0), 3)
    assert (found.tolist(), found.dtype) == ([0.0, 0.0, 0.0], np.dtype(np.float64))


def test_rounding_is_no_crowd() -> None:
    """Where the circle made every edge, sums in two orders leave exactly 0, however their last bits differ."""
    rng = random.Random(13)
    values = [[rng.random() * 2.0 ** rng.randrange(-40, 3) for _ in range(60)] for _ in range(300)]
    crowd = np.array([sum(some) for some in values])
    share = np.array([sum(sorted(some)) for some in values])
    assert np.any(crowd > share)
    assert np.any(crowd < share)
    assert not remainder(crowd, share).any()


def test_a_small_crowd_is_a_crowd() -> None:
    """What the crowd holds besides is left to its last digits; unknown bounds stay unknown, nothing goes below 0."""
    crowd = np.array([1.0 + 1e-9, 5.0, np.inf, 0.0, 0.0, -1e-5, 1.0])
    share = np.array([1.0, 0.0, 3.0, 0.0, 2.0, 0.0, 1.5])
    assert remainder(crowd, share).tolist() == pytest.approx([1e-9, 5.0, np.inf, 0.0, 0.0, 0.0, 0.0], rel=1e-6)


def test_remainders_never_fall_as_the_crowd_grows() -> None:
    """A greater crowd leaves no less: a bound of the crowd bounds the remainder."""
    crowd = np.concatenate(([0.0], np.geomspace(1e-20, 1e20, 4_001), 1.0 + np.linspace(-1e-11, 1e-11, 2_001)))
    crowd.sort()
    for share in (0.0, 1e-9, 1.0, 3.5e7):
        left = remainder(crowd, np.full(len(crowd), share))
        assert np.all(np.diff(left) >= 0.0)
