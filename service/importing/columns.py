"""Turn lines into columns: what is certainly a valid interaction; every other line is left to the model.

A line is taken here only where each check is passed in its plainest form, so what a line means and what is said of a
wrong one are decided in one place, `service/events/`.
"""

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from operator import itemgetter
from typing import Any, Final

import numpy as np
import orjson
from numpy.typing import NDArray
from pydantic import TypeAdapter, ValidationError

from service.events.fields import CONTROLS, ID_BYTES, Kind
from service.importing.instants import WRONG, read_times

AT_ONCE: Final = 10_000
"""Lines whose documents are in memory together."""

_FIELDS: Final = ("id", "at", "actor", "post", "kind")
_KIND: TypeAdapter[str] = TypeAdapter(Kind)

HashMany = Callable[[Iterable[str]], list[bytes]]
_U64 = NDArray[np.uint64]


@dataclass(slots=True)
class Columns:
    """Interactions of a window, a column a field; hashes are read as little-endian integers.

    Args:
        places: which lines of the window they are.
        ids: hashes of the events' ids.
        people: hashes of the actors.
        posts: hashes of the posts.
        at_ms: times, Unix milliseconds.
        kinds: places in `kind_names`.
        kind_names: kinds, valid but perhaps not known.
        person_ids: the id of each person's hash.
        post_ids: the id of each post's hash.
        others: the lines that are left to the model.
        firsts: for each row the first one by the same actor with the same id.

    """

    places: NDArray[np.int64]
    ids: _U64
    people: _U64
    posts: _U64
    at_ms: NDArray[np.int64]
    kinds: NDArray[np.int64]
    kind_names: list[str]
    person_ids: dict[int, str]
    post_ids: dict[int, str]
    others: list[int]
    firsts: NDArray[np.intp]


class Reader:
    """Reads the lines of one window.

    Args:
        hash_many: hashes ids.

    """

    def __init__(self, hash_many: HashMany) -> None:
        self._hash_many = hash_many
        self._count = 0
        self._waiting: list[bytes | None] = []
        self._people = _Names(hash_many)
        self._posts = _Names(hash_many)
        self._kinds: dict[str, int] = {}
        self._parts: list[tuple[NDArray[Any], ...]] = []
        self._others: list[int] = []

    def read(self, lines: Sequence[bytes | None]) -> Columns:
        """Read all lines of a window; None and blank ones are left out."""
        self.add(lines)
        return self.columns()

    def add(self, lines: Sequence[bytes | None]) -> None:
        """Read the next lines of the window; they are read together with those before and after."""
        self._waiting += lines
        if len(self._waiting) >= AT_ONCE:
            self._read_waiting()

    def columns(self) -> Columns:
        """Give what was read."""
        self._read_waiting()
        columns: list[NDArray[Any]] = list(_EMPTY)
        if self._parts:
            columns = [np.concatenate(column) for column in zip(*self._parts, strict=True)]
        places, ids, people, posts, at_ms, kinds = columns
        names = list(self._kinds)
        person_ids, post_ids, others = self._people.ids, self._posts.ids, sorted(self._others)
        firsts = _firsts(ids, people)
        return Columns(places, ids, people, posts, at_ms, kinds, names, person_ids, post_ids, others, firsts)

    def _read_waiting(self) -> None:
        some, self._waiting = self._waiting, []
        self._read_some(self._count, some)
        self._count += len(some)

    def _read_some(self, first: int, lines: Sequence[bytes | None]) -> None:
        places, rows = [], []
        for place, document in enumerate(_documents(lines), first):
            row = _row(document)
            if row is not None:
                places.append(place)
                rows.append(row)
            elif lines[place - first] is None or (lines[place - first] or b"").strip():
                self._others.append(place)
        if not rows:
            return
        ids, ats, actors, posts, kinds = zip(*rows, strict=True)
        at_ms, where = read_times(ats), np.array(places)
        people_hashes, post_hashes = self._people.hashes(actors), self._posts.hashes(posts)
        kind_places = np.array([self._kind(kind) for kind in kinds])
        good = (at_ms != WRONG) & (people_hashes != 0) & (post_hashes != 0) & (kind_places >= 0) & _valid(ids)
        self._others += where[~good].tolist()
        texts = ids if good.all() else [one if ok else "" for one, ok in zip(ids, good.tolist(), strict=True)]
        id_hashes = np.frombuffer(b"".join(self._hash_many(texts)), np.uint64)
        part = (where, id_hashes, people_hashes, post_hashes, at_ms, kind_places)
        self._parts.append(part if good.all() else tuple(column[good] for column in part))

    def _kind(self, kind: object) -> int:
        """Give a kind's place among the names, -1 where it is no kind."""
        if not isinstance(kind, str):
            return -1
        if kind not in self._kinds:
            try:
                _KIND.validate_python(kind, strict=True)
            except ValidationError:
                return -1
            self._kinds[kind] = len(self._kinds)
        return self._kinds[kind]


