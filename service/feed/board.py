"""The crowd board: the greatest posts by everybody's edges, and a bound for all others."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scoring.ranking import Ranking
from scoring.reduce import places_in
from service.store import keys

LISTED = 500
"""How many of a board's posts a feed read looks at."""

_CLOSE_ENOUGH = 2.0

_ROUNDED = 1e-9
"""Allows for rounding, beside that of the marks: a mark is about as large as the time over the half-life, and has been
rounded a few times to 53 bits of that; the error comes out of the power multiplied by its logarithm."""

Command = tuple[bytes | str | int, ...]


@dataclass(frozen=True, slots=True)
class BoardState:
    """A board as it was read.

    Attributes:
        post: hashes of the listed posts, shape (n,), uint64.
        mark: log2 of the decayed count of each plus time over half-life, shape (n,).
        lowest: the mark that no unlisted post is above, -inf where all are listed.

    """

    post: NDArray[np.uint64]
    mark: NDArray[np.float64]
    lowest: float


@dataclass(frozen=True, slots=True)
class CrowdBound:
    """Upper bounds of the weighted crowd sum.

    Attributes:
        post: hashes of posts with a bound of their own, shape (n,), uint64.
        bound: the bound of each, shape (n,); inf where nothing is known.
        others: the bound of every other post.

    """

    post: NDArray[np.uint64]
    bound: NDArray[np.float64]
    others: float

    def of(self, posts: NDArray[np.uint64]) -> NDArray[np.float64]:
        """Give the bound of each post, of the same shape; the posts are in rising order."""
        bounds = np.full(len(posts), self.others)
        place, listed = places_in(posts, self.post)
        bounds[place] = self.bound[listed]
        return bounds


class BoardReader:
    """Reads the board that bounds a policy's crowd best.

    Args:
        ranking: the compiled policy.
        slots: slots of the bank that have a board.
        horizon_ms: greatest age, milliseconds.

    """

    def __init__(self, ranking: Ranking, slots: tuple[int, ...], horizon_ms: float) -> None:
        ceilings = [ranking.ceiling_over(slot, horizon_ms) for slot in slots]
        close = [place for place, ceiling in enumerate(ceilings) if ceiling <= _CLOSE_ENOUGH]
        chosen = close[0] if close else int(np.argmin(ceilings))
        self.slot = slots[chosen]
        self._half_life_ms = ranking.bank.half_lives_ms[self.slot]
        heaviest = float(ranking.weights.max(initial=0.0))
        self._scale = ceilings[chosen] * heaviest

    def commands(self) -> list[Command]:
        """Give the commands whose answers `read` takes."""
        return [
            (b"ZREVRANGE", keys.board(self.slot), 0, LISTED - 1, b"WITHSCORES"),
            (b"GET", keys.floor(self.slot)),
        ]

    def read(self, answers: list[Any]) -> BoardState:
        """Read the answers."""
        flat, floor = answers
        marks = np.array([float(mark) for mark in flat[1::2]])
        lowest = float(marks[-1]) if len(marks) == LISTED else float(floor) if floor else -np.inf
        return BoardState(np.frombuffer(b"".join(flat[::2]), dtype="<u8"), marks, lowest)

    def bound(self, state: BoardState, changed: set[bytes], t_ms: int) -> CrowdBound:
        """Turn a board into bounds.

        Args:
            state: the board as it was read.
            changed: posts that have changed since: nothing is known of them.
            t_ms: the time of the feed, Unix milliseconds.

        """
        unknown = np.frombuffer(b"".join(changed), dtype="<u8")
        bounds = np.concatenate((self._values(state.mark, t_ms), np.full(len(unknown), np.inf)))
        others = float(self._values(np.array([state.lowest]), t_ms)[0])
        return CrowdBound(np.concatenate((state.post, unknown)), bounds, others)

    def _values(self, marks: NDArray[np.float64], t_ms: int) -> NDArray[np.float64]:
        now = t_ms / self._half_life_ms
        values: NDArray[np.float64] = self._scale * np.exp2(marks - now)
        return values * (1.0 + _ROUNDED + now * 2.0**-50)
