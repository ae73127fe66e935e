"""Compiled policies and random edges for tests of the ranking mathematics, and what they come to by plain loops."""

import functools
import math
import random
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scoring.bank import Bank
from scoring.curves import Curve, HalfLife, Power
from scoring.edges import EdgeRows, join_rows
from scoring.policy import AffinityRule, Policy
from scoring.ranking import Ranking, compile_policy

HOUR_MS = 3_600_000.0
DAY_MS = 24 * HOUR_MS
HORIZON_MS = 30 * DAY_MS
NOW_MS = 1_777_885_200_000  # 2026-05-04T09:00:00Z

KINDS = ("like", "comment", "share", "hide", "post.note")
WEIGHTS: Mapping[str, float] = {"like": 0.5, "comment": 1.0, "share": 2.25, "hide": 0.0, "post.note": 3.0}
GAINS: Mapping[str, float] = {"like": 0.1, "comment": 0.3, "share": 0.5, "hide": -1.0}
SMALL_BANK = Bank((6 * HOUR_MS, 12 * HOUR_MS, 3 * DAY_MS))
EXACT = HalfLife(12 * HOUR_MS)
FITTED = Power(6 * HOUR_MS, 1.0)

AGES_MS = (0, 0, 1, 1_000, 59_999, 3_600_000, 43_200_000, 86_400_001, 2_500_000_000, 400 * 86_400_000, -1, -300_000)
"""Now (twice as likely), just before, within retention, long past it, and ahead of now."""


@functools.cache
def ranking(
    curve: Curve = EXACT, bank: Bank | None = None, *, stranger: float = 0.02, ceiling: float = 10.0
) -> Ranking:
    """Compile a policy over `KINDS`; an exact curve on the small bank, any other on one of eight half-lives."""
    rule = AffinityRule(stranger=stranger, ceiling=ceiling, gains=GAINS)
    wide = Bank(tuple(0.25 * HOUR_MS * 3.0**power for power in range(8)))
    chosen = bank or (SMALL_BANK if curve == EXACT else wide)
    return compile_policy(Policy("plain", WEIGHTS, curve, rule), chosen, KINDS, HORIZON_MS)


@dataclass(frozen=True)
class PlainEdge:
    """One edge as plain numbers; `at_ms` in Unix milliseconds."""

    post: int
    code: int
    at_ms: int
    flags: int = 0

    @property
    def stamp(self) -> int:
        """Time and code in one number."""
        return self.at_ms << 16 | self.flags | self.code

    def packed(self) -> bytes:
        """Give the 16 bytes of the edge, built without the code under test."""
        return self.post.to_bytes(8, "little") + self.stamp.to_bytes(8, "little")


def random_edges(rng: random.Random, count: int, posts: list[int], now_ms: int = NOW_MS) -> list[PlainEdge]:
    """Draw edges in no order of time, many of them simultaneous."""
    return [PlainEdge(rng.choice(posts), rng.randrange(len(KINDS)), now_ms - rng.choice(AGES_MS)) for _ in range(count)]


def as_rows(rows: list[list[PlainEdge]]) -> EdgeRows:
    """Pack rows and decode them."""
    return join_rows([b"".join(edge.packed() for edge in row) for row in rows])


def left_of(curve: Curve, age_ms: float) -> float:
    """Freshness by its formula; ages ahead of now count as 0."""
    age_ms = max(age_ms, 0.0)
    if isinstance(curve, HalfLife):
        return math.pow(2.0, -age_ms / curve.half_life_ms)
    return math.pow(1.0 + age_ms / curve.scale_ms, -curve.exponent)


def followed(compiled: Ranking, age_ms: float) -> float:
    """What the bank makes of the freshness, by its formula."""
    age_ms = max(age_ms, 0.0)
    pairs = zip(compiled.fit.coefficients.tolist(), compiled.bank.half_lives_ms, strict=True)
    return math.fsum(coefficient * math.pow(2.0, -age_ms / half_life) for coefficient, half_life in pairs)


def hashes(values: list[int]) -> NDArray[np.uint64]:
    """Make an array of hashes."""
    return np.array(values, dtype=np.uint64)
