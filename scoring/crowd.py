"""The crowd: the weighted, decayed sum over every edge of a post, from its raw edges and running sums."""

import numpy as np
from numpy.typing import NDArray

from scoring.edges import codes, times_ms
from scoring.ranking import Ranking
from scoring.reduce import sum_by

Values = NDArray[np.float64]


def raw_sums(post: NDArray[np.intp], stamp: NDArray[np.uint64], count: int, ranking: Ranking, t_ms: int) -> Values:
    """Sum raw edges by post.

    Args:
        post: Which of `count` posts each edge is of, shape (e,).
        stamp: Time and code of each edge, shape (e,).
        count: Number of posts, n.
        ranking: The compiled policy.
        t_ms: The time of the feed, Unix milliseconds.

    Returns:
        Σ weight · freshness for each post, shape (n,).
    """
    value = ranking.weights_of(codes(stamp)) * ranking.crowd_freshness(t_ms - times_ms(stamp))
    return sum_by(post, value, count)


def running_sums(
    post: NDArray[np.intp],
    code: NDArray[np.intp],
    as_of_ms: Values,
    sums: Values,
    count: int,
    ranking: Ranking,
    t_ms: int,
) -> Values:
    """Decay running sums to a time and add them up by post.

    Args:
        post: Which of `count` posts each sum is of, shape (s,).
        code: Kind code of each, shape (s,).
        as_of_ms: As-of time of each, Unix milliseconds, shape (s,).
        sums: One sum for each half-life of the bank, shape (s, m).
        count: Number of posts, n.
        ranking: The compiled policy.
        t_ms: The time of the feed, Unix milliseconds; not before any as-of time.

    Returns:
        Σ weight · Σ coefficient · sum · 2^(-age / half-life) for each post, shape (n,).
    """
    decay = np.exp2((as_of_ms - t_ms)[:, None] / np.array(ranking.bank.half_lives_ms))
    value = ranking.weights_of(code) * ((sums * decay) @ ranking.fit.coefficients)
    return sum_by(post, value, count)
