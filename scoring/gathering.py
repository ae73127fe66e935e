"""A feed read's candidates: gathered from the circle's rows, chosen by their bounds, judged once looked up.

The loops are compiled (`scoring.compiled`). What is gathered is what `scoring.reduce.reduce_edges` defines; the choice
by bounds is the Threshold Algorithm that `scoring.topk` describes.
"""

import ctypes
from collections.abc import Sequence
from ctypes import c_double, c_int64, c_uint64
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from scoring.affinity import FOLLOW, FRIEND, Circle
from scoring.compiled import (
    Rule,
    Who,
    check,
    hashes,
    lengths,
    numbers,
    passes,
)
from scoring.ranking import Ranking
from scoring.reduce import Candidates

_SMALL: Final = 1 << 16
_LARGE: Final = 1 << 20

_kept_small: list[int] = []
_kept_large: list[int] = []
"""Memory of gatherings that have ended, by the posts they held: it is costlier to ask for than to empty."""

_KEPT_SMALL: Final = 8
_KEPT_LARGE: Final = 2


@dataclass(frozen=True, slots=True)
class Bounds:
    """What bounds the score of candidates that have not been looked up.

    Attributes:
        others: The bound of the crowd's sum of every post that is not listed.
        post: Hashes of posts with a bound of their own, shape (n,), uint64.
        crowd: The bound of each, shape (n,).
        seen_post: Hashes of posts that the reader has seen, shape (m,), uint64.
        seen_ms: When, Unix milliseconds, shape (m,).
        factor: What a seen post's score is multiplied by until a tie adds a newer edge.
        seed: Of the randomness, 0 to 2^64 - 1.
        temperature: Of the randomness, 0 for none.
    """

    others: float
    post: NDArray[np.uint64]
    crowd: NDArray[np.float64]
    seen_post: NDArray[np.uint64]
    seen_ms: NDArray[np.float64]
    factor: float = 1.0
    seed: int = 0
    temperature: float = 0.0


