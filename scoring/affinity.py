"""Affinity: how much a reader cares about the actor of an edge.

    affinity(V, x, t) = min(ceiling, max(0, base + Σ gain[kind] · 2^(-age / half_life)))

over V's interactions with posts by x; the base follows V's relation to x. A muted or blocked x has 0, and V itself 0.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scoring.ranking import Ranking

NONE, FOLLOW, FRIEND, MUTE, BLOCK = range(5)
"""Codes of relations."""


@dataclass(frozen=True, slots=True)
class Dealings:
    """A reader's interactions with posts whose author is known.

    Attributes:
        author: Hash of each post's author, shape (n,), uint64.
        code: Kind code of each interaction, shape (n,).
        time_ms: Its time, Unix milliseconds, shape (n,).
    """

    author: NDArray[np.uint64]
    code: NDArray[np.intp]
    time_ms: NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Circle:
    """Everybody who is not the crowd for a reader: the reader, ties and those the reader had dealings with.

    Attributes:
        person: Hashes, shape (n,), uint64, ascending.
        relation: The reader's relation to each, shape (n,), a relation code.
        affinity: The reader's affinity to each, shape (n,).
    """

    person: NDArray[np.uint64]
    relation: NDArray[np.uint8]
    affinity: NDArray[np.float64]


def circle(
    reader: int,
    tie_person: NDArray[np.uint64],
    tie_relation: NDArray[np.uint8],
    dealings: Dealings,
    ranking: Ranking,
    t_ms: int,
) -> Circle:
    """Compute a reader's circle and affinities.

    Args:
        reader: The reader's hash.
        tie_person: Hashes of the people the reader declared a tie to, shape (n,), each once.
        tie_relation: The relation to each, shape (n,).
        dealings: The reader's interactions with posts by known authors.
        ranking: The compiled policy.
        t_ms: The time of the feed, Unix milliseconds.

    Returns:
        The circle; the reader is always in it.
    """
    rule = ranking.policy.affinity
    everyone = np.concatenate([tie_person, dealings.author, np.array([reader], dtype=np.uint64)])
    person, place = np.unique(everyone, return_inverse=True)
    ties, acts = place[: len(tie_person)], place[len(tie_person) : -1]
    relation = np.zeros(len(person), dtype=np.uint8)
    relation[ties] = tie_relation
    base = np.array([rule.stranger, rule.follow, rule.friend, 0.0, 0.0])[relation]
    age_ms = np.maximum(t_ms - dealings.time_ms, 0.0)
    gained = ranking.gains_of(dealings.code) * np.exp2(age_ms / -rule.half_life_ms)
    total = np.bincount(acts, gained, len(person)).astype(np.float64, copy=False)
    affinity = np.clip(base + total, 0.0, rule.ceiling)
    affinity[(relation == MUTE) | (relation == BLOCK) | (person == reader)] = 0.0
    return Circle(person, relation, affinity)
