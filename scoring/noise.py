"""Measured randomness: Gumbel noise on the log score.

Taking the k greatest of log score + temperature · Gumbel noise draws without replacement with chances in proportion to
score^(1/temperature), the Plackett-Luce model (Kool, van Hoof and Welling, "Stochastic Beams and Where to Find Them",
ICML 2019). The noise is a function of a seed and the post, so the pages of one feed agree.
"""

import numpy as np
from numpy.typing import NDArray


def gumbel(seed: int, post: NDArray[np.uint64]) -> NDArray[np.float64]:
    """Return standard Gumbel noise for each post.

    Args:
        seed: 0 to 2^64 - 1.
        post: Hashes, shape (n,).

    Returns:
        Noise, shape (n,), the same for the same seed and post.
    """
    mixed = _mix(post ^ _mix(np.array([seed], dtype=np.uint64)))
    uniform = ((mixed >> np.uint64(12)).astype(np.float64) + 0.5) * 2.0**-52  # of 52 bits: with 53, 1.0 would occur
    noise: NDArray[np.float64] = -np.log(-np.log(uniform))
    return noise


def multipliers(seed: int, post: NDArray[np.uint64], temperature: float) -> NDArray[np.float64]:
    """Return what each score is multiplied by to draw an order: exp(temperature · noise), 1.0 at temperature 0."""
    if temperature == 0.0:
        return np.ones(len(post))
    scaled: NDArray[np.float64] = np.exp(np.clip(temperature * gumbel(seed, post), -600.0, 600.0))
    return scaled


def slot_chances(
    chosen: NDArray[np.float64], known: NDArray[np.float64], temperature: float, unseen: float = 0.0
) -> NDArray[np.float64]:
    """Return the chance with which each place of a drawn order was given as it was, after the places before it.

    The closed form of the Plackett-Luce model (Plackett, "The Analysis of Permutations", Applied Statistics 24, 1975):
    the weight of a score is score^(1 / temperature), and each place goes to one of those left in proportion to them.

    Args:
        chosen: Scores in the order drawn, 0 or more, shape (k,).
        known: Scores of all candidates that are known, the chosen among them, shape (n,).
        temperature: 0 or more; at 0 nothing is drawn and every chance is 1.
        unseen: Summed weight of candidates whose scores are not known, as a multiple of the greatest known weight.
            With 0 the chances are upper bounds, with an upper bound of it they are lower ones.

    Returns:
        Chances, shape (k,).

    >>> slot_chances(np.array([3.0, 1.0]), np.array([1.0, 2.0, 3.0]), temperature=1.0)
    array([0.5       , 0.33333333])
    """
    greatest = float(known.max(initial=0.0))
    if temperature == 0.0 or greatest == 0.0:
        return np.ones(len(chosen))
    drawn, everything = (np.power(scores / greatest, 1.0 / temperature) for scores in (chosen, known))
    rest = max(0.0, float(everything.sum() - drawn.sum())) + unseen
    left = np.cumsum(drawn[::-1])[::-1] + rest
    chances: NDArray[np.float64] = np.divide(drawn, left, out=np.ones(len(drawn)), where=left > 0.0)
    return chances


def _mix(value: NDArray[np.uint64]) -> NDArray[np.uint64]:
    """Scramble 64 bits (the finaliser of SplitMix64; Steele, Lea and Flood, OOPSLA 2014)."""
    value = value + np.uint64(0x9E3779B97F4A7C15)
    value = (value ^ (value >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    value = (value ^ (value >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return value ^ (value >> np.uint64(31))
