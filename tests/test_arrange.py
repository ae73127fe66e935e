"""Keeping authors apart, against its rule stated one place at a time."""

import itertools
import random
from collections.abc import Sequence

import pytest

from scoring.arrange import keep_apart


def by_rule(authors: Sequence[str], gap: int, count: int, before: Sequence[str]) -> list[int]:
    """Fill each place with the best post left that keeps the gap, else with the best post left."""
    line = list(before)
    order: list[int] = []
    for _ in range(min(count, len(authors))):
        left = [place for place in range(len(authors)) if place not in order]
        apart = [place for place in left if all(authors[place] != one for one in line[max(0, len(line) - gap) :])]
        order.append((apart or left)[0])
        line.append(authors[order[-1]])
    return order


def cases(seed: int, count: int) -> list[tuple[list[str], int, int, list[str]]]:
    """Draw authors, gap, number of places, and authors served before."""
    rng = random.Random(seed)
    return [
        (
            rng.choices("abcd", [8, 3, 2, 1], k=rng.randrange(9)),
            rng.randrange(5),
            rng.randrange(10),
            rng.choices("abcd", k=rng.randrange(5)),
        )
        for _ in range(count)
    ]


def violations(authors: Sequence[str], gap: int) -> int:
    """Count pairs by one author with fewer than `gap` posts between them."""
    return sum(authors[one] == authors[two] for two in range(len(authors)) for one in range(max(0, two - gap), two))


def test_random_lists_agree_with_the_rule() -> None:
    """The order is that of the rule, for every gap and whatever was served before."""
    for authors, gap, count, before in cases(1, 5_000):
        assert keep_apart(authors, gap, count, before) == by_rule(authors, gap, count, before)


def test_no_place_stays_empty_while_posts_are_left() -> None:
    """As many places are filled as there are posts for, each post once, even where one author wrote all."""
    for authors, gap, count, before in cases(2, 2_000):
        order = keep_apart(authors, gap, count, before)
        assert order is not None
        assert len(order) == len(set(order)) == min(count, len(authors))
    assert keep_apart(["mina"] * 6, 50, 6) == [0, 1, 2, 3, 4, 5]


def test_without_a_gap_nothing_moves() -> None:
    """Gap 0 leaves the best first, and no further post could come before."""
    for authors, _, count, before in cases(3, 500):
        expected = list(range(min(count, len(authors))))
        assert keep_apart(authors, 0, count, before) == expected
        more = keep_apart(authors, 0, count, before, more=True)
        assert more == (expected if count <= len(authors) else None)


def test_more_posts_outside_change_nothing_that_was_given() -> None:
    """With more to come, an order is given just where no list of further posts would change it."""
    for authors, gap, count, before in cases(4, 1_500):
        found = keep_apart(authors, gap, count, before, more=True)
        whole = {tuple(by_rule([*authors, *tail], gap, count, before)) for tail in tails(gap, count)}
        if found is not None:
            assert whole == {tuple(found)}
        else:
            assert any(place >= len(authors) for order in whole for place in order)


def tails(gap: int, count: int) -> list[list[str]]:
    """Further posts: all by someone new, all by each known author, and mixtures, always enough."""
    enough = gap + count + 1
    return [[author] * enough for author in "abcdz"] + [list(itertools.islice(itertools.cycle("zyxwvu"), enough))]


def test_an_outside_post_could_come_first() -> None:
    """Where every post of the list is too near, the answer is None with more to come, and the best without."""
    assert keep_apart(["mina", "mina"], 1, 2, more=True) is None
    assert keep_apart(["mina", "joel"], 1, 2, more=True) == [0, 1]
    assert keep_apart(["mina"], 1, 1, ["mina"], more=True) is None
    assert keep_apart(["mina"], 1, 1, ["mina"]) == [0]
    assert keep_apart([], 1, 1, more=True) is None
    assert keep_apart([], 1, 0, more=True) == keep_apart([], 1, 3) == []


@pytest.mark.parametrize("gap", [1, 2, 3])
def test_pages_continue_each_other(gap: int) -> None:
    """Pages arranged one after the other, each told the authors before it, are the whole list arranged at once."""
    rng = random.Random(gap)
    for _ in range(200):
        authors = rng.choices("abcdef", k=12)
        whole = keep_apart(authors, gap, 12)
        left, line = list(range(12)), list[int]()
        while left:
            page = keep_apart([authors[place] for place in left], gap, 4, [authors[place] for place in line])
            assert page is not None
            line += [left[place] for place in page]
            left = [place for place in left if place not in line]
        assert line == whole


def test_the_gap_is_kept_wherever_greed_can_keep_it() -> None:
    """Among evenly mixed authors, more of them than the gap, no two posts by one author are too near."""
    for gap, authors in itertools.product(range(4), ("abcdabcd", "aabbccdd", "abcddcba", "aaabbbcccddd")):
        order = keep_apart(authors, gap, len(authors) // 2)
        assert order is not None
        assert violations([authors[place] for place in order], gap) == 0
