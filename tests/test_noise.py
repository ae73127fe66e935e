"""Gumbel noise against scipy's distribution, and the orders it draws against the Plackett-Luce closed form.

W. Kool, H. van Hoof, M. Welling, "Stochastic Beams and Where to Find Them: The Gumbel-Top-k Trick", ICML 2019; the
closed form, the product of w / (what is left), is of R. Plackett, "The Analysis of Permutations", Applied Statistics
24, 1975, and R. Luce, "Individual Choice Behavior", 1959: from memory, recomputed.
"""

import itertools
import math

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import stats

from scoring.noise import _mix, gumbel, multipliers

Floats = NDArray[np.float64]

DRAWS = 200_000
WEIGHTS = (1.0, 2.0, 3.0, 4.0)
LOGITS = (2.0, 1.0, 0.0)
LIKELY = 1e-4

FIRST = (0.1, 0.2, 0.3, 0.4)
PAIRS = {
    (0, 1): 1 / 45,
    (0, 2): 1 / 30,
    (0, 3): 2 / 45,
    (1, 0): 1 / 40,
    (1, 2): 0.075,
    (1, 3): 0.1,
    (2, 0): 3 / 70,
    (2, 1): 3 / 35,
    (2, 3): 6 / 35,
    (3, 0): 1 / 15,
    (3, 1): 2 / 15,
    (3, 2): 1 / 5,
}
"""Chances of the first, and of the first two, for weights 1, 2, 3 and 4 (Plackett 1975; recomputed)."""

INCLUDED = (0.23452381, 0.44126984, 0.60833333, 0.71587302)
"""Chances of being among the first two (sums of the pairs' chances; recomputed)."""


def posts(count: int, seed: int = 1) -> NDArray[np.uint64]:
    """Draw hashes of posts."""
    return np.random.default_rng(seed).integers(0, 2**64, count, dtype=np.uint64)


def drawn(scores: Floats, temperature: float, draws: int = DRAWS) -> NDArray[np.intp]:
    """Draw an order of items with these scores many times, shape (draws, n): each draw has hashes of its own."""
    noise = multipliers(2_026, posts(draws * len(scores)), temperature).reshape(draws, len(scores))
    return np.argsort(-scores * noise, axis=1)


def agrees(count: int, chance: float, draws: int = DRAWS) -> bool:
    """Say whether a frequency is within 4 standard errors of a chance."""
    return abs(count / draws - chance) <= 4.0 * math.sqrt(chance * (1.0 - chance) / draws)


def chance_of(order: tuple[int, ...], weights: tuple[float, ...]) -> float:
    """Multiply each choice's weight over what is left: the closed form."""
    chance, left = 1.0, sum(weights)
    for item in order:
        chance *= weights[item] / left
        left -= weights[item]
    return chance


def test_the_closed_form_gives_the_published_chances() -> None:
    """The chances written here are products of the closed form, and sum to 1 and to 2."""
    for pair, chance in PAIRS.items():
        assert chance_of(pair, WEIGHTS) == pytest.approx(chance, rel=1e-12)
    assert sum(PAIRS.values()) == pytest.approx(1.0, rel=1e-12)
    for item, chance in enumerate(INCLUDED):
        assert sum(value for pair, value in PAIRS.items() if item in pair) == pytest.approx(chance, abs=5e-9)


def test_the_first_place_goes_in_proportion_to_the_weights() -> None:
    """Weights 1 to 4 come first in 10, 20, 30 and 40 % of the draws."""
    counts = np.bincount(drawn(np.array(WEIGHTS), 1.0)[:, 0], minlength=4)
    assert all(agrees(count, chance) for count, chance in zip(counts.tolist(), FIRST, strict=True))


def test_ordered_pairs_come_as_without_replacement() -> None:
    """All twelve ordered pairs have the frequencies of the closed form, one by one and together."""
    first_two = drawn(np.array(WEIGHTS), 1.0)[:, :2]
    counts = [int(np.sum((first_two[:, 0] == one) & (first_two[:, 1] == two))) for one, two in PAIRS]
    assert all(agrees(count, chance) for count, chance in zip(counts, PAIRS.values(), strict=True))
    expected = [DRAWS * chance for chance in PAIRS.values()]
    assert stats.chisquare(counts, expected).pvalue > LIKELY
    for item, chance in enumerate(INCLUDED):
        assert agrees(int(np.sum(first_two == item)), chance)


@pytest.mark.parametrize(
    ("temperature", "first"),
    [(1.0, (0.66524096, 0.24472847, 0.09003057)), (0.5, (0.86681333, 0.11731043, 0.01587624))],
)
def test_first_choices_follow_the_softmax_of_log_scores(temperature: float, first: tuple[float, ...]) -> None:
    """Log scores 2, 1, 0: the softmax at temperatures 1 and 0.5 (Kool et al. 2019; recomputed)."""
    assert first == pytest.approx(np.exp(np.array(LOGITS) / temperature) / sum(np.exp(np.array(LOGITS) / temperature)))
    counts = np.bincount(drawn(np.exp(LOGITS), temperature)[:, 0], minlength=3)
    assert all(agrees(count, chance) for count, chance in zip(counts.tolist(), first, strict=True))


def test_whole_orders_come_with_their_products() -> None:
    """Log scores 2, 1, 0: all six orders, the falling one in 48.6 % of draws (closed form; recomputed)."""
    weights = tuple(math.exp(logit) for logit in LOGITS)
    assert chance_of((0, 1, 2), weights) == pytest.approx(0.48633011, abs=5e-9)
    orders = drawn(np.exp(LOGITS), 1.0)
    for wanted in itertools.permutations(range(3)):
        assert agrees(int(np.sum(np.all(orders == wanted, axis=1))), chance_of(wanted, weights))