class Reader:
    """Who reads, for `Gathering.judge`: the circle decides with the marks what may be shown.

    Args:
        reader: The reader's hash.
        circle: The reader's circle.
        marks: Who befriended or blocks the reader, packed: 16 bytes each, a hash and a stamp with the relation's code.
        forms: Only posts of one of these forms are found; all where there are none.
        topics: Only posts with one of these topics are found; all where there are none.
    """

    def __init__(
        self, reader: int, circle: Circle, marks: bytes, forms: Sequence[str] = (), topics: Sequence[str] = ()
    ) -> None:
        asked = ("\n".join(forms).encode(), "\n".join(topics).encode())
        self._held = (hashes(circle.person), circle.relation.tobytes(), marks, *asked)
        person, relation, *_ = self._held
        size, lengths_and_texts = len(circle.person), [part for text in asked for part in (len(text), text)]
        self.who = Who(reader, size, person, relation, len(marks) // 16, marks, *lengths_and_texts)


class Gathering:
    """The candidates of one feed read.

    Args:
        ranking: The compiled policy.
        t_ms: The time of the feed, Unix milliseconds.
        posts: About how many posts there will be.
        stranger: Affinity of the crowd; None takes the policy's.
    """

    def __init__(self, ranking: Ranking, t_ms: int, posts: int = 0, stranger: float | None = None) -> None:
        self._rule = Rule.from_buffer_copy(ranking.rule)
        self._stranger = ranking.policy.affinity.crowd if stranger is None else stranger
        self._rule.stranger = self._stranger
        self._ranking = ranking
        self._t_ms = float(t_ms)
        self._values: list[bytes] = []
        self._handle = _taken(posts)

    def __del__(self) -> None:
        handle = getattr(self, "_handle", None)
        if not handle or passes is None:
            return
        posts = self.counts()[0]
        kept, most = (_kept_small, _KEPT_SMALL) if posts <= _SMALL else (_kept_large, _KEPT_LARGE)
        if len(kept) < most and posts <= _LARGE:
            passes.gather_reset(handle)
            kept.append(handle)
        else:
            passes.gather_free(handle)

    def add(self, rows: Sequence[bytes], affinity: NDArray[np.float64], relation: NDArray[np.uint8]) -> None:
        """Add rows.

        Args:
            rows: One packed row for each of n people.
            affinity: The reader's to each, shape (n,).
            relation: The reader's to each, shape (n,).

        Raises:
            UnknownCodeError: An edge has a kind that the policy was not compiled for.
        """
        ties = ((relation == FOLLOW) | (relation == FRIEND)).tobytes()
        check(
            passes.gather_add(
                self._handle,
                self._rule,
                len(rows),
                b"".join(rows),
                lengths(rows),
                numbers(affinity),
                ties,
                self._t_ms,
            )
        )

    def insert(self, posts: NDArray[np.uint64]) -> None:
        """Make posts candidates that no edge of the circle has brought; shape (n,), hashes."""
        check(passes.gather_insert(self._handle, len(posts), hashes(posts)))

    def turn(self, posts: NDArray[np.uint64]) -> None:
        """Turn to posts from beyond the ties: these, shape (n,), hashes, and all that the circle has edges on.

        What were candidates are none any more, also where they are among these. `bound` comes next.
        """
        check(passes.gather_turn(self._handle, len(posts), hashes(posts)))

    def counts(self) -> tuple[int, int, int]:
        """Return how many posts, edges and markers of erasures the rows held."""
        counts = (c_int64 * 3)()
        passes.gather_counts(self._handle, counts)
        posts, edges, markers = counts
        return posts, edges, markers

    def candidates(self) -> Candidates:
        """Return the candidates, in rising order of their hashes."""
        room = self.counts()[0]
        columns = [np.empty(room, kind) for kind in ("<u8", "<f8", "<f8", "<f8")]
        count = passes.gather_candidates(self._handle, *[column.ctypes.data for column in columns])
        order = np.argsort(columns[0][:count], kind="stable")
        post, known, share, newest_ms = (column[:count][order] for column in columns)
        return Candidates(post, known, share, newest_ms)

    def bound(self, bounds: Bounds) -> None:
        """Bound what each candidate stands in order by; the greatest are taken first."""
        check(
            passes.choose_bounds(
                self._handle,
                self._stranger,
                bounds.others,
                len(bounds.post),
                hashes(bounds.post),
                numbers(bounds.crowd),
                len(bounds.seen_post),
                hashes(bounds.seen_post),
                numbers(bounds.seen_ms),
                bounds.factor,
                bounds.seed,
                bounds.temperature,
            )
        )

    def by_newest(self) -> None:
        """Take candidates in order of their newest edges by people followed or befriended."""
        check(passes.choose_newest(self._handle))

    def without(self, posts: Sequence[bytes]) -> None:
        """Leave posts out, given by hashes, singly or several in a row."""
        packed = b"".join(posts)
        passes.choose_without(self._handle, len(packed) // 8, packed)

    def only(self, posts: Sequence[bytes]) -> None:
        """Leave out all but these posts."""
        check(passes.choose_only(self._handle, len(posts), b"".join(posts)))

    def take(self, count: int) -> list[bytes]:
        """Return the hashes of up to `count` of the candidates left with the greatest bounds."""
        taken = (c_uint64 * count)()
        found = passes.choose_take(self._handle, count, taken)
        packed = ctypes.string_at(taken, 8 * found)
        return [packed[at : at + 8] for at in range(0, 8 * found, 8)]

    def next_bound(self) -> float:
        """Return the greatest bound that is left, -1.0 where nothing is."""
        return float(passes.choose_next_bound(self._handle))

    def unseen(self, greatest: float, temperature: float) -> float:
        """Bound the summed weight, (score / greatest)^(1 / temperature), of the candidates that were not taken.

        Args:
            greatest: The greatest score found, above 0.
            temperature: Of the randomness, above 0.
        """
        return float(passes.choose_unseen(self._handle, greatest, 1.0 / temperature))

    def judge(self, posts: Sequence[bytes], values: Sequence[bytes], reader: Reader) -> None:
        """Compute the scores of posts that were looked up, and leave out what the reader may not see.

        Args:
            posts: Hashes, as `take` gave them.
            values: The stored value of each, empty where there is none.
            reader: Who reads.

        Raises:
            UnknownCodeError: An edge has a kind that the policy was not compiled for.
            BrokenValueError: A value is shorter than it says.
        """
        joined = b"".join(values)
        self._values.append(joined)
        check(
            passes.judge(
                self._handle,
                self._rule,
                reader.who,
                len(posts),
                b"".join(posts),
                joined,
                lengths(values),
                self._t_ms,
            )
        )

    def rank(self, *, newest: bool = False) -> None:
        """Put what was found in order: the best first, or what was posted last."""
        passes.judge_rank(self._handle, int(newest))

    def certain(self, next_bound: float) -> int:
        """Return how many posts, from the front, certainly stand before all with no greater bound."""
        return int(passes.judge_certain(self._handle, next_bound))

    def found_count(self) -> int:
        """Return how many posts were found."""
        return int(passes.judge_count(self._handle))

    def found(self, count: int) -> list[tuple[int, float, float]]:
        """Return the first `count` posts in order: number of the look-up, from 0; score; what it stands in order by."""
        nth, score, order = (c_int64 * count)(), (c_double * count)(), (c_double * count)()
        n = passes.judge_found(self._handle, count, nth, score, order)
        return list(zip(nth[:n], score[:n], order[:n], strict=True))


def _taken(posts: int) -> int:
    """Take memory that was kept, of the right size, or new memory."""
    kept = _kept_small if posts <= _SMALL else _kept_large
    handle: int | None = kept.pop() if kept else passes.gather_new(max(posts, _SMALL // 2))
    if not handle:
        raise MemoryError
    return handle
