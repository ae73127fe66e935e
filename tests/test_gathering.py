"""The compiled passes against what they are defined by: NumPy's, and the plain formulas."""

import math
import random

import numpy as np
import pytest

import build_passes
from scoring import compiled
from scoring.affinity import BLOCK, FOLLOW, FRIEND, MUTE, NONE, Circle
from scoring.compiled import BrokenValueError, UnknownCodeError
from scoring.edges import MARKER, RETRACTED
from scoring.gathering import Bounds, Gathering, Reader
from scoring.noise import multipliers
from scoring.ranking import Ranking
from scoring.reduce import reduce_edges, remainder
from scoring.topk import tie_key
from service.store.records import read_record
from tests.rankings import FITTED, KINDS, NOW_MS, PlainEdge, as_rows, hashes, random_edges, ranking
from tests.shortlists import AUTHOR, READER, PlainPost, random_world, reader

NOTHING = hashes([])
NEVER = np.empty(0)


def packed(edges: list[PlainEdge]) -> bytes:
    return b"".join(edge.packed() for edge in edges)


def test_the_library_is_built_from_the_sources() -> None:
    """The library that is loaded was compiled from the C files beside it."""
    assert compiled.built_from() == build_passes.digest()


def test_the_decay_agrees_with_the_exponential() -> None:
    """2^(-x) at whole, tiny, huge and random x, to four units in the last place, as NumPy and the C library have it."""
    chosen = [0.0, 5e-324, 1e-17, 0.5, 1.0, 7.0, 999.999, 1000.0, 1022.5, 1074.0, 2000.0, math.inf]
    half_lives = np.concatenate((chosen, np.random.default_rng(1).random(5_000) * 60, np.arange(1024) / 512))
    decays = np.array([compiled.passes.decay(value) for value in half_lives.tolist()])
    np.testing.assert_allclose(decays, np.exp2(-half_lives), rtol=4 * 2.0**-52, atol=0.0)
    assert decays[[0, 4, 5]].tolist() == [1.0, 0.5, 2.0**-7]


def test_scores_are_rounded_alike() -> None:
    """The digits that count in an order are the same in both languages."""
    rng = random.Random(2)
    scores = [
        0.0,
        5.25,
        0.1 + 0.2,
        1e-300,
        1e300,
        *(rng.expovariate(1.0) * 10 ** rng.randrange(-9, 9) for _ in range(999)),
    ]
    assert [compiled.passes.tie_key(score) for score in scores] == [tie_key(score) for score in scores]


@pytest.mark.parametrize("policy", [ranking(), ranking(FITTED)], ids=["exact", "fitted"])
@pytest.mark.parametrize("posts", [1, 7, 3_000])
def test_candidates_are_those_of_the_reduction(policy: Ranking, posts: int) -> None:
    """In 30 random worlds with every relation, added at once or row by row, the candidates equal NumPy's."""
    rng = random.Random(posts)
    for number in range(30):
        numbers = [rng.getrandbits(64) for _ in range(posts)]
        people = rng.randrange(1, 9)
        rows = [random_edges(rng, rng.choice([0, 1, 5, 700]), numbers) for _ in range(people)]
        relation = np.array([rng.choice([NONE, FOLLOW, FRIEND, MUTE, BLOCK]) for _ in rows], dtype=np.uint8)
        affinity = np.array([rng.random() * 10 for _ in rows])
        expected = reduce_edges(as_rows(rows), Circle(hashes(list(range(people))), relation, affinity), policy, NOW_MS)
        gathering = Gathering(policy, NOW_MS)
        step = 1 if number % 2 else people
        for at in range(0, people, step):
            part = slice(at, at + step)
            gathering.add([packed(row) for row in rows[part]], affinity[part], relation[part])
        found = gathering.candidates()
        assert found.post.tolist() == expected.post.tolist()
        assert found.newest_ms.tolist() == expected.newest_ms.tolist()
        np.testing.assert_allclose(found.known, expected.known, rtol=1e-12)
        np.testing.assert_allclose(found.share, expected.share, rtol=1e-12)
        assert gathering.counts() == (
            len({edge.post for row in rows for edge in row}),
            sum(map(len, rows)),
            0,
        )


def test_what_was_taken_back_and_markers_do_not_count() -> None:
    """A retracted edge adds nothing, a marker of an erasure is counted as one and adds nothing either."""
    edges = [PlainEdge(9, 1, NOW_MS, RETRACTED), PlainEdge(9, MARKER, NOW_MS), PlainEdge(8, 1, NOW_MS)]
    gathering = Gathering(ranking(), NOW_MS)
    gathering.add([packed(edges)], np.ones(1), np.array([FOLLOW], dtype=np.uint8))
    assert gathering.candidates().post.tolist() == [8]
    assert gathering.counts() == (1, 3, 1)


def test_a_kind_newer_than_the_policy_is_told() -> None:
    """An edge with a code past the compiled kinds raises, in a row and in a post's value."""
    gathering = Gathering(ranking(), NOW_MS)
    tie = np.array([FOLLOW], dtype=np.uint8)
    with pytest.raises(UnknownCodeError):
        gathering.add([packed([PlainEdge(9, len(KINDS), NOW_MS)])], np.ones(1), tie)
    gathering = Gathering(ranking(), NOW_MS)
    gathering.add([packed([PlainEdge(9, 1, NOW_MS)])], np.ones(1), tie)
    gathering.bound(Bounds(1.0, NOTHING, NEVER, NOTHING, NEVER))
    post = PlainPost(9, "p", NOW_MS, crowd=[PlainEdge(9, len(KINDS), NOW_MS)])
    with pytest.raises(UnknownCodeError):
        gathering.judge(gathering.take(1), [post.packed(ranking().bank.half_lives_ms)], reader())


