"""The crowd board: its answers read, and bounds that are never below the crowds they bound."""

import math
import random

import numpy as np
import pytest

from scoring.bank import DEFAULT_BANK
from scoring.curves import Curve, HalfLife
from scoring.policy import Policy
from scoring.ranking import compile_policy
from service.feed import board
from service.feed.board import BoardReader, CrowdBound
from service.feed.policies import PolicyBook
from service.store import keys
from service.store.store import board_slots
from tests.rankings import DAY_MS, EXACT, FITTED, HORIZON_MS, HOUR_MS, KINDS, NOW_MS, hashes, ranking
from tests.shortlists import random_world

LIFE_MS = 13 * HORIZON_MS
SLOTS = board_slots(len(DEFAULT_BANK.half_lives_ms))


def reader_of(curve: Curve, weight: float = 1.0) -> BoardReader:
    policy = Policy("plain", {"like": weight}, curve)
    return BoardReader(compile_policy(policy, DEFAULT_BANK, ["like"], HORIZON_MS), SLOTS, LIFE_MS)


@pytest.mark.parametrize("curve", [EXACT, FITTED], ids=["exact", "fitted"])
@pytest.mark.parametrize("listed", [0, 1, 4, 10**6])
def test_bounds_are_never_below_the_crowd(curve: Curve, listed: int, monkeypatch: pytest.MonkeyPatch) -> None:
    """In random worlds every post's whole crowd is under its bound, listed, unlisted or changed since."""
    monkeypatch.setattr(board, "LISTED", max(1, listed))
    rng = random.Random(listed)
    for _ in range(60):
        world = random_world(rng, ranking(curve), 20)
        changed = [post.number for post in world.posts if rng.random() < 0.1]
        bound = world.bound(listed=listed, changed=changed)
        posts = sorted(world.posts, key=lambda post: post.number)
        bounds = bound.of(hashes([post.number for post in posts])).tolist()
        assert all(most >= world.crowd(post) for post, most in zip(posts, bounds, strict=True))
        assert all(most == math.inf for post, most in zip(posts, bounds, strict=True) if post.number in changed)


def test_a_listed_posts_bound_is_close() -> None:
    """For one kind at the board's own half-life the bound is the crowd, a billionth above it."""
    world = random_world(random.Random(1), ranking(), 1)
    post = world.posts[0]
    post.tied = [(0, edge) for edge in post.crowd] or post.tied
    heaviest = 3.0
    count = sum(2.0 ** (-(NOW_MS - edge.at_ms) / (12 * HOUR_MS)) for edge in post.edges)
    most = world.bound().of(hashes([post.number]))
    assert most.tolist() == pytest.approx([heaviest * count], rel=2e-9)


def test_bounds_by_post_agree_with_a_dict() -> None:
    """Listed posts have their own bound, a post that changed since has none, all others share one."""
    bound = CrowdBound(hashes([9, 3, 7, 3]), np.array([2.0, 1.0, 0.5, np.inf]), 0.25)
    assert bound.of(hashes([1, 3, 7, 8, 9])).tolist() == [0.25, np.inf, 0.5, 0.25, 2.0]
    assert bound.of(hashes([])).tolist() == []
    assert CrowdBound(hashes([]), np.empty(0), 4.0).of(hashes([1, 2])).tolist() == [4.0, 4.0]


def test_an_empty_board_bounds_everything_by_nothing() -> None:
    """A store where nothing has happened has no crowd; what changed since is unknown all the same."""
    reader = reader_of(EXACT)
    bound = reader.bound(reader.read([[], None]), {(5).to_bytes(8, "little")}, NOW_MS)
    assert bound.of(hashes([4, 5])).tolist() == [0.0, np.inf]


