"""Affinity: how much a reader cares about the actor of an edge.

    affinity(V, x, t) = min(ceiling, max(0, base + Σ gain[kind] · 2^(-age / half_life)))

over V's interactions with posts by x; the base follows V's relation to x. A muted or blocked x has 0, and V itself 0.
"""

from dataclasses import dataclass, replace

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


@dataclass(frozen=True, slots=True)
class Acquaintance:
    """Everybody in a reader's circle, before affinity: what does not change with time or policy.

    Attributes:
        reader: The reader's place among the people.
        person: Hashes, shape (n,), uint64, ascending.
        relation: The reader's relation to each, shape (n,), a relation code.
        dealings: The reader's interactions with posts by known authors.
        acts: The place of the author of each dealing, shape (d,).
    """

    reader: int
    person: NDArray[np.uint64]
    relation: NDArray[np.uint8]
    dealings: Dealings
    acts: NDArray[np.intp]

    def affinity(self, ranking: Ranking, t_ms: int) -> NDArray[np.float64]:
        """Compute the reader's affinity to each person at a time in Unix milliseconds, shape (n,)."""
        rule, dealings = ranking.policy.affinity, self.dealings
        total = np.array([rule.stranger, rule.follow, rule.friend, 0.0, 0.0])[self.relation]
        if len(self.acts):
            age_ms = np.maximum(t_ms - dealings.time_ms, 0.0)
            gained = ranking.gains_of(dealings.code) * np.exp2(age_ms / -rule.half_life_ms)
            total += np.bincount(self.acts, gained, len(total))
        affinity: NDArray[np.float64] = np.minimum(np.maximum(total, 0.0), rule.ceiling)
        affinity[self.relation >= MUTE] = 0.0
        affinity[self.reader] = 0.0
        return affinity

    def only(self, kept: NDArray[np.bool_]) -> "Acquaintance":
        """Return the same circle with only the chosen dealings."""
        dealings = Dealings(self.dealings.author[kept], self.dealings.code[kept], self.dealings.time_ms[kept])
        return replace(self, dealings=dealings, acts=self.acts[kept])


def acquaintance(
    reader: int, tie_person: NDArray[np.uint64], tie_relation: NDArray[np.uint8], dealings: Dealings
) -> Acquaintance:
    """Gather a reader's circle; see `circle` for the arguments."""
    everyone = np.concatenate([tie_person, dealings.author, np.array([reader], dtype=np.uint64)])
    order = np.argsort(everyone, kind="stable")
    ordered = everyone[order]
    first = np.concatenate(([True], ordered[1:] != ordered[:-1]))
    person, place = ordered[first], np.empty(len(order), dtype=np.intp)
    place[order] = np.cumsum(first) - 1
    relation = np.zeros(len(person), dtype=np.uint8)
    relation[place[: len(tie_person)]] = tie_relation
    return Acquaintance(int(place[-1]), person, relation, dealings, place[len(tie_person) : -1])


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
    known = acquaintance(reader, tie_person, tie_relation, dealings)
    return Circle(known.person, known.relation, known.affinity(ranking, t_ms))