def test_a_broken_value_is_told() -> None:
    """A post's value cut short anywhere raises; nothing is read from beyond it."""
    post = PlainPost(9, "p", NOW_MS, crowd=random_edges(random.Random(1), 40, [9]), folded=20)
    whole = post.packed(ranking().bank.half_lives_ms)
    for length in range(1, len(whole)):
        gathering = Gathering(ranking(), NOW_MS)
        gathering.add([packed([PlainEdge(9, 1, NOW_MS)])], np.ones(1), np.array([FOLLOW], dtype=np.uint8))
        gathering.bound(Bounds(1.0, NOTHING, NEVER, NOTHING, NEVER))
        with pytest.raises(BrokenValueError):
            gathering.judge(gathering.take(1), [whole[:length]], reader())


@pytest.mark.parametrize("temperature", [0.0, 0.7])
def test_candidates_are_taken_in_order_of_their_bounds(temperature: float) -> None:
    """Taken by any steps, all candidates come, in falling order of (known + stranger · remainder) · noise · factor."""
    rng, policy = random.Random(3), ranking(stranger=0.5)
    for count in (1, 5, 300, 5_000):
        world = random_world(rng, policy, count)
        bound = world.bound(listed=count // 3)
        world.temperature, world.seed = temperature, rng.getrandbits(64)
        gathering = world.gathering(bound)
        candidates = gathering.candidates()
        noise = multipliers(world.seed, candidates.post, temperature)
        factor = {post.number: post.factor for post in world.posts}
        factors = np.array([factor[post] for post in candidates.post.tolist()])
        reach = candidates.known + 0.5 * remainder(bound.of(candidates.post), candidates.share)
        bounds = np.where(factors > 0.0, reach, 0.0) * noise * factors
        expected = np.sort(bounds)[::-1]
        taken: list[int] = []
        while (next_bound := gathering.next_bound()) >= 0.0:
            assert next_bound == pytest.approx(expected[len(taken)], rel=1e-9)
            taken += [int.from_bytes(post, "little") for post in gathering.take(rng.choice([1, 3, 48, 700]))]
        assert sorted(taken) == candidates.post.tolist()
        by_post = dict(zip(candidates.post.tolist(), bounds.tolist(), strict=True))
        assert [by_post[post] for post in taken] == pytest.approx(expected.tolist(), rel=1e-9)


def test_posts_left_out_are_not_taken() -> None:
    """Without some, all others are taken; with only some, just those, named twice or unknown ones among them."""
    world = random_world(random.Random(4), ranking(), 50)
    every = {post.number.to_bytes(8, "little") for post in world.posts}
    some = sorted(every)[:7]
    for left, expected in ((False, every - set(some)), (True, set(some))):
        gathering = world.gathering(world.bound())
        named = [*some, some[0], b"unknown!"]
        if left:
            gathering.only(named)
        else:
            gathering.without(named)
        assert set(gathering.take(100)) == expected
        assert gathering.next_bound() == -1.0


def test_a_gathering_starts_empty_whoever_used_its_memory() -> None:
    """Memory that was used before holds nothing of it."""
    for size in (3_000, 10):
        gathering = random_world(random.Random(size), ranking(), size).gathering(None)
        assert len(gathering.candidates().post) == size
        assert len(gathering.take(5_000)) == size
        del gathering


@pytest.mark.parametrize("relation", [NONE, FOLLOW, FRIEND, MUTE, BLOCK])
@pytest.mark.parametrize("audience", ["everyone", "followers", "friends", "nobody"])
def test_who_may_see_a_post(relation: int, audience: str) -> None:
    """For each relation, audience and mark, the compiled rule is the contract's table."""
    for mark in (None, FRIEND, BLOCK):
        for flags, author in ((2, AUTHOR), (0, AUTHOR), (3, AUTHOR), (2, READER)):
            post = PlainPost(9, "p", NOW_MS, author, audience, flags, tied=[(0, PlainEdge(9, 1, NOW_MS))])
            gathering = Gathering(ranking(), NOW_MS)
            gathering.add([packed([post.tied[0][1]])], np.ones(1), np.array([FOLLOW], dtype=np.uint8))
            gathering.by_newest()
            marks = b"" if mark is None else PlainEdge(AUTHOR, mark, NOW_MS).packed()
            people = Circle(hashes([AUTHOR, 77]), np.array([relation, NONE], dtype=np.uint8), np.zeros(2))
            value = post.packed(ranking().bank.half_lives_ms)
            assert read_record(value).audience == audience
            gathering.judge(gathering.take(1), [value], Reader(READER, people, marks))
            allowed = {
                "everyone": True,
                "followers": relation in (FOLLOW, FRIEND),
                "friends": mark == FRIEND,
                "nobody": False,
            }[audience]
            blocked = relation in (MUTE, BLOCK) or mark == BLOCK
            assert gathering.found_count() == int(allowed and not blocked and flags == 2 and author == AUTHOR)
