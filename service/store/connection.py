"""The connection to Redis: timeouts chosen on purpose, no silent retries, the client's errors translated."""

import re
from collections.abc import AsyncIterator, Iterable, Sequence
from contextlib import asynccontextmanager
from typing import Any

import structlog
from redis.asyncio import ConnectionPool
from redis.asyncio.retry import Retry
from redis.backoff import NoBackoff
from redis.exceptions import RedisError, ResponseError

from service.errors import StoreRefused, StoreUnavailable
from service.store.calls import Argument, Call
from service.store.line import Line
from service.store.scripts import load, names

log = structlog.get_logger("waxwane.store")

WRITE_LINES = 4
"""Connections for writes: a small batch need not wait until a large one has been answered."""

_IN_SCRIPT = re.compile(r"@user_script: ?\d+: ([A-Z]+) ")
"""Where servers before Redis 7 put the kind of an error that a script met."""

_SHORT = 512
_LENGTHS = [b"\r\n$%d\r\n" % length for length in range(_SHORT)]
_SHOWN_CHARS = 500
_FAILURES = (TimeoutError, RedisError, OSError)


class Connection:
    """To one server: a line that all reads share, whose waits are short, and a few for writes.

    Neither tries again: a read has a budget, and a write that was cut off is settled by sending its events again.

    Args:
        url: redis://, rediss:// or unix:// address.
        read_timeout_s: longest wait for an answer to a read, seconds.
        write_timeout_s: longest wait for an answer to a write, seconds.

    """

    def __init__(self, url: str, *, read_timeout_s: float, write_timeout_s: float) -> None:
        self._reading = Line(_pool(url, read_timeout_s), read_timeout_s)
        self._writing = [Line(_pool(url, write_timeout_s), write_timeout_s) for _ in range(WRITE_LINES)]
        self._turn = 0

    async def start(self) -> None:
        """Hand the scripts to the server.

        Raises:
            StoreUnavailable: the server does not answer.

        """
        async with translated():
            await self._load_scripts()

    async def close(self) -> None:
        """Close all connections."""
        for line in (self._reading, *self._writing):
            await line.close()

    async def run(self, calls: Sequence[Call]) -> list[Any]:
        """Run calls in one round trip, in order, and give their answers.

        Raises:
            StoreUnavailable: the server does not answer, or refused a call.

        """
        if not calls:
            return []
        async with translated():
            answers = await self._pipeline(calls)
            lost = [i for i, answer in enumerate(answers) if _without_script(answer)]
            if lost:
                await self._load_scripts()
                for i, answer in zip(lost, await self._pipeline([calls[i] for i in lost]), strict=True):
                    answers[i] = answer
            for answer in answers:
                if isinstance(answer, Exception):
                    raise answer
            return answers

    async def read(self, *command: bytes | str | int) -> Any:  # noqa: ANN401  whatever the command answers
        """Run one plain command on the line for reads."""
        return (await self.read_packed(pack(command), 1))[0]

    async def read_hash(self, key: bytes) -> dict[bytes, bytes]:
        """Read a whole hash."""
        flat = await self.read(b"HGETALL", key)
        return dict(zip(flat[::2], flat[1::2], strict=True))

    async def read_many(self, commands: Sequence[Sequence[Argument]]) -> list[Any]:
        """Run plain commands on the line for reads in one round trip."""
        return await self.read_packed(b"".join(map(pack, commands)), len(commands))

    async def mget(self, keys: Sequence[bytes]) -> list[bytes | None]:
        """Read many strings."""
        found: list[bytes | None] = (await self.read_packed(pack_mget(keys), 1))[0]
        return found

    async def read_packed(self, packed: bytes, count: int) -> list[Any]:
        """Run so many plain commands, packed already, on the line for reads.

        Raises:
            StoreUnavailable: the server does not answer, or refused a command.

        """
        try:
            answers = await self._reading.ask(packed, count)
            for answer in answers:
                if isinstance(answer, Exception):
                    raise answer
        except _FAILURES as error:
            raise _unavailable(error) from error
        return answers

    async def _pipeline(self, calls: Sequence[Call]) -> list[Any]:
        """Run calls in order and give their answers, errors of the server among them."""
        packed = [
            pack(call.args)
            if call.script is None
            else pack((b"EVALSHA", call.script.sha, len(call.keys), *call.keys, *call.args))
            for call in calls
        ]
        self._turn = (self._turn + 1) % WRITE_LINES
        return await self._writing[self._turn].ask(b"".join(packed), len(calls))

    async def _load_scripts(self) -> None:
        loads = [pack((b"SCRIPT", b"LOAD", load(name).source)) for name in names()]
        for answer in await self._writing[0].ask(b"".join(loads), len(loads)):
            if isinstance(answer, Exception):
                raise answer


def _pool(url: str, timeout_s: float) -> ConnectionPool:
    """Make what tells a line how to connect."""
    return ConnectionPool.from_url(
        url,
        socket_timeout=timeout_s,
        socket_connect_timeout=min(timeout_s, 1.0),
        retry=Retry(NoBackoff(), 0),
        decode_responses=False,
        protocol=2,
    )


def _without_script(answer: object) -> bool:
    return isinstance(answer, ResponseError) and str(answer).startswith("NOSCRIPT")


def pack(parts: Iterable[Argument]) -> bytes:
    r"""Write a command in the protocol of Redis (RESP2).

    The client's own packing looks at every argument for much longer; commands here have hundreds.

    >>> pack([b"GET", "bed", 7])
    b'*3\r\n$3\r\nGET\r\n$3\r\nbed\r\n$1\r\n7\r\n'

    """
    raw = [
        part if isinstance(part, bytes) else part.encode() if isinstance(part, str) else b"%d" % part for part in parts
    ]
    framed = [(_LENGTHS[size] if (size := len(part)) < _SHORT else b"\r\n$%d\r\n" % size) + part for part in raw]
    return b"*%d%b\r\n" % (len(raw), b"".join(framed))


def pack_mget(keys: Sequence[bytes]) -> bytes:
    r"""Write an MGET of short keys.

    >>> pack_mget([b"bed"])
    b'*2\r\n$4\r\nMGET\r\n$3\r\nbed\r\n'

    """
    parts = [_LENGTHS[len(key)] + key for key in keys]
    return b"*%d\r\n$4\r\nMGET%b\r\n" % (len(keys) + 1, b"".join(parts))


@asynccontextmanager
async def translated() -> AsyncIterator[None]:
    """Turn the client's errors into ours.

    Raises:
        StoreUnavailable: for every error of the client or the network.

    """
    try:
        yield
    except _FAILURES as error:
        raise _unavailable(error) from error


def _unavailable(error: Exception) -> StoreUnavailable:
    """Translate an error; what a server said goes to the log, and its first word, which is its kind, to the caller."""
    if not isinstance(error, ResponseError):
        return StoreUnavailable(f"the store failed: {type(error).__name__}")
    log.error("store_refused", reason=str(error)[:_SHOWN_CHARS])
    inside = _IN_SCRIPT.search(str(error))
    kind = inside[1] if inside else str(error).split(" ", 1)[0][:32]
    return StoreRefused(f"the store refused a command: {kind}")
