"""Affinities against the formula written as loops over dicts."""

import random
from collections import defaultdict

import numpy as np
import pytest

from scoring.affinity import BLOCK, FOLLOW, FRIEND, MUTE, NONE, Circle, Dealings, circle
from scoring.policy import AffinityRule, Policy
from scoring.ranking import Ranking, UnknownCodeError, compile_policy
from service.store.drive import RELATIONS
from tests.rankings import AGES_MS, DAY_MS, EXACT, GAINS, HORIZON_MS, KINDS, NOW_MS, SMALL_BANK, WEIGHTS, hashes

READER = 2**64 - 5
LIKE, COMMENT, SHARE, HIDE, NOTE = range(5)

Deals = list[tuple[int, int, int]]


def compiled(rule: AffinityRule) -> Ranking:
    return compile_policy(Policy("plain", WEIGHTS, EXACT, rule), SMALL_BANK, KINDS, HORIZON_MS)


RULE = AffinityRule(gains=GAINS)
PLAIN = compiled(RULE)


def circle_of(ties: dict[int, int], deals: Deals, ranking: Ranking = PLAIN, t_ms: int = NOW_MS) -> Circle:
    """Compute the circle of `READER`; deals are author, kind code and time."""
    dealings = Dealings(
        hashes([author for author, _, _ in deals]),
        np.array([code for _, code, _ in deals], dtype=np.intp),
        np.array([at_ms for _, _, at_ms in deals], dtype=np.float64),
    )
    relations = np.array(list(ties.values()), dtype=np.uint8)
    return circle(READER, hashes(list(ties)), relations, dealings, ranking, t_ms)


def affinities(ties: dict[int, int], deals: Deals, ranking: Ranking = PLAIN, t_ms: int = NOW_MS) -> dict[int, float]:
    found = circle_of(ties, deals, ranking, t_ms)
    return dict(zip(found.person.tolist(), found.affinity.tolist(), strict=True))


def by_loops(ties: dict[int, int], deals: Deals, rule: AffinityRule) -> dict[int, float]:
    """Compute the contract's formula, one person at a time."""
    base = {NONE: rule.stranger, FOLLOW: rule.follow, FRIEND: rule.friend}
    gained: defaultdict[int, float] = defaultdict(float)
    for author, code, at_ms in deals:
        gain = rule.gains.get(KINDS[code], 0.0)
        gained[author] += gain * 2.0 ** (-max(0, NOW_MS - at_ms) / rule.half_life_ms)
    result = {}
    for person in {*ties, *gained, READER}:
        relation = ties.get(person, NONE)
        apart = relation in (MUTE, BLOCK) or person == READER
        result[person] = 0.0 if apart else min(rule.ceiling, max(0.0, base[relation] + gained[person]))
    return result


RULES = [
    RULE,
    AffinityRule(stranger=0.0, follow=0.0, friend=0.0, gains=GAINS),
    AffinityRule(ceiling=0.25, half_life_ms=DAY_MS, gains=GAINS),
    AffinityRule(stranger=3.0, ceiling=1.0, gains={}),
    AffinityRule(half_life_ms=1.0, gains={"comment": 2.0, "post.note": -0.5}),
]


@pytest.mark.parametrize("rule", RULES)
def test_random_circles_agree_with_loops(rule: AffinityRule) -> None:
    """Over random ties and dealings of all ages, every person has the affinity of the formula."""
    rng, ranking = random.Random(11), compiled(rule)
    people = [0, 1, 2, 2**32, 2**63, 2**64 - 1, READER]
    for _ in range(150):
        ties = {person: rng.randrange(5) for person in rng.sample(people[:-1], rng.randrange(7))}
        deals = [
            (rng.choice(people), rng.randrange(len(KINDS)), NOW_MS - rng.choice(AGES_MS))
            for _ in range(rng.choice([0, 1, 3, 30]))
        ]
        found, expected = affinities(ties, deals, ranking), by_loops(ties, deals, rule)
        assert found.keys() == expected.keys()
        assert [found[person] for person in expected] == pytest.approx(list(expected.values()), rel=1e-12, abs=1e-12)


