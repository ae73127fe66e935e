"""Compiled policies: tables by kind code, the curve as the bank follows it, and the bound of the crowd's freshness."""

import numpy as np
import pytest

from scoring.bank import DEFAULT_BANK, Bank, CurveError
from scoring.curves import Curve, HalfLife, Power
from scoring.policy import AffinityRule, Policy
from scoring.ranking import Ranking, UnknownCodeError, compile_policy
from service.feed.policies import POST_LIVES
from service.store.store import board_slots
from tests.rankings import DAY_MS, HORIZON_MS, HOUR_MS, followed, left_of

CURVES: dict[str, Curve] = {
    "12 h, exact": HalfLife(12 * HOUR_MS),
    "30 d, exact": HalfLife(30 * DAY_MS),
    "30 d and 2 ms, as good as exact": HalfLife(30 * DAY_MS + 2.0),
    "2 h, signed": HalfLife(2 * HOUR_MS),
    "18 h, signed": HalfLife(18 * HOUR_MS),
    "5 d, signed": HalfLife(5 * DAY_MS),
    "power, 1 h": Power(HOUR_MS, 1.0),
    "power, 1 d, 1.5": Power(DAY_MS, 1.5),
}
LIFE_MS = POST_LIVES * HORIZON_MS


def compiled(curve: Curve, bank: Bank = DEFAULT_BANK) -> Ranking:
    return compile_policy(Policy("plain", {"like": 1.0}, curve), bank, ["like"], HORIZON_MS)


@pytest.fixture(scope="module")
def rankings() -> dict[str, Ranking]:
    """Each curve compiled once."""
    return {name: compiled(curve) for name, curve in CURVES.items()}


def random_ages_ms(seed: int, horizon_ms: float) -> list[float]:
    """Draw ages: evenly, by equal ratios, near both ends, and both ends themselves."""
    rng = np.random.default_rng(seed)
    evenly = rng.uniform(0.0, horizon_ms, 20_000)
    by_ratio = np.exp(rng.uniform(0.0, np.log(horizon_ms), 20_000))
    return [0.0, horizon_ms, *rng.uniform(0.0, HOUR_MS, 5_000), *evenly, *by_ratio]


@pytest.mark.parametrize("name", CURVES)
def test_both_freshnesses_agree_with_their_formulas(rankings: dict[str, Ranking], name: str) -> None:
    """At ages of 0, ahead of now, fresh and very old, the curve is exact and its fit within the certified error."""
    ranking = rankings[name]
    ages = [-300_000.0, -1.0, 0.0, 1.0, *np.geomspace(1e3, HORIZON_MS, 200).tolist()]
    fresh, crowd = ranking.freshness(np.array(ages)), ranking.crowd_freshness(np.array(ages))
    assert fresh.tolist() == pytest.approx([left_of(CURVES[name], age) for age in ages], rel=1e-12)
    assert crowd.tolist() == pytest.approx([followed(ranking, age) for age in ages], rel=1e-6, abs=1e-12)
    assert np.max(np.abs(fresh - crowd)) <= ranking.fit.error
    assert fresh[:3].tolist() == [1.0, 1.0, 1.0]


@pytest.mark.parametrize("name", ["12 h, exact", "18 h, signed", "power, 1 h"])
def test_freshnesses_keep_the_shape(rankings: dict[str, Ranking], name: str) -> None:
    """Tables of ages give tables, and no ages give none."""
    ages = np.array([[0.0, HOUR_MS, DAY_MS], [5.0, -1.0, HORIZON_MS]])
    for function in (rankings[name].freshness, rankings[name].crowd_freshness):
        assert function(ages)[1].tolist() == pytest.approx(function(ages[1]).tolist(), rel=1e-15)
        assert function(np.empty(0)).tolist() == []


@pytest.mark.parametrize("slot", range(len(DEFAULT_BANK.half_lives_ms)))
@pytest.mark.parametrize("name", CURVES)
def test_the_ceiling_bounds_the_crowd_at_every_age(rankings: dict[str, Ranking], name: str, slot: int) -> None:
    """On a fine random grid over a post's whole life, freshness stays under the ceiling times the half-life's decay.

    Compared as logarithms, base 2, where neither side over- or underflows.
    """
    ranking = rankings[name]
    ceiling = ranking.ceiling_over(slot, LIFE_MS)
    ages = np.array(random_ages_ms(slot, LIFE_MS))
    crowd = ranking.crowd_freshness(ages)
    seen = crowd > 0.0
    marks = np.log2(crowd[seen]) + ages[seen] / DEFAULT_BANK.half_lives_ms[slot]
    assert np.log2(ceiling) >= marks.max() - 1e-12