class _Names:
    """Ids that come again and again: each is checked and hashed once; of two with one hash, the first is held."""

    def __init__(self, hash_many: HashMany) -> None:
        self.ids: dict[int, str] = {}
        self._hash_many = hash_many
        self._hashes: dict[str, int] = {}

    def hashes(self, texts: Sequence[Any]) -> _U64:
        """Give the hash of each id, 0 where it is none, or where another id has it."""
        if set(map(type, texts)) != {str}:
            texts = [text if isinstance(text, str) else "" for text in texts]
        new = [text for text in dict.fromkeys(texts) if text not in self._hashes]
        valid = _valid(new).tolist()
        packed = np.frombuffer(b"".join(self._hash_many(new)), np.uint64).tolist()
        for text, value, ok in zip(new, packed, valid, strict=True):
            mine = ok and self.ids.setdefault(value, text) == text
            self._hashes[text] = value if mine else 0
        return np.array([self._hashes[text] for text in texts], np.uint64)


_TYPES: Final = (np.int64, np.uint64, np.uint64, np.uint64, np.int64, np.int64)
_EMPTY: Final[list[NDArray[Any]]] = [np.zeros(0, kind) for kind in _TYPES]
_row_of = itemgetter(*_FIELDS)


def _documents(lines: Sequence[bytes | None]) -> list[Any]:
    try:
        return list(map(orjson.loads, lines))  # type: ignore[arg-type]  # None is refused as other broken lines are
    except orjson.JSONDecodeError:
        return [_document(line) for line in lines]


def _document(line: bytes | None) -> Any:  # noqa: ANN401  whatever the JSON held
    try:
        return orjson.loads(line or b"")
    except orjson.JSONDecodeError:
        return None


def _row(document: Any) -> tuple[Any, ...] | None:  # noqa: ANN401  whatever the JSON held
    if type(document) is not dict or len(document) != len(_FIELDS) + 1 or document.get("type") != "interaction":
        return None
    try:
        row: tuple[Any, ...] = _row_of(document)
    except KeyError:
        return None
    return row


def _valid(texts: Sequence[Any]) -> NDArray[np.bool_]:
    """Say which texts are ids."""
    if texts and set(map(type, texts)) == {str}:
        joined, sizes = "".join(texts), list(map(len, texts))
        if joined.isascii() and joined.isprintable() and min(sizes) > 0 and max(sizes) <= ID_BYTES:
            return np.ones(len(texts), np.bool_)
    return np.array([_is_id(text) for text in texts], np.bool_)


def _is_id(text: object) -> bool:
    return isinstance(text, str) and 0 < len(text.encode()) <= ID_BYTES and CONTROLS.search(text) is None


def _firsts(ids: _U64, people: _U64) -> NDArray[np.intp]:
    order = np.lexsort((people, ids))
    ids, people = ids[order], people[order]
    new = np.ones(len(order), np.bool_)
    new[1:] = (ids[1:] != ids[:-1]) | (people[1:] != people[:-1])
    first = np.empty_like(order)
    first[order] = order[np.flatnonzero(new)[np.cumsum(new) - 1]]
    return first