def test_people_are_in_rising_order_with_their_relations() -> None:
    """The circle holds everyone once, by hash, with the relation declared."""
    found = circle_of({9: FRIEND, 3: MUTE, 5: FOLLOW}, [(4, LIKE, NOW_MS), (5, LIKE, NOW_MS)])
    assert found.person.tolist() == [3, 4, 5, 9, READER]
    assert found.relation.tolist() == [MUTE, NONE, FOLLOW, FRIEND, NONE]


def test_a_reader_never_heard_of_is_alone_in_the_circle() -> None:
    """Without ties and dealings the circle is the reader, with no affinity to itself."""
    assert affinities({}, []) == {READER: 0.0}


def test_a_stranger_with_dealings_has_stranger_plus_gains() -> None:
    """One like now adds its gain to the base of a stranger, and one 30 days old half of it."""
    assert affinities({}, [(7, LIKE, NOW_MS)])[7] == pytest.approx(0.12, rel=1e-15)
    assert affinities({}, [(7, LIKE, NOW_MS - round(30 * DAY_MS))])[7] == pytest.approx(0.07, rel=1e-15)


def test_relations_have_their_bases() -> None:
    """Without dealings the affinity is the policy's value for the relation; muted and blocked people have none."""
    ties = {1: NONE, 2: FOLLOW, 3: FRIEND, 4: MUTE, 5: BLOCK}
    assert affinities(ties, []) == {1: 0.02, 2: 1.0, 3: 2.0, 4: 0.0, 5: 0.0, READER: 0.0}


@pytest.mark.parametrize("relation", [MUTE, BLOCK])
def test_no_dealing_lifts_someone_muted_or_blocked(relation: int) -> None:
    """However much the reader dealt with them, the affinity stays 0."""
    assert affinities({7: relation}, [(7, SHARE, NOW_MS)] * 40)[7] == 0.0


def test_dealings_with_oneself_count_nothing() -> None:
    """Interactions with one's own posts give no affinity to oneself, not even under a self-declared tie."""
    assert affinities({READER: FRIEND}, [(READER, SHARE, NOW_MS)] * 3) == {READER: 0.0}


def test_affinity_stays_between_zero_and_the_ceiling() -> None:
    """Many hides end at 0, many shares at the ceiling, and neither goes on from there."""
    hides, shares = [(7, HIDE, NOW_MS)] * 3, [(8, SHARE, NOW_MS)] * 300
    found = affinities({7: FOLLOW, 8: FOLLOW}, hides + shares)
    assert (found[7], found[8]) == (0.0, 10.0)


def test_gains_are_summed_before_they_are_clipped() -> None:
    """A hide and shares that make up for it leave what they sum to, whichever came first."""
    deals = [(7, HIDE, NOW_MS), (7, HIDE, NOW_MS), *[(7, SHARE, NOW_MS)] * 4]
    assert affinities({7: FOLLOW}, deals)[7] == affinities({7: FOLLOW}, deals[::-1])[7] == 1.0


def test_a_dealing_ahead_of_now_counts_in_full() -> None:
    """An age below 0 counts as 0."""
    assert affinities({7: FOLLOW}, [(7, COMMENT, NOW_MS + 300_000)])[7] == 1.3


def test_a_kind_without_a_gain_makes_someone_known_and_no_more() -> None:
    """The author is in the circle with the base of a stranger."""
    assert affinities({}, [(7, NOTE, NOW_MS)])[7] == 0.02


def test_the_crowd_has_a_strangers_base_under_the_ceiling() -> None:
    """A ceiling below the stranger's base holds for the crowd as for one person."""
    rule = AffinityRule(stranger=3.0, ceiling=1.0, gains=GAINS)
    assert (rule.crowd, affinities({7: NONE}, [], compiled(rule))[7]) == (1.0, 1.0)


def test_a_code_newer_than_the_policy_is_not_guessed() -> None:
    """A dealing of a kind registered since the policy was compiled asks for a new compilation."""
    with pytest.raises(UnknownCodeError, match=str(len(KINDS))):
        affinities({}, [(7, len(KINDS), NOW_MS)])


def test_relation_codes_are_those_the_store_writes() -> None:
    """The store writes a relation as its place in its list."""
    names = [RELATIONS[code] for code in (NONE, FOLLOW, FRIEND, MUTE, BLOCK)]
    assert names == ["none", "follow", "friend", "mute", "block"]
