"""Top k by bounds against a full sort, and the Threshold Algorithm's published cases in the form used here."""

import math
import random
from dataclasses import dataclass

import numpy as np
import pytest
from numpy.typing import NDArray

from scoring.topk import ByBound, kth_greatest, order_key, settled, tie_key

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class LookedUp:
    """The places looked up in their order, and whether the rest could be left out."""

    places: list[int]
    proved: bool


def look_up(bounds: Floats, scores: Floats, k: int, batch: int = 1, front: int = 1) -> LookedUp:
    """Look scores up in order of their bounds until the k-th is settled, as a feed does."""
    order = ByBound(bounds, front)
    places: list[int] = []
    while len(places) < len(order):
        if settled(kth_greatest(scores[places].tolist(), k), order.bound(len(places))):
            return LookedUp(places, proved=True)
        places += order.take(len(places), batch).tolist()
    return LookedUp(places, proved=False)


@pytest.mark.parametrize("n", [3, 10, 50])
def test_wild_guesses_are_not_made(n: int) -> None:
    """Of 2n + 1 objects the lists' order hides the one best, and n + 1 look-ups are needed and enough.

    R. Fagin, A. Lotem, M. Naor, "Optimal aggregation algorithms for middleware", PODS 2001 (JCSS 66, 2003), the example
    of wild guesses: from memory, recomputed with n = 3, 10, 50. The score is the lesser grade; the first list's grade
    bounds it.
    """
    first = np.array([1.0] * (n + 1) + [0.0] * n)
    second = np.array([0.0] * n + [1.0] * (n + 1))
    found = look_up(first, np.minimum(first, second), k=1)
    assert (sorted(found.places), found.proved) == (list(range(n + 1)), True)
    assert np.flatnonzero(np.minimum(first, second)).tolist() == [n]


@pytest.mark.parametrize(("k", "looked_up", "best"), [(1, "abcd", "a"), (2, "abcde", "ac"), (3, "abcde", "acb")])
def test_three_lists_are_read_as_far_as_their_bounds_reach(k: int, looked_up: str, best: str) -> None:
    """Five objects in three lists: totals 2.4, 2.0, 1.8, 1.6 and 0.9, summed by hand; the first list is read in order.

    The bound of an object is its grade there plus the other lists' greatest, 0.9 and 1.0. For k = 2 the bound of e,
    2.0, ties with the second score, and e is looked up all the same.
    """
    grades = {"a": (0.9, 0.8, 0.7), "b": (0.8, 0.6, 0.4), "c": (0.7, 0.3, 1.0), "d": (0.6, 0.9, 0.1)}
    grades["e"] = (0.1, 0.2, 0.6)
    names = list(grades)
    scores = np.array([sum(grade) for grade in grades.values()])
    assert scores.tolist() == pytest.approx([2.4, 1.8, 2.0, 1.6, 0.9])
    found = look_up(np.array([first + 0.9 + 1.0 for first, _, _ in grades.values()]), scores, k)
    assert "".join(names[place] for place in found.places) == looked_up
    assert "".join(names[place] for place in sorted(found.places, key=lambda at: -scores[at])[:k]) == best


def random_candidates(rng: random.Random) -> tuple[Floats, Floats]:
    """Draw scores, many of them equal, 0 or close, and bounds at or above them, some infinite."""
    count = rng.randrange(31)
    scores = [rng.choice([0.0, 0.0, 1.0, 1.0 + 1e-12, 2.0, rng.random(), 1e-300, 1e9]) for _ in range(count)]
    bounds = [score + rng.choice([0.0, 0.0, 1e-12, 0.5, 5.0, math.inf]) for score in scores]
    return np.array(bounds), np.array(scores)


def test_what_is_left_out_neither_beats_nor_ties() -> None:
    """In 4,000 random cases the k best are a full sort's, and every candidate that ties with the k-th was looked up."""
    rng, stopped = random.Random(31), 0
    for _ in range(4_000):
        bounds, scores = random_candidates(rng)
        k = rng.randrange(1, 9)
        found = look_up(bounds, scores, k, batch=rng.randrange(1, 7), front=rng.randrange(1, 9))
        expected = sorted(scores.tolist(), reverse=True)
        assert len(found.places) == len(set(found.places))
        assert sorted(scores[found.places].tolist(), reverse=True)[:k] == expected[:k]
        if found.proved:
            stopped += 1
            left_out = np.delete(scores, found.places)
            assert all(tie_key(score) < tie_key(expected[k - 1]) for score in left_out.tolist())
    assert stopped > 300


def test_ties_at_the_kth_place_are_all_looked_up() -> None:
    """A bound equal to the k-th score, or above it within rounding, is not left out; one clearly below is."""
    assert look_up(np.array([3.0, 2.0, 2.0, 2.0]), np.array([3.0, 2.0, 2.0, 2.0]), k=2).places == [0, *range(1, 4)]
    assert not settled(2.0, 2.0)
    assert not settled(2.0, 2.0 * (1.0 - 1e-10))
    assert settled(2.0, 2.0 * (1.0 - 1.1e-9))


