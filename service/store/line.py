"""One connection that many reads share: commands are written as they come, answers are handed out in their order.

The client library connects (addresses, TLS, passwords, the database's number); from then on its transport is driven
here, without its streams and pools, which cost a feed read more than the server does.
"""

import asyncio
from collections import deque
from dataclasses import dataclass, field
from typing import Any, Final, cast

import hiredis
from redis.asyncio import ConnectionPool
from redis.asyncio.connection import AbstractConnection
from redis.exceptions import ConnectionError as LostConnectionError
from redis.exceptions import ResponseError

_NOTHING: Final = object()


@dataclass(slots=True)
class _Asked:
    """What was asked and not yet wholly answered."""

    count: int
    answered: asyncio.Future[list[Any]]
    answers: list[Any] = field(default_factory=list)


class _Wire(asyncio.Protocol):
    """Parses answers and hands them to those who asked, first come, first served."""

    def __init__(self, transport: asyncio.Transport) -> None:
        self.transport = transport
        self.open = True
        self.closed = asyncio.get_running_loop().create_future()
        self._parser = hiredis.Reader(notEnoughData=_NOTHING, replyError=ResponseError)
        self._asked: deque[_Asked] = deque()

    def ask(self, packed: bytes, count: int) -> asyncio.Future[list[Any]]:
        asked = _Asked(count, asyncio.get_running_loop().create_future())
        self._asked.append(asked)
        self.transport.write(packed)
        return asked.answered

    def data_received(self, data: bytes) -> None:
        self._parser.feed(data)
        try:
            while self._asked and (answer := self._parser.gets()) is not _NOTHING:
                first = self._asked[0]
                first.answers.append(answer)
                if len(first.answers) == first.count:
                    self._asked.popleft()
                    if not first.answered.done():
                        first.answered.set_result(first.answers)
        except hiredis.ProtocolError as error:
            self.fail(LostConnectionError(f"the server's answer can't be read: {error}"))

    def connection_lost(self, exc: Exception | None) -> None:
        if not self.closed.done():
            self.closed.set_result(None)
        self.fail(LostConnectionError(f"the connection was lost: {exc or 'closed by the server'}"))

    def fail(self, error: Exception) -> None:
        """Give up: answers can't be told apart any more."""
        self._disappoint(error)
        self.transport.abort()

    def close(self) -> None:
        """Hang up in good order."""
        self._disappoint(LostConnectionError("closed"))
        self.transport.close()

    def _disappoint(self, error: Exception) -> None:
        self.open = False
        while self._asked:
            first = self._asked.popleft()
            if not first.answered.done():
                first.answered.set_exception(error)


class Line:
    """Asks a server over one connection, made when it is first needed and anew after it broke.

    Args:
        pool: tells how to connect; its own connections are not used.
        timeout_s: longest wait for a connection, and for an answer, seconds.

    """

    def __init__(self, pool: ConnectionPool, timeout_s: float) -> None:
        self._pool = pool
        self._timeout_s = timeout_s
        self._connecting = asyncio.Lock()
        self._connection: AbstractConnection | None = None
        self._wire: _Wire | None = None

    async def ask(self, packed: bytes, count: int) -> list[Any]:
        """Send commands and give their answers, errors of the server among them.

        Args:
            packed: the commands, in the protocol of Redis.
            count: how many they are.

        Raises:
            TimeoutError: no connection or no answer in time.
            RedisError: the connection can't be made or was lost; nothing is asked twice.
            OSError: as above.

        """
        wire = self._wire
        if wire is None or not wire.open:
            wire = await self._connected()
        answered = wire.ask(packed, count)
        watch = asyncio.get_running_loop().call_later(self._timeout_s, wire.fail, TimeoutError("no answer in time"))
        try:
            return await answered
        finally:
            watch.cancel()

    async def close(self) -> None:
        """Close the connection."""
        async with self._connecting:
            await self._drop()

    async def _connected(self) -> _Wire:
        async with self._connecting:
            if self._wire is not None and self._wire.open:
                return self._wire
            await self._drop()
            connection: AbstractConnection = self._pool.make_connection()  # type: ignore[no-untyped-call]
            try:
                async with asyncio.timeout(self._timeout_s):
                    await connection.connect()  # type: ignore[no-untyped-call]
            except BaseException:
                await connection.disconnect(nowait=True)
                raise
            self._connection, self._wire = connection, _taken_over(connection)
            return self._wire

    async def _drop(self) -> None:
        connection, self._connection = self._connection, None
        wire, self._wire = self._wire, None
        if wire is not None:
            wire.close()
            await wire.closed
        if connection is not None:
            await connection.disconnect(nowait=True)


def _taken_over(connection: AbstractConnection) -> _Wire:
    """Drive a connection's transport from here; the library offers no other way to it than its own attribute."""
    writer = connection._writer  # noqa: SLF001  as said
    assert writer is not None  # noqa: S101  it has connected
    transport = cast("asyncio.Transport", writer.transport)
    wire = _Wire(transport)
    transport.set_protocol(wire)
    return wire
