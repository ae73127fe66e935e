"""What a worker remembers of rows and posts between reads, kept true by the store's change log.

Every read begins, in the round trip that fetches the reader's own state, with the entries of the change log that came
since this worker last looked; what has changed is forgotten before anything is ranked. An event's changes are logged
before it is acknowledged, so a read that begins after the answer never ranks from before it. A worker that has been
left behind, or whose store was emptied, forgets everything.
"""

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from typing import Any, Generic, TypeVar

from service.store.calls import Argument
from service.store.keys import CHANGED, CHANGES

READ_AT_ONCE = 500
"""Most entries of the change log that one read looks at; a worker further behind begins anew."""

OVERHEAD = 200
"""What holding a value costs beside its bytes, about."""

_REMEMBERED_CHANGES = 50_000
_NOWHERE = -1

Value = TypeVar("Value")


class Recent(Generic[Value]):
    """A mapping by hash that forgets what was not lately used.

    It holds two generations. What is put or found goes into the young one; when that has filled half of the size it
    becomes the old one, and the one before is forgotten. So a look-up costs no more than that of a dict.

    Args:
        size: the most it holds, bytes, about.
        size_of: tells how many bytes a value takes.

    """

    def __init__(self, size: int, size_of: Callable[[Value], int]) -> None:
        self._half = size // 2
        self._size_of = size_of
        self._young: dict[bytes, Value] = {}
        self._old: dict[bytes, Value] = {}
        self._young_size = 0

    def __len__(self) -> int:
        return len(self._young.keys() | self._old.keys())

    def get(self, one: bytes) -> Value | None:
        """Give a value, None where there is none."""
        return self.get_all([one])[0]

    def get_all(self, wanted: Sequence[bytes]) -> list[Value | None]:
        """Give many values, None for each that there is none of."""
        found = list(map(self._young.get, wanted))
        if self._old and None in found:
            again = [(place, one) for place, one in enumerate(wanted) if found[place] is None and one in self._old]
            for place, one in again:
                found[place] = self._old[one]
            self.put_all([(one, self._old.pop(one)) for one in {one for _, one in again}])
        return found

    def put(self, one: bytes, value: Value) -> None:
        """Hold a value."""
        self.put_all([(one, value)])

    def put_all(self, values: Sequence[tuple[bytes, Value]]) -> None:
        """Hold values; nothing at all is held where the size is 0."""
        if not self._half:
            return
        size = sum([self._size_of(value) for _, value in values]) + OVERHEAD * len(values)
        if self._young_size + size > self._half:
            self._old, self._young, self._young_size = self._young, {}, 0
            if size > self._half:
                return
        self._young.update(values)
        self._young_size += size

    def drop(self, one: bytes) -> None:
        """Forget a value."""
        if (held := self._young.pop(one, None)) is not None:
            self._young_size -= self._size_of(held) + OVERHEAD
        self._old.pop(one, None)

    def clear(self) -> None:
        """Forget everything."""
        self._young, self._old, self._young_size = {}, {}, 0


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

    def nothing_since(self, ticket: Ticket) -> bool:
        """Say whether nothing at all is known to have changed since a fetch began."""
        return ticket == self.ticket()

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
        row_bytes: most memory for rows, bytes.
        post_bytes: most memory for posts, bytes.

    """

    def __init__(self, row_bytes: int, post_bytes: int) -> None:
        self.follower = Follower()
        self.size = row_bytes
        self.rows: Recent[bytes] = Recent(row_bytes, len)
        self.posts: Recent[bytes] = Recent(post_bytes, len)
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

    def keep(self, kind: Recent[bytes], ticket: Ticket, fetched: Iterable[tuple[bytes, bytes]]) -> None:
        """Remember what a fetch brought, as far as it has not changed since."""
        if self.follower.nothing_since(ticket):
            kind.put_all(list(fetched))
        else:
            kind.put_all([(one, value) for one, value in fetched if self.follower.unchanged_since(ticket, one)])

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