@pytest.mark.parametrize(
    ("marks", "floor", "lowest"),
    [
        ([3.5, 2.0], None, -math.inf),
        ([3.5, 2.0], b"1.25", 1.25),
        ([3.5, 2.0], b"0", 0.0),
        ([4.0, 3.5, 2.0], b"1.25", 2.0),
        ([4.0, 3.5, 2.0], None, 2.0),
        ([], b"-7", -7.0),
    ],
)
def test_the_unlisted_are_under_the_last_listed_or_the_floor(
    marks: list[float], floor: bytes | None, lowest: float, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A list cut short ends at its last mark; a whole one at what was trimmed from the board, a floor of 0 too."""
    monkeypatch.setattr(board, "LISTED", 3)
    flat = [part for place, mark in enumerate(marks) for part in (place.to_bytes(8, "little"), repr(mark).encode())]
    state = reader_of(EXACT).read([flat, floor])
    assert (state.post.tolist(), state.mark.tolist(), state.lowest) == (list(range(len(marks))), marks, lowest)


def test_marks_stand_while_sums_halve() -> None:
    """The same board gives half the bound a half-life later."""
    reader = reader_of(EXACT)
    state = reader.read([[(1).to_bytes(8, "little"), b"%.17g" % (NOW_MS / (12 * HOUR_MS) + 3.0)], None])
    now, later = (reader.bound(state, set(), t_ms).bound[0] for t_ms in (NOW_MS, NOW_MS + int(12 * HOUR_MS)))
    assert (now, later) == (pytest.approx(8.0, rel=2e-9), pytest.approx(4.0, rel=2e-9))
    assert now > 8.0
    assert later > 4.0


@pytest.mark.parametrize(
    ("half_life_ms", "slot"), [(HOUR_MS, 2), (3 * HOUR_MS, 2), (12 * HOUR_MS, 4), (DAY_MS, 9), (30 * DAY_MS, 9)]
)
def test_the_fastest_board_that_bounds_a_curve_closely_is_read(half_life_ms: float, slot: int) -> None:
    """With boards of 3 h, 12 h and 30 d each half-life is bounded by the nearest that is no shorter."""
    reader = reader_of(HalfLife(half_life_ms))
    assert (SLOTS, reader.slot) == ((2, 4, 9), slot)
    assert reader.commands() == [
        (b"ZREVRANGE", keys.board(slot), 0, 499, b"WITHSCORES"),
        (b"GET", keys.floor(slot)),
    ]


def test_a_policys_board_bounds_the_oldest_edge_of_any_feed() -> None:
    """With a short retention too: a post's oldest edge, ranked as of 30 days ahead, is within the bound's horizon."""
    retention_ms = 3 * int(DAY_MS)
    book = PolicyBook(DEFAULT_BANK, SLOTS, retention_ms)
    text = 'name = "slow"\nweights = { like = 1 }\nfreshness = { curve = "power", scale = "6h", exponent = 1.0 }\n'
    book.put(book.read(text))
    prepared = book.prepared("slow", ["like"])
    half_life_ms = DEFAULT_BANK.half_lives_ms[prepared.board.slot]
    for age_ms in np.linspace(0, 13 * retention_ms + 30 * DAY_MS, 500).tolist():
        mark = (NOW_MS - age_ms) / half_life_ms
        state = prepared.board.read([[(1).to_bytes(8, "little"), repr(mark).encode()], None])
        crowd = prepared.ranking.crowd_freshness(np.array([age_ms]))[0]
        assert prepared.board.bound(state, set(), NOW_MS).bound[0] >= crowd


def test_without_weights_there_is_no_crowd() -> None:
    """A policy whose weights are all 0 bounds every crowd by 0, and so does one compiled before there are kinds."""
    assert len(KINDS) > 0
    flat = [(1).to_bytes(8, "little"), b"%.17g" % (NOW_MS / (12 * HOUR_MS) + 3.0)]
    unlisted = BoardReader(compile_policy(Policy("plain", {"like": 1.0}), DEFAULT_BANK, [], HORIZON_MS), SLOTS, LIFE_MS)
    for reader in (reader_of(EXACT, weight=0.0), unlisted):
        bound = reader.bound(reader.read([flat, b"1"]), set(), NOW_MS)
        assert bound.of(hashes([1, 2])).tolist() == [0.0, 0.0]