def test_nothing_is_settled_without_k_scores_or_above_an_unknown_bound() -> None:
    """Fewer than k scores settle nothing, an infinite bound is never below, and scores of 0 do not beat bounds of 0."""
    assert not settled(kth_greatest([], 1), 0.0)
    assert not settled(-math.inf, 0.0)
    assert not settled(1e300, math.inf)
    assert not settled(1e300, math.nan)
    assert not settled(0.0, 0.0)


def drawn_bounds(shape: str, rng: random.Random, count: int) -> Floats:
    """Draw bounds with no, some or only equal ones among them."""
    values = {
        "distinct": [float(value) for value in rng.sample(range(10 * count + 1), count)],
        "two values": rng.choices([0.0, 1.0], k=count),
        "all equal": [7.0] * count,
        "some infinite": rng.choices([math.inf, 0.0, 1.0, rng.random()], k=count),
    }
    return np.array(values[shape])


@pytest.mark.parametrize("shape", ["distinct", "two values", "all equal", "some infinite"])
def test_growing_the_front_equals_a_full_sort(shape: str) -> None:
    """Taken in any steps from any first front, each candidate comes exactly once, bounds never rising."""
    rng = random.Random(shape)
    for count in [0, 1, 2, 3, 64, 65, 257, 1_000]:
        bounds = drawn_bounds(shape, rng, count)
        for front in (0, 1, 2, 63, 64, 1_000, 5_000):
            order, taken = ByBound(bounds, front), list[int]()
            while len(taken) < len(order):
                taken += order.take(len(taken), rng.choice([1, 2, 48, 300])).tolist()
            assert sorted(taken) == list(range(count))
            assert bounds[taken].tolist() == sorted(bounds.tolist(), reverse=True)
            assert [order.bound(at) for at in range(count)] == bounds[taken].tolist()
            assert order.take(count, 10).tolist() == []


def test_what_was_taken_stays_as_the_front_grows() -> None:
    """Asking for a later bound changes no place given before, though all bounds are equal."""
    order = ByBound(np.zeros(3_000), 10)
    first = order.take(0, 10).tolist()
    assert [order.bound(at) for at in (10, 500, 2_999)] == [0.0, 0.0, 0.0]
    assert order.take(0, 10).tolist() == first


def test_the_kth_greatest_agrees_with_sorting() -> None:
    """Over random lists with equal scores it is the sorted list's k-th, and -inf where there are fewer."""
    rng = random.Random(5)
    for _ in range(500):
        scores = [rng.choice([0.0, 1.0, rng.random()]) for _ in range(rng.randrange(12))]
        k = rng.randrange(1, 13)
        expected = sorted(scores, reverse=True)[k - 1] if k <= len(scores) else -math.inf
        assert kth_greatest(scores, k) == expected


def test_orders_of_summation_are_ties() -> None:
    """The same 30 products summed in any order have one key."""
    rng = random.Random(17)
    for _ in range(300):
        products = [rng.choice([0.5, 1.0, 3.0]) * 2.0 ** -rng.uniform(0, 60) for _ in range(30)]
        sums = {sum(rng.sample(products, 30)) for _ in range(20)}
        assert len({tie_key(total) for total in sums}) == 1


@pytest.mark.parametrize("scale", [5e-320, 1e-300, 1e-9, 0.999999, 1.0, 3.14159, 2.0**40, 1e300])
def test_last_bits_do_not_count_and_a_billionth_does(scale: float) -> None:
    """Neighbouring numbers are a tie at every scale; 1 part in 10^9 more, where a double can hold it, is more."""
    assert tie_key(scale * (1.0 + 1e-15)) == tie_key(scale)
    assert tie_key(scale) == pytest.approx(scale, rel=2.4e-10)
    if scale > 1e-300:
        assert tie_key(scale * (1.0 + 1e-9)) > tie_key(scale)
        assert tie_key(scale * (1.0 - 1e-9)) < tie_key(scale)


def test_keys_rise_with_scores() -> None:
    """A greater score never has a lesser key, over powers of two and across the whole range; 0 is below all."""
    steps = np.concatenate((np.geomspace(1e-300, 1e300, 20_001), 1.0 + np.arange(-50, 50) * 2.0**-36))
    keys = [tie_key(score) for score in sorted(steps.tolist())]
    assert keys == sorted(keys)
    assert tie_key(0.0) == 0.0 < keys[0]


@pytest.mark.parametrize("score", [0.0, 0.5, 1.0, 5.25, 2.91, 1e9])
def test_what_is_settled_is_not_a_tie(score: float) -> None:
    """A bound that is settled below a score has another key: the slack is wider than a tie."""
    for part in np.geomspace(1e-12, 1e-6, 400).tolist():
        bound = score * (1.0 - part)
        if settled(score, bound):
            assert tie_key(bound) < tie_key(score)


def test_posts_are_ordered_by_score_then_time_then_bytes() -> None:
    """Greatest score first; on a tie the newest; then the id's bytes, where upper case comes first and ß after z."""
    ranked = [(2.0, 5, "b"), (1.0, 9, "z"), (1.0 + 1e-15, 8, "Z"), (1.0, 8, "a"), (1.0, 8, "z"), (1.0, 8, "ß")]
    ranked.append((0.0, 10, ""))
    shuffled = random.Random(2).sample(ranked, len(ranked))
    assert sorted(shuffled, key=lambda one: order_key(*one)) == ranked
