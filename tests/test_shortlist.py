"""Look-ups over small worlds against brute force: what is called certain is, and no more is fetched than needed."""

import random

import numpy as np
import pytest

from scoring.ranking import Ranking
from service.feed import board, shortlist
from service.feed.board import CrowdBound
from service.feed.shortlist import Shortlist
from service.store.records import read_item
from tests.rankings import FITTED, NOW_MS, PlainEdge, hashes, ranking
from tests.shortlists import HIDDEN, FakeConnection, PlainPost, World, random_world, shortlister

COMMENT, HIDE = 1, 3
NO_BOARD = CrowdBound(hashes([]), np.empty(0), np.inf)
POLICIES = {
    "exact": ranking(),
    "fitted": ranking(FITTED),
    "no strangers": ranking(stranger=0.0),
    "strangers first": ranking(stranger=1.0),
}


async def best(world: World, bound: CrowdBound, need: int, looks: float = np.inf) -> tuple[Shortlist, FakeConnection]:
    """Find a world's best posts."""
    finder, connection = shortlister(world, bound, looks=looks)
    return await finder.best(need), connection


def names(found: Shortlist, count: int | None = None) -> list[str]:
    return [read_item(one.value)[0] for one in found.found[:count]]


def assert_true(world: World, found: Shortlist) -> None:
    """Hold what was found against brute force: the certain ones in their order, every score, nothing hidden."""
    expected = world.feed()
    certain = min(found.certain, len(found.found))
    assert names(found, certain) == [name for name, _ in expected[:certain]]
    scores = dict(expected)
    assert len(set(names(found))) == len(found.found)
    assert [one.score for one in found.found] == pytest.approx(
        [scores[name] for name in names(found)], rel=1e-9, abs=1e-12
    )


