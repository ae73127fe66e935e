"""What a worker remembers of rows and posts between reads, kept true by the store's change log.

Every read begins, in the round trip that fetches the reader's own state, with the entries of the change log that came
since this worker last looked; what has changed is forgotten before anything is ranked. An event's changes are logged
before it is acknowledged, so a read that begins after the answer never ranks from before it. A worker that has been
left behind, or whose store was emptied, forgets everything.
"""

from collections import OrderedDict
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from typing import Any, Generic, TypeVar

from service.store.calls import Argument
from service.store.keys import CHANGED, CHANGES

READ_AT_ONCE = 500
"""Most entries of the change log that one read looks at; a worker further behind begins anew."""

_REMEMBERED_CHANGES = 50_000
_NOWHERE = -1

Value = TypeVar("Value")


class Bounded(Generic[Value]):
    """A mapping by hash that forgets what was least lately used when it is over its size.

    Args:
        size: the most it holds, in the unit that values are put with.

    """

    def __init__(self, size: int) -> None:
        self._size = size
        self._held: OrderedDict[bytes, tuple[Value, int]] = OrderedDict()
        self.used = 0

    def get(self, one: bytes) -> Value | None:
        """Give a value, None where there is none."""
        found = self._held.get(one)
        if found is None:
            return None
        self._held.move_to_end(one)
        return found[0]

    def put(self, one: bytes, value: Value, size: int) -> None:
        """Hold a value of some size."""
        self.drop(one)
        self._held[one] = (value, size)
        self.used += size
        while self.used > self._size:
            _, (_, freed) = self._held.popitem(last=False)
            self.used -= freed

    def drop(self, one: bytes) -> None:
        """Forget a value."""
        found = self._held.pop(one, None)
        if found is not None:
            self.used -= found[1]

    def clear(self) -> None:
        """Forget everything."""
        self._held.clear()
        self.used = 0


@dataclass(frozen=True, slots=True)
class Ticket:
    """When a fetch began: what changed since must not be remembered from it."""

    epoch: int
    position: int


class Follower:
    """Follows the change log.

    Attributes:
        position: number of the last entry taken into account.

    """

    def __init__(self) -> None:
        self.position = _NOWHERE
        self._epoch = 0
        self._since = _NOWHERE
        self._changed_at: dict[bytes, int] = {}

    def commands(self) -> list[Sequence[Argument]]:
        """Give the commands that ask for the entries since the position."""
        return [(b"GET", CHANGED), (b"XRANGE", CHANGES, b"(%d-0" % max(self.position, 0), b"+", b"COUNT", READ_AT_ONCE)]

    def take(self, asked_at: int, answers: Sequence[Any]) -> set[bytes] | None:
        """Take the answers into account.

        Args:
            asked_at: the position when the commands were made; other answers may have moved it since.
            answers: to `commands`.

        Returns:
            The hashes that have changed, or None where everything is to be forgotten.

        """
        newest, entries = int(answers[0] or 0), answers[1]
        numbers = [int(number.partition(b"-")[0]) for number, _ in entries]
        if not self._whole(asked_at, newest, numbers):
            self._begin_anew(newest)
            return None
        changed: set[bytes] = set()
        for number, (_, fields) in zip(numbers, entries, strict=True):
            if number > self.position:
                for blob in (fields[1], fields[3]):
                    changed.update(blob[at : at + 8] for at in range(0, len(blob), 8))
        self.position = max([self.position, newest, *numbers])
        self._changed_at.update(dict.fromkeys(changed, self.position))
        if len(self._changed_at) > _REMEMBERED_CHANGES:
            self._changed_at, self._since = {}, self.position
        return changed

    def ticket(self) -> Ticket:
        """Mark the beginning of a fetch."""
        return Ticket(self._epoch, self.position)

    def unchanged_since(self, ticket: Ticket, one: bytes) -> bool:
        """Say whether what a fetch brought may be remembered."""
        if ticket.epoch != self._epoch or ticket.position < self._since:
            return False
        return self._changed_at.get(one, _NOWHERE) <= ticket.position

    def _whole(self, asked_at: int, newest: int, numbers: Sequence[int]) -> bool:
        """Say whether the entries follow on the position they were asked for from, without a gap."""
        if asked_at == _NOWHERE or newest < asked_at:
            return False
        expected = newest - asked_at
        return len(numbers) >= expected and (not numbers or numbers[0] == asked_at + 1)

    def _begin_anew(self, newest: int) -> None:
        self.position, self._since = newest, newest
        self._epoch += 1
        self._changed_at = {}


class WorkerCache:
    """Rows and posts as a worker last saw them.

    Args:
        row_bytes: most bytes of rows held.
        posts: most posts held.

    """

    def __init__(self, row_bytes: int, posts: int) -> None:
        self.follower = Follower()
        self.rows: Bounded[bytes] = Bounded(row_bytes)
        self.posts: Bounded[Any] = Bounded(posts)
        self._watches: list[set[bytes]] = []
        self._forgotten = 0

    def take(self, asked_at: int, answers: Sequence[Any]) -> None:
        """Forget what the change log says has changed."""
        changed = self.follower.take(asked_at, answers)
        if changed is None:
            self.rows.clear()
            self.posts.clear()
            self._watches.clear()
            self._forgotten += 1
            return
        for one in changed:
            self.rows.drop(one)
            self.posts.drop(one)
        for watch in self._watches:
            watch.update(changed)

    def keep_rows(self, ticket: Ticket, fetched: Iterable[tuple[bytes, bytes]]) -> None:
        """Remember rows that a fetch brought."""
        for person, row in fetched:
            if self.follower.unchanged_since(ticket, person):
                self.rows.put(person, row, len(row) + 100)

    def keep_posts(self, ticket: Ticket, fetched: Iterable[tuple[bytes, Any]]) -> None:
        """Remember posts that a fetch brought."""
        for post, record in fetched:
            if self.follower.unchanged_since(ticket, post):
                self.posts.put(post, record, 1)

    def watch(self) -> "Watch":
        """Begin to gather what changes from now on."""
        changed: set[bytes] = set()
        self._watches.append(changed)
        return Watch(changed, self._forgotten)

    def stop(self, watch: "Watch") -> None:
        """Gather no more."""
        self._watches = [held for held in self._watches if held is not watch.changed]

    def holds(self, watch: "Watch") -> bool:
        """Say whether a watch has missed nothing."""
        return watch.epoch == self._forgotten


@dataclass(frozen=True, slots=True)
class Watch:
    """What has changed since a moment."""

    changed: set[bytes]
    epoch: int
