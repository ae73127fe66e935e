"""The ways of ranking: each prepares its own state from a world's columns, then answers the top again and again."""

import socket
from collections import defaultdict
from collections.abc import Callable
from dataclasses import dataclass

import hiredis
import numpy as np
import redis

from loadtests.peers.world import TOP, Columns
from scoring.gathering import Gathering
from scoring.ranking import Ranking
from service.feed.readers import Standing
from service.store import keys
from service.store.connection import pack, pack_mget

Top = list[tuple[str, float]]

_READ_BYTES = 1 << 18


@dataclass(frozen=True)
class Way:
    """One way: `read` answers once, `top` gives the answer as names and scores, to be compared; `close` hangs up."""

    name: str
    read: Callable[[], object]
    top: Callable[[], Top]
    close: Callable[[], None] = lambda: None


class Socket:
    """A unix socket to Redis, driven by hand."""

    def __init__(self, path: str) -> None:
        self._socket = socket.socket(socket.AF_UNIX)
        self._socket.connect(path)
        self._buffer = bytearray(_READ_BYTES)

    def ask(self, packed: bytes) -> object:
        """Send one command and give its answer."""
        parser = hiredis.Reader()
        self._socket.sendall(packed)
        while (answer := parser.gets()) is False:
            count = self._socket.recv_into(self._buffer)
            parser.feed(self._buffer, 0, count)
        return answer

    def close(self) -> None:
        """Hang up."""
        self._socket.close()


def floor(path: str, standing: Standing, ranking: Ranking, world: Columns, hash_of: Callable[[str], bytes]) -> Way:
    """MGET of the same rows on a bare socket, then one compiled pass: what no read can be faster than."""
    line, packed = Socket(path), pack_mget(keys.keys("row", standing.people))

    def read() -> Gathering:
        rows = line.ask(packed)
        gathering = Gathering(ranking, world.t_ms)
        gathering.add([row or b"" for row in rows], standing.affinity, standing.relation)  # type: ignore[attr-defined]
        return gathering

    def top() -> Top:
        """Add the crowd, which is not timed, so that the sums of the pass can be compared."""
        found, crowd = read().candidates(), dict(zip(map(hash_of, world.posts), world.crowd().tolist(), strict=True))
        names = {hash_of(name): name for name in world.posts}
        rows = zip(found.post.tolist(), found.known.tolist(), found.share.tolist(), strict=True)
        scores = []
        for post, known, share in rows:
            packed_hash = post.to_bytes(8, "little")
            scores.append((names[packed_hash], known + world.stranger * (crowd[packed_hash] - share)))
        return sorted(scores, key=lambda one: -one[1])[:TOP]

    return Way("floor", read, top, line.close)


def redis_alone(path: str, world: Columns) -> Way:
    """ZUNIONSTORE of one sorted set a person with the affinities as WEIGHTS, and one of the crowd; then ZREVRANGE.

    Two favours to it: the sets hold each post's decayed sum at the time of the reads, which an application could not
    keep up to date, and that of the crowd holds the reader's candidates only.
    """
    client, line = redis.Redis(unix_socket_path=path, db=9), Socket(path)
    value, tied = world.value(), world.tied()
    pipe = client.pipeline(transaction=False)
    for person in tied.tolist():
        chosen = world.person == person
        sums: dict[int, float] = defaultdict(float)
        for post, worth in zip(world.post[chosen].tolist(), value[chosen].tolist(), strict=True):
            sums[post] += worth
        pipe.zadd(f"by:{person}", {str(post): worth for post, worth in sums.items()})
    crowd = world.crowd().tolist()
    candidates = np.unique(world.post[np.isin(world.person, tied)])
    pipe.zadd("crowd", {str(post): crowd[post] for post in candidates.tolist()})
    pipe.execute()
    line.ask(pack([b"SELECT", 9]))
    weights = [repr(affinity - world.stranger) for affinity in world.affinity[tied].tolist()]
    sets = [f"by:{person}" for person in tied.tolist()]
    union = pack(["ZUNIONSTORE", "scores", len(sets) + 1, *sets, "crowd", "WEIGHTS", *weights, repr(world.stranger)])
    best = pack(["ZREVRANGE", "scores", 0, TOP - 1, "WITHSCORES"])

    def read() -> object:
        line.ask(union)
        return line.ask(best)

    def top() -> Top:
        line.ask(union)
        pairs = client.zrevrange("scores", 0, TOP - 1, withscores=True)
        return [(world.posts[int(post)], score) for post, score in pairs]

    def close() -> None:
        line.close()
        client.close()

    return Way("Redis alone, ZUNIONSTORE", read, top, close)


def plain_python(path: str, standing: Standing, ranking: Ranking, world: Columns) -> Way:
    """The same rows in a plain loop, with a dict: no NumPy, nothing compiled."""
    client = redis.Redis(unix_socket_path=path)
    row_keys, affinities = keys.keys("row", standing.people), standing.affinity.tolist()
    weights, half_life = ranking.weights.tolist(), ranking.rule.scale_ms
    crowd = dict(zip(range(len(world.posts)), world.crowd().tolist(), strict=True))
    stranger, t_ms = world.stranger, world.t_ms
    names: dict[bytes, int] = {}

    def scores() -> list[tuple[float, bytes]]:
        found: dict[bytes, float] = {}
        for row, affinity in zip(client.mget(row_keys), affinities, strict=True):
            for at in range(0, len(row or b""), 16):
                stamp = int.from_bytes(row[at + 8 : at + 16], "little")
                worth = weights[stamp & 0x3FFF] * 2.0 ** ((float(stamp >> 16) - t_ms) / half_life)
                post = row[at : at + 8]
                found[post] = found.get(post, 0.0) + (affinity - stranger) * worth
        ranked = [(score + stranger * crowd[names[post]] if names else score, post) for post, score in found.items()]
        ranked.sort(reverse=True)
        return ranked[:TOP]

    def know(hash_of: Callable[[str], bytes]) -> None:
        names.update({hash_of(name): place for place, name in enumerate(world.posts)})

    def top() -> Top:
        return [(world.posts[names[post]], score) for score, post in scores()]

    way = Way("plain Python", scores, top, client.close)
    know_by[way.name] = know
    return way


know_by: dict[str, Callable[[Callable[[str], bytes]], None]] = {}
"""Ways that have to be told how the store hashes posts' names."""
