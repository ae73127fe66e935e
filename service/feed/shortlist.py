"""Look candidates up in order of their bounds until the best are certain."""

from dataclasses import dataclass, field

from scoring.gathering import Gathering, Reader
from scoring.topk import settled
from service.feed.deadline import Deadline
from service.feed.reads import Reads

FIRST_BATCH = 48
MOST_AT_ONCE = 2000


@dataclass(slots=True)
class Found:
    """A post that the reader may see (not frozen: that would double what making one costs).

    `value` is as stored. `score` is the contract's, seen factor included; `order` is what it stands in order by, with
    randomness.
    """

    hash: bytes
    value: bytes
    score: float
    order: float


@dataclass(slots=True)
class Shortlist:
    """What was found.

    Attributes:
        found: visible posts, the best first; not all where more were found than asked for.
        certain: how many posts, from the front, are certainly the best there are.
        exhausted: whether every candidate was looked up.
        total: how many visible posts were found.

    """

    found: list[Found] = field(default_factory=list)
    certain: int = 0
    exhausted: bool = False
    total: int = 0

    @property
    def more(self) -> bool:
        """Whether there may be posts beyond the list."""
        return not self.exhausted or self.total > len(self.found)


class Shortlister:
    """Looks up one feed's candidates; what it has found it keeps, so that more can be asked for.

    Args:
        reads: fetches for this worker.
        reader: who reads.
        gathering: the candidates, bounded.
        deadline: ends the work.

    """

    def __init__(self, reads: Reads, reader: Reader, gathering: Gathering, deadline: Deadline) -> None:
        self._reads = reads
        self._reader = reader
        self._gathering = gathering
        self._deadline = deadline
        self._posts: list[bytes] = []
        self._values: list[bytes] = []
        self._batch = 0

    async def best(self, need: int) -> Shortlist:
        """Find the best candidates by what they stand in order by.

        Args:
            need: how many posts are wanted.

        Returns:
            At least `need` certain posts, unless there are fewer or the deadline passed.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        self._batch = max(self._batch, FIRST_BATCH, need + 16)
        next_bound = self._gathering.next_bound()
        while next_bound >= 0.0 and not self._enough(need, next_bound):
            if self._posts and self._deadline.passed():
                break
            await self._look_up(self._batch)
            self._batch = min(2 * self._batch, MOST_AT_ONCE)
            next_bound = self._gathering.next_bound()
        self._gathering.rank()
        exhausted = next_bound < 0.0
        found, total = self._found(need), self._gathering.found_count()
        return Shortlist(found, total if exhausted else self._gathering.certain(next_bound), exhausted, total)

    async def newest(self, need: int) -> Shortlist:
        """Find the candidates posted last: every one is looked up, those with the newest edges first."""
        while self._gathering.next_bound() >= 0.0 and not (self._posts and self._deadline.passed()):
            await self._look_up(MOST_AT_ONCE)
        self._gathering.rank(newest=True)
        exhausted = self._gathering.next_bound() < 0.0
        found, total = self._found(need), self._gathering.found_count()
        return Shortlist(found, total if exhausted else 0, exhausted, total)

    def _enough(self, need: int, next_bound: float) -> bool:
        """Say whether no candidate left can reach the least of so many; puts what was found in order."""
        self._gathering.rank()
        best = self._gathering.found(need)
        return len(best) == need and settled(best[-1][2], next_bound)

    def _found(self, need: int) -> list[Found]:
        return [
            Found(self._posts[nth], self._values[nth], score, order)
            for nth, score, order in self._gathering.found(need)
        ]

    async def _look_up(self, count: int) -> None:
        posts = self._gathering.take(count)
        values = await self._reads.posts(posts)
        self._gathering.judge(posts, values, self._reader)
        self._posts += posts
        self._values += values
