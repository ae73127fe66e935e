"""What is called certain is: 100,000 random worlds of the pure core against brute force.

The core is what a feed read does between its fetches: bounds, look-ups in their order, judgement, rank (scoring/
gathering.py). A look-up here costs nothing, so all of it fits a test. Worlds are small and mean: near ties, crowds that
lift the last by ties to the top, posts that may not be seen, boards that list some posts and bound the rest just so.
"""

import random
import struct
from dataclasses import dataclass

import numpy as np
import pytest

from scoring.affinity import FOLLOW, Circle
from scoring.gathering import Bounds, Gathering, Reader
from scoring.ranking import Ranking
from scoring.topk import settled, tie_key
from tests.rankings import NOW_MS, hashes, ranking

COMMENT = 1  # of weight 1.0
AGES_MS = (0, 3_600_000, 7_200_000, 43_200_000, 90_000_000)
FRESH = [2.0 ** (-age / 43_200_000) for age in AGES_MS]
AUTHOR, READER = 5, 9
HEAD = struct.Struct("<BBBB8H2dQ")
KIND = struct.Struct("<HHid3d")
CROWDS = (0.0, 0.0, 0.0, 0.5, 1.0, 10.0, 49.0, 50.0, 51.0, 500.0)
NOBODY = Reader(READER, Circle(hashes([AUTHOR]), np.zeros(1, np.uint8), np.zeros(1)), b"")
NOTHING, NEVER = hashes([]), np.empty(0)


@dataclass(slots=True)
class Post:
    """One post: by whom of the ties it has edges and how old, what strangers add, and whether it may be seen."""

    number: int
    tied: list[tuple[int, int]]
    strangers: float
    posted_ms: int
    shown: bool

    def crowd(self) -> float:
        """Sum all its edges."""
        return sum(FRESH[age] for _, age in self.tied) + self.strangers

    def value(self) -> bytes:
        """Pack it as the store does, all edges in one running sum."""
        name = b"p%d" % self.number
        lengths = (0, 1, len(name), 3, 1, 0, 0, 0)
        head = HEAD.pack(1, 2 if self.shown else 3, 0, 4, *lengths, self.posted_ms, self.posted_ms, AUTHOR)
        total = self.crowd()
        return head + name + b"adanotee" + KIND.pack(COMMENT, 0, 1, NOW_MS, total, total, total)


@dataclass(slots=True)
class World:
    """Posts, the affinity to each tie, and how much of the board is known."""

    posts: list[Post]
    affinity: list[float]
    listed: int
    slack: float

    def best(self, k: int, stranger: float) -> list[int]:
        """Rank by brute force: numbers of the best k posts that may be seen."""
        found = []
        for post in self.posts:
            if post.shown:
                score = sum(self.affinity[tie] * FRESH[age] for tie, age in post.tied) + stranger * post.strangers
                found.append((-tie_key(score), -post.posted_ms, b"p%d" % post.number, post.number))
        return [number for *_, number in sorted(found)[:k]]

    def bounds(self) -> Bounds:
        """Bound the crowds: the greatest, as many as are listed, each for itself, all others by the next of them."""
        ordered = sorted(self.posts, key=lambda post: -post.crowd())
        named, rest = ordered[: self.listed], ordered[self.listed :]
        others = max((post.crowd() for post in rest), default=0.0) * self.slack
        crowd = np.array([post.crowd() * self.slack for post in named])
        return Bounds(others, hashes([post.number for post in named]), crowd, NOTHING, NEVER)


def random_world(rng: random.Random) -> World:
    people = rng.randrange(1, 4)
    posts = [
        Post(
            rng.getrandbits(64),
            [(rng.randrange(people), rng.randrange(len(AGES_MS))) for _ in range(rng.choice((1, 1, 1, 2, 3)))],
            rng.choice(CROWDS),
            NOW_MS - rng.choice((0, 1, 5)),
            rng.random() > 0.1,
        )
        for _ in range(rng.choice((1, 2, 3, 5, 8, 12)))
    ]
    affinity = [rng.choice((0.02, 1.0, 1.0, 2.0)) for _ in range(people)]
    return World(posts, affinity, rng.choice((0, 1, 3, 99)), rng.choice((1.0, 1.0, 1.0 + 1e-9, 1.5)))


def buried_world(rng: random.Random) -> World:
    """Make a world whose k-th place is decided by the crowd of a post far down the order by ties."""
    ages = [rng.randrange(4) for _ in range(rng.randrange(3, 12))]
    posts = [Post(rng.getrandbits(64), [(0, age)], 0.0, NOW_MS - place, True) for place, age in enumerate(ages)]
    worth = FRESH[rng.choice(ages)] + rng.choice((-0.01, -1e-6, 0.0, 1e-6, 0.01, 0.3))
    posts.append(Post(rng.getrandbits(64), [(0, 4)], max(0.0, worth - FRESH[4]) / 0.02, NOW_MS, True))
    rng.shuffle(posts)
    return World(posts, [1.0], rng.choice((0, 1, 99)), 1.0)


def core(world: World, k: int, batch: int, policy: Ranking) -> tuple[list[int], bool, int]:
    """Rank as a feed read does: the best k found, whether they are certain, and how many look-ups it took."""
    by_hash = {post.number.to_bytes(8, "little"): post for post in world.posts}
    rows: list[list[bytes]] = [[] for _ in world.affinity]
    for post in world.posts:
        for tie, age in post.tied:
            stamp = (NOW_MS - AGES_MS[age]) << 16 | COMMENT
            rows[tie].append(struct.pack("<QQ", post.number, stamp))
    gathering = Gathering(policy, NOW_MS)
    relation = np.full(len(rows), FOLLOW, dtype=np.uint8)
    gathering.add([b"".join(row) for row in rows], np.array(world.affinity), relation)
    gathering.bound(world.bounds())
    looked_up: list[bytes] = []
    while (next_bound := gathering.next_bound()) >= 0.0:
        gathering.rank()
        found = gathering.found(k)
        if len(found) == k and settled(found[-1][2], next_bound):
            break
        taken = gathering.take(batch)
        gathering.judge(taken, [by_hash[one].value() for one in taken], NOBODY)
        looked_up += taken
    gathering.rank()
    certain = gathering.found_count() if next_bound < 0.0 else gathering.certain(next_bound)
    best = [int.from_bytes(looked_up[nth], "little") for nth, _, _ in gathering.found(k)]
    return best, next_bound < 0.0 or certain >= k, len(looked_up)


@pytest.mark.parametrize("part", range(5))
def test_certain_is_never_said_of_a_wrong_answer(part: int) -> None:
    """In 100,000 worlds, 20,000 a part, the core always ends certain, with brute force's answer, and often early."""
    rng, policy, early = random.Random(part), ranking(), 0
    for number in range(20_000):
        world = buried_world(rng) if number % 4 == 0 else random_world(rng)
        k, batch = rng.randrange(1, 4), rng.randrange(1, 4)
        best, certain, asked = core(world, k, batch, policy)
        assert certain
        assert best == world.best(k, 0.02), (part, number)
        early += asked < len(world.posts)
    assert early > 4_000


def test_the_check_notices_a_bound_that_is_too_low() -> None:
    """With bounds below the crowds the same check finds wrong answers: it can fail."""
    rng, policy, wrong = random.Random(1), ranking(), 0
    for _ in range(300):
        world = buried_world(rng)
        world.slack = 0.5
        best, _, _ = core(world, 2, 1, policy)
        wrong += best != world.best(2, 0.02)
    assert wrong > 20