@pytest.mark.parametrize("policy", POLICIES)
async def test_certain_is_never_said_of_a_wrong_answer(policy: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """In 600 random worlds a policy, with short boards, changed posts and noise, the certain are brute force's best."""
    monkeypatch.setattr(shortlist, "FIRST_BATCH", 1)
    rng, early = random.Random(policy), 0
    for number in range(600):
        world = random_world(rng, POLICIES[policy], rng.choice([1, 5, 40, 70]))
        listed, need = rng.choice([0, 1, 5, 10**6]), rng.randrange(1, 6)
        monkeypatch.setattr(board, "LISTED", max(1, listed))
        if number % 3 == 0:
            world.make_noise(number, 0.5)
        changed = [post.number for post in world.posts if rng.random() < rng.choice([0.0, 0.1])]
        found, connection = await best(world, world.bound(listed=listed, changed=changed), need)
        assert_true(world, found)
        assert found.certain >= min(need, len(world.feed()))
        early += len(connection.asked) < len(world.posts)
        assert found.exhausted == (len(connection.asked) == len(world.posts))
    assert early > 40


@pytest.mark.parametrize("policy", POLICIES)
async def test_a_deadline_leaves_only_what_is_proved(policy: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """Ended after any batch, what is called certain is right, and with boards unknown it is nothing at all."""
    monkeypatch.setattr(shortlist, "FIRST_BATCH", 1)
    rng = random.Random(policy)
    for _ in range(60):
        world = random_world(rng, POLICIES[policy], 150)
        for looks in (0, 1):
            found, connection = await best(world, world.bound(), need=1, looks=looks)
            assert_true(world, found)
            assert len(connection.asked) <= (17 if looks == 0 else 17 + 34)
    world = random_world(rng, POLICIES["exact"], 150)
    found, connection = await best(world, NO_BOARD, need=1, looks=0)
    assert (found.certain, found.exhausted, len(connection.asked)) == (0, False, 17)
    assert_true(world, found)


def falling_world(count: int, policy: Ranking) -> World:
    """Make posts by one tie, each an hour and a millisecond older than the one before, without crowds."""
    posts = []
    for place in range(count):
        at_ms = NOW_MS - place * 3_600_001
        tied = [(0, PlainEdge(1 + place, COMMENT, at_ms))]
        posts.append(PlainPost(1 + place, f"p{place:04}", at_ms, tied=tied))
    return World(posts, [1.0], policy)


def with_crowd(world: World, place: int, worth: float) -> World:
    """Give one post a crowd of comments now, each worth 0.02, that are worth as much together."""
    edges = round(worth / 0.02)
    post = world.posts[place]
    post.crowd = [PlainEdge(post.number, COMMENT, NOW_MS) for _ in range(edges)]
    return world


@pytest.mark.parametrize("worth", [0.86, 0.88, 0.90, 5.0])
@pytest.mark.parametrize("known", ["listed", "unlisted", "changed"])
async def test_a_crowd_far_down_the_ties_decides_the_kth_place(
    worth: float, known: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    """The last of 600 by ties, lifted to about the third place by strangers, is found however the board knows of it.

    The third post by ties has 2^(-2/12) = 0.89 and is the third, or is pushed out by the crowd's.
    """
    world = with_crowd(falling_world(600, POLICIES["exact"]), 599, worth)
    monkeypatch.setattr(board, "LISTED", 500)
    changed = [world.posts[599].number] if known == "changed" else []
    found, connection = await best(world, world.bound(listed=0 if known == "unlisted" else 500, changed=changed), 3)
    third = "p0599" if 0.89 < worth < 1.0 else "p0002" if worth < 0.89 else "p0001"
    assert names(found, 3)[2] == third == world.feed()[2][0]
    assert ("p0599" in names(found, 3)) == (worth > 0.89)
    assert found.certain >= 3
    assert_true(world, found)
    assert found.exhausted == (known == "unlisted" and worth > 0.6)
    assert len(connection.asked) == (600 if found.exhausted else 48)


async def test_a_crowd_that_ties_with_the_kth_is_found() -> None:
    """A post whose crowd lifts it to exactly the k-th score, posted later, takes the place: ties are looked up."""
    world = falling_world(300, ranking(stranger=0.5))
    last, second = world.posts[299], world.posts[1]
    last.tied = [(0, PlainEdge(last.number, HIDE, NOW_MS))]
    last.crowd = [PlainEdge(last.number, COMMENT, second.tied[0][1].at_ms)] * 2
    last.posted_ms = NOW_MS
    found, _ = await best(world, world.bound(), need=3)
    assert names(found, 3) == ["p0000", "p0299", "p0001"]
    assert found.found[1].score == pytest.approx(found.found[2].score, rel=1e-14)
    assert found.certain >= 2
    assert_true(world, found)


@pytest.mark.parametrize(("need", "asked"), [(1, 48), (20, 48), (40, 56), (100, 116), (290, 306), (1_000, 1_000)])
async def test_look_ups_stop_where_the_bound_proves_it(need: int, asked: int) -> None:
    """Of 1,000 candidates one batch is fetched, as large as the need and 16 more, where no crowd can change them."""
    world = falling_world(1_000, POLICIES["exact"])
    found, connection = await best(world, world.bound(), need)
    assert (len(connection.asked), found.certain >= need) == (asked, True)
    assert len(set(connection.asked)) == asked


async def test_seen_posts_are_looked_up_where_their_factor_puts_them() -> None:
    """A factor lowers the bound with the score: the best 500 by ties, seen, are not fetched before the unseen."""
    world = falling_world(1_000, POLICIES["no strangers"])
    world.seen_factor = 1e-30
    for post in world.posts[:500]:
        post.factor = 1e-30
    found, connection = await best(world, NO_BOARD, need=20)
    assert names(found, 2) == ["p0500", "p0501"]
    assert (len(connection.asked), found.certain) == (48, 48)


async def test_without_a_bound_everything_is_looked_up_once() -> None:
    """Where nothing is known of the crowd, all of 5,000 equal bounds are fetched, each once, and all is certain."""
    world = falling_world(5_000, POLICIES["exact"])
    found, connection = await best(world, NO_BOARD, need=5)
    assert len(connection.asked) == len(set(connection.asked)) == 5_000
    assert (found.exhausted, found.certain, names(found, 3)) == (True, 5_000, ["p0000", "p0001", "p0002"])


async def test_without_strangers_no_bound_is_needed() -> None:
    """A policy that gives strangers 0 proves its feed by the ties alone."""
    found, connection = await best(falling_world(1_000, POLICIES["no strangers"]), NO_BOARD, need=20)
    assert (len(connection.asked), found.exhausted, found.certain) == (48, False, 48)


async def test_hidden_posts_do_not_count_towards_the_need() -> None:
    """Where the best hundred may not be seen, look-ups go on until enough that may be are certain."""
    world = falling_world(1_000, POLICIES["exact"])
    for place, post in enumerate(world.posts[:100]):
        post.author, post.audience, post.flags = HIDDEN[place % len(HIDDEN)]
    found, connection = await best(world, world.bound(), need=2)
    assert names(found, 2) == ["p0100", "p0101"]
    assert len(connection.asked) == 48 + 96
    assert_true(world, found)


async def test_no_candidates_are_an_answer() -> None:
    """Without candidates nothing is fetched, and the empty list is certain."""
    world = falling_world(0, POLICIES["exact"])
    found, connection = await best(world, NO_BOARD, need=20)
    assert (found.found, found.certain, found.exhausted, connection.asked) == ([], 0, True, [])


async def test_a_factor_of_zero_needs_no_number_from_an_unknown_crowd() -> None:
    """Posts whose factor is 0 score 0 and come last, though nothing is known of their crowd."""
    world = falling_world(3, POLICIES["exact"])
    world.posts[0].factor = world.seen_factor = 0.0
    found, _ = await best(world, NO_BOARD, need=3)
    assert (names(found)[-1], found.found[-1].score) == ("p0000", 0.0)
    assert_true(world, found)


@pytest.mark.parametrize("looks", [0, 1, np.inf])
async def test_the_newest_are_certain_once_all_were_looked_up(looks: float) -> None:
    """By time of posting then bytes of the id; ended before the last of 4,500 they are the best known, not certain."""
    world = falling_world(4_500, POLICIES["exact"])
    for post in world.posts:
        post.posted_ms = NOW_MS - (post.number * 7_919) % 1_000
    finder, connection = shortlister(world, None, looks=looks)
    found = await finder.newest(4_500)
    seen = {post.name for post in world.posts[: len(connection.asked)]}
    expected = sorted((-post.posted_ms, post.name) for post in world.posts if post.name in seen)
    assert names(found) == [name for _, name in expected]
    assert len(connection.asked) == min(4_500, 2_000 * (looks + 1))
    assert (found.exhausted, found.certain) == ((True, 4_500) if looks == np.inf else (False, 0))