@pytest.mark.parametrize("name", CURVES)
@pytest.mark.parametrize("horizon_ms", [DAY_MS, HORIZON_MS, LIFE_MS])
def test_the_ceiling_is_no_higher_than_needed(rankings: dict[str, Ranking], name: str, horizon_ms: float) -> None:
    """For the longest half-life it is at most a hundredth over the greatest ratio of a fine grid."""
    ranking, longest = rankings[name], DEFAULT_BANK.half_lives_ms[-1]
    ages = np.linspace(0.0, horizon_ms, 200_001)
    greatest = np.max(ranking.crowd_freshness(ages) * np.exp2(ages / longest))
    ceiling = ranking.ceiling_over(len(DEFAULT_BANK.half_lives_ms) - 1, horizon_ms)
    assert greatest * (1.0 - 1e-12) <= ceiling <= 1.01 * greatest


def test_a_curve_that_falls_faster_has_a_ceiling_of_one(rankings: dict[str, Ranking]) -> None:
    """A half-life of the bank is under its own decay and every slower one; under a faster one it is not."""
    place = DEFAULT_BANK.half_lives_ms.index(12 * HOUR_MS)
    ranking = rankings["12 h, exact"]
    assert [ranking.ceiling_over(slot, LIFE_MS) for slot in range(place, 10)] == [1.0] * (10 - place)
    assert ranking.ceiling_over(place - 1, 12 * HOUR_MS) == pytest.approx(2.0, rel=1e-3)


def test_a_bound_past_all_numbers_is_infinite(rankings: dict[str, Ranking]) -> None:
    """30 d against a quarter of an hour over 390 d is more than a double holds."""
    assert rankings["30 d, exact"].ceiling_over(0, LIFE_MS) == np.inf


@pytest.mark.parametrize("longest_h", [4.0, 6.0])
@pytest.mark.parametrize("curve", [HalfLife(1.4 * HOUR_MS), HalfLife(2 * HOUR_MS), HalfLife(3 * HOUR_MS)])
def test_some_board_bounds_every_curve_however_short_the_bank(curve: Curve, longest_h: float) -> None:
    """The longest half-life's ceiling is finite though its decay over a post's life is less than a double holds."""
    bank = Bank((0.5 * HOUR_MS, HOUR_MS, 1.5 * HOUR_MS, 2.5 * HOUR_MS, longest_h * HOUR_MS))
    ranking = compiled(curve, bank)
    assert 0.99 < ranking.ceiling_over(board_slots(5)[-1], LIFE_MS) < 1.1


def test_tables_are_by_kind_code() -> None:
    """Weights and gains stand at their kind's code; dotted kinds fall back, unlisted ones and zeros are 0."""
    rule = AffinityRule(gains={"comment": 0.3, "hide": -1.0})
    policy = Policy("plain", {"comment": 1.0, "comment.photo": 2.0, "hide": 0.0}, HalfLife(12 * HOUR_MS), rule)
    kinds = ["hide", "comment.photo.close", "comment.note", "wave", "comment"]
    ranking = compile_policy(policy, DEFAULT_BANK, kinds, HORIZON_MS)
    codes = np.array([4, 0, 1, 2, 3, 1])
    assert ranking.weights_of(codes).tolist() == [1.0, 0.0, 2.0, 1.0, 0.0, 2.0]
    assert ranking.gains_of(codes).tolist() == [0.3, -1.0, 0.3, 0.3, 0.0, 0.3]
    assert ranking.weights_of(codes[:0]).tolist() == []


def test_codes_past_the_table_are_refused() -> None:
    """A code that the policy was not compiled for is named, whatever stands beside it."""
    ranking = compiled(CURVES["12 h, exact"])
    with pytest.raises(UnknownCodeError, match=r"^3$"):
        ranking.weights_of(np.array([0, 3, 1]))
    with pytest.raises(UnknownCodeError, match=r"^1$"):
        ranking.gains_of(np.array([1]))


def test_a_curve_that_no_bank_follows_is_refused() -> None:
    """A half-life far below the bank's shortest cannot be compiled."""
    with pytest.raises(CurveError, match=r"^curve half_life with half_life 1m"):
        compiled(HalfLife(60_000.0))
