"""All that is stored about a person."""

from typing import Any

import numpy as np

from scoring.edges import EDGE, MARKER, RETRACTED, codes, times_ms
from service.feed.exposure import ExposureLog
from service.store import keys
from service.store.drive import RELATIONS
from service.store.pieces import unstamp
from service.store.records import PostRecord, read_record
from service.store.store import Store
from service.times import format_ms

_FIELDS = ("name", "erased", "row", "who", "seen", "undo", "posts")


class Exporter:
    """Gathers a person's data.

    Args:
        store: the state behind all feeds.

    """

    def __init__(self, store: Store) -> None:
        self._store = store

    async def export(self, person: str) -> dict[str, Any]:
        """Give all that is stored about a person, as JSON can hold it.

        A person never heard of has empty lists. Where the store holds only the hash of an id, the id is None.

        Raises:
            StoreUnavailable: the store does not answer.

        """
        id_hash = self._store.hasher.hash(person)
        connection = self._store.connection
        values = await connection.mget([keys.key(name, id_hash) for name in _FIELDS])
        ties, tied_by = await connection.read_many([(b"HGETALL", keys.key(name, id_hash)) for name in ("tie", "in")])
        if values[0] not in (None, person.encode()):  # another id with this hash: all of it is that one's
            values, ties, tied_by = [None] * len(values), [], []
        name, erased, row, who, seen, undo, posts = values
        return {
            "person": person,
            "known": name is not None,
            "erased_up_to": format_ms(int(erased)) if erased else None,
            "edges": await self._edges(row or b"", who or b""),
            "posts": await self._post_ids(posts or b""),
            "ties": await self._relations(_pairs(ties), "target"),
            "tied_by": await self._relations(_pairs(tied_by), "actor"),
            "seen": await self._seen(seen or b""),
            "retracts": len(undo or b"") // EDGE.itemsize,
            "exposures": await ExposureLog(self._store).of_person(id_hash) if name is not None else [],
        }

    async def _edges(self, row: bytes, who: bytes) -> list[dict[str, Any]]:
        edges = np.frombuffer(row, dtype=EDGE)
        real = codes(edges["stamp"]) != MARKER
        authors = np.frombuffer(who, dtype="<u8")[: len(edges)][real].tolist()
        edges = edges[real]
        if codes(edges["stamp"]).max(initial=0) >= len(self._store.kinds.names):
            await self._store.kinds.refresh()  # another worker has registered a kind meanwhile
        records = await self._records(_hashes(edges["post"].tolist()))
        names = await self._names(authors)
        retracted = (edges["stamp"] & np.uint64(RETRACTED)) != 0
        columns = zip(
            records,
            codes(edges["stamp"]).tolist(),
            times_ms(edges["stamp"]).tolist(),
            retracted.tolist(),
            authors,
            strict=True,
        )
        return [
            {
                "post": record.id if record else None,
                "kind": self._store.kinds.names[code],
                "at": format_ms(int(at_ms)),
                "retracted": taken_back,
                "author": names.get(author),
            }
            for record, code, at_ms, taken_back, author in columns
        ]

    async def _post_ids(self, posts: bytes) -> list[dict[str, Any]]:
        entries = np.frombuffer(posts, dtype=EDGE)
        records = await self._records(_hashes(entries["post"].tolist()))
        return [
            {
                "post": record.id,
                "form": record.form,
                "audience": record.audience,
                "topics": list(record.topics),
                "posted_at": format_ms(record.posted_ms),
                "withdrawn": record.withdrawn,
            }
            for record in records
            if record is not None
        ]

    async def _seen(self, seen: bytes) -> list[dict[str, Any]]:
        entries = np.frombuffer(seen, dtype=EDGE)
        records = await self._records(_hashes(entries["post"].tolist()))
        times = times_ms(entries["stamp"]).tolist()
        return [
            {"post": record.id if record else None, "at": format_ms(int(at_ms))}
            for record, at_ms in zip(records, times, strict=True)
        ]

    async def _relations(self, stored: dict[bytes, bytes], role: str) -> list[dict[str, Any]]:
        people = [int.from_bytes(person, "little") for person in stored]
        names = await self._names(people)
        relations = []
        for person, value in zip(people, stored.values(), strict=True):
            at_ms, code = unstamp(value[:8])
            relations.append({role: names.get(person), "relation": RELATIONS[code], "at": format_ms(at_ms)})
        return relations

    async def _records(self, posts: list[bytes]) -> list[PostRecord | None]:
        if not posts:
            return []
        values = await self._store.connection.mget(keys.keys("post", posts))
        return [read_record(value) if value else None for value in values]

    async def _names(self, people: list[int]) -> dict[int, str | None]:
        distinct = sorted(set(people) - {0})
        if not distinct:
            return {}
        names = await self._store.connection.mget(keys.keys("name", _hashes(distinct)))
        return {person: name.decode() if name else None for person, name in zip(distinct, names, strict=True)}


def _pairs(flat: list[bytes]) -> dict[bytes, bytes]:
    return dict(zip(flat[::2], flat[1::2], strict=True))


def _hashes(numbers: list[int]) -> list[bytes]:
    return [number.to_bytes(8, "little") for number in numbers]