def test_the_greatest_perturbed_log_score_is_itself_gumbel() -> None:
    """Its mean is logsumexp plus Euler's constant: 2.984821629 for log scores 2, 1, 0.

    Kool et al. 2019: from memory, recomputed.
    """
    perturbed = np.log(np.exp(LOGITS) * multipliers(7, posts(3 * DRAWS), 1.0).reshape(DRAWS, 3))
    greatest = perturbed.max(axis=1)
    location = math.log(sum(math.exp(logit) for logit in LOGITS))
    assert location + np.euler_gamma == pytest.approx(2.984821629, abs=5e-10)
    assert abs(greatest.mean() - 2.984821629) <= 4.0 * math.pi / math.sqrt(6.0 * DRAWS)
    assert stats.kstest(greatest, stats.gumbel_r(loc=location).cdf).pvalue > LIKELY


@pytest.mark.parametrize("seed", [0, 1, 2**63, 2**64 - 1])
def test_noise_has_scipys_gumbel_distribution(seed: int) -> None:
    """Neither random hashes nor consecutive ones give noise that is told from scipy.stats.gumbel_r."""
    counted = np.arange(100_000, dtype=np.uint64)
    for hashes in (posts(100_000), counted, counted[:50_000] << np.uint64(40)):
        assert stats.kstest(gumbel(seed, hashes), stats.gumbel_r.cdf).pvalue > LIKELY


@pytest.mark.parametrize(("one", "other"), [(0, 1), (1, 2), (7, 7 << 32), (2**64 - 1, 0), (5, 5 ^ 1 << 63)])
def test_seeds_have_noise_of_their_own(one: int, other: int) -> None:
    """Over the same posts, near seeds give uncorrelated noise, and their difference is logistic as independence has it.

    The difference of two independent standard Gumbel variables is standard logistic (from memory; by convolution).
    """
    hashes = np.arange(100_000, dtype=np.uint64)
    first, second = gumbel(one, hashes), gumbel(other, hashes)
    assert stats.spearmanr(first, second).pvalue > LIKELY
    assert stats.kstest(first - second, stats.logistic.cdf).pvalue > LIKELY
    assert not set(first.tolist()) & set(second.tolist())


def test_near_posts_have_noise_of_their_own() -> None:
    """Neighbours in the list of hashes are uncorrelated."""
    noise = gumbel(3, np.arange(100_001, dtype=np.uint64))
    assert stats.spearmanr(noise[:-1], noise[1:]).pvalue > LIKELY


def test_noise_is_a_function_of_seed_and_post() -> None:
    """A post's noise is the same alone, in any company, and on the next page."""
    hashes = posts(500)
    whole = gumbel(9, hashes)
    assert np.array_equal(whole, gumbel(9, hashes))
    assert np.array_equal(whole[::-1], gumbel(9, hashes[::-1]))
    assert [float(gumbel(9, hashes[at : at + 1])[0]) for at in range(20)] == whole[:20].tolist()
    assert not np.any(whole == gumbel(10, hashes))


def unmixed(wanted: int) -> int:
    """Find what the scrambling turns into a number, step by step backwards."""
    value = wanted
    for shift, factor in ((31, 0x94D049BB133111EB), (27, 0xBF58476D1CE4E5B9)):
        value = unshifted(value, shift) * pow(factor, -1, 2**64) % 2**64
    return (unshifted(value, 30) - 0x9E3779B97F4A7C15) % 2**64


def unshifted(value: int, shift: int) -> int:
    """Find x where x ^ (x >> shift) is the value."""
    found = value
    for _ in range(64 // shift):
        found = value ^ found >> shift
    return found


def test_the_scrambling_is_that_of_splitmix64() -> None:
    """Seed 0's first outputs (G. Steele, D. Lea, C. Flood, OOPSLA 2014; from memory, recomputed)."""
    steps = np.array([0, 0x9E3779B97F4A7C15, 0x9E3779B97F4A7C15 * 2 % 2**64], dtype=np.uint64)
    assert _mix(steps).tolist() == [0xE220A8397B1DCDAF, 0x6E789E6AA1B965F4, 0x06C45D188009454F]


@pytest.mark.parametrize("extreme", [0, 1, 2**52, 2**64 - 2**12, 2**64 - 1])
def test_the_outermost_draws_are_finite(extreme: int) -> None:
    """Even the least and the greatest 64 bits give finite noise: no post is always first or never shown."""
    seed = int(_mix(np.array([4], dtype=np.uint64))[0])
    post = np.array([unmixed(extreme) ^ seed], dtype=np.uint64)
    assert _mix(post ^ np.uint64(seed)).tolist() == [extreme]
    noise = gumbel(4, post)
    assert np.all(np.isfinite(noise))
    assert -3.7 < noise[0] < 36.8


def test_without_temperature_nothing_moves() -> None:
    """Temperature 0 multiplies every score by exactly 1, and no posts have no multipliers."""
    assert multipliers(5, posts(10), 0.0).tolist() == [1.0] * 10
    assert multipliers(5, posts(0), 1.0).tolist() == []


@pytest.mark.parametrize("temperature", [1e-9, 1.0, 50.0, 1e9])
def test_multipliers_are_positive_and_finite(temperature: float) -> None:
    """No temperature makes a score of more than 0 vanish or overflow; a score of 0 stays 0."""
    found = multipliers(5, posts(10_000), temperature)
    assert np.all((found > 0.0) & np.isfinite(found * 1e9))
    assert not np.any(found * 0.0)
