"""The line that all reads share: answers in their order, and what happens when it breaks."""

import asyncio
from collections.abc import AsyncIterator, Awaitable, Callable
from contextlib import asynccontextmanager, suppress
from pathlib import Path

import pytest
from redis.asyncio import ConnectionPool
from redis.asyncio.retry import Retry
from redis.backoff import NoBackoff
from redis.exceptions import ConnectionError as LostConnectionError
from redis.exceptions import ResponseError

from service.store.connection import pack
from service.store.line import Line

Answering = Callable[[bytes, asyncio.StreamWriter], Awaitable[None]]


@asynccontextmanager
async def server(folder: Path, answer: Answering) -> AsyncIterator[Line]:
    """Serve commands on a unix socket, each handed over as one line of its words, and give a line to it."""
    connections: list[asyncio.Task[None] | None] = []

    async def serve(reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        connections.append(asyncio.current_task())
        with suppress(asyncio.IncompleteReadError, OSError):
            while True:
                words = []
                for _ in range(int((await reader.readuntil(b"\r\n"))[1:])):
                    size = int((await reader.readuntil(b"\r\n"))[1:])
                    words.append((await reader.readexactly(size + 2))[:-2])
                if words[0] == b"CLIENT":
                    writer.write(b"+OK\r\n")
                else:
                    await answer(b" ".join(words), writer)
        writer.close()
        with suppress(OSError):
            await writer.wait_closed()

    path = str(folder / "line.sock")
    listening = await asyncio.start_unix_server(serve, path)
    pool = ConnectionPool.from_url(f"unix://{path}", retry=Retry(NoBackoff(), 0), protocol=2)
    line = Line(pool, timeout_s=0.2)
    try:
        yield line
    finally:
        await line.close()
        listening.close()
        await asyncio.gather(*filter(None, connections))


async def ask(line: Line, *words: str) -> list[object]:
    return await line.ask(pack(words), 1)


async def echo(command: bytes, writer: asyncio.StreamWriter) -> None:
    writer.write(b"+" + command + b"\r\n")


async def test_everyone_gets_their_own_answers(tmp_path: Path) -> None:
    """A hundred asked at once, some for several answers, are each given theirs, over one connection."""
    async with server(tmp_path, echo) as line:
        packed = [b"".join(pack([f"{n}", f"{part}"]) for part in range(n % 3 + 1)) for n in range(100)]
        found = await asyncio.gather(*(line.ask(one, n % 3 + 1) for n, one in enumerate(packed)))
        assert found == [[b"%d %d" % (n, part) for part in range(n % 3 + 1)] for n in range(100)]


async def test_whoever_gives_up_disturbs_nobody(tmp_path: Path) -> None:
    """The answer to somebody who was cancelled is not taken for the next one's."""
    released = asyncio.Event()

    async def late(command: bytes, writer: asyncio.StreamWriter) -> None:
        await released.wait()
        await echo(command, writer)

    async with server(tmp_path, late) as line:
        tasks = [asyncio.create_task(ask(line, f"{n}")) for n in range(4)]
        while not line._wire or len(line._wire._asked) < 4:  # noqa: ASYNC110  a line tells nobody that it has asked
            await asyncio.sleep(0)
        tasks[1].cancel()
        released.set()
        found = await asyncio.gather(*tasks, return_exceptions=True)
        assert isinstance(found.pop(1), asyncio.CancelledError)
        assert found == [[b"0"], [b"2"], [b"3"]]


async def test_an_error_of_the_server_is_an_answer(tmp_path: Path) -> None:
    """A refused command is answered with the error, its neighbours with theirs."""

    async def refuse(command: bytes, writer: asyncio.StreamWriter) -> None:
        writer.write(b"-ERR no bed\r\n" if command == b"b" else b":7\r\n")

    async with server(tmp_path, refuse) as line:
        found = await line.ask(pack(["a"]) + pack(["b"]) + pack(["c"]), 3)
        assert [found[0], found[2]] == [7, 7]
        assert isinstance(found[1], ResponseError)
        assert str(found[1]) == "ERR no bed"


async def test_a_lost_connection_fails_what_was_asked_and_is_made_anew(tmp_path: Path) -> None:
    """Where the server hangs up in the middle, all who wait are told, and the next is answered."""

    async def hang_up(command: bytes, writer: asyncio.StreamWriter) -> None:
        if command == b"bye":
            writer.write(b"$100\r\nhalf of it")
            writer.close()
        else:
            await echo(command, writer)

    async with server(tmp_path, hang_up) as line:
        found = await asyncio.gather(*(ask(line, word) for word in ("a", "bye", "c")), return_exceptions=True)
        assert found[0] == [b"a"]
        assert [type(one) for one in found[1:]] == [LostConnectionError] * 2
        assert await ask(line, "d") == [b"d"]


async def test_a_server_that_is_silent_fails_what_was_asked_in_time(tmp_path: Path) -> None:
    """Past the time allowed everyone on the line is told, as answers can't be told apart any more."""

    async def silent(command: bytes, writer: asyncio.StreamWriter) -> None:
        if command != b"wait":
            await echo(command, writer)

    async with server(tmp_path, silent) as line:
        found = await asyncio.gather(*(ask(line, "wait") for _ in range(2)), return_exceptions=True)
        assert [type(one) for one in found] == [TimeoutError] * 2
        assert await ask(line, "c") == [b"c"]


async def test_an_answer_that_makes_no_sense_ends_the_line(tmp_path: Path) -> None:
    """Bytes that are not the protocol's are told as a lost connection."""

    async def nonsense(_command: bytes, writer: asyncio.StreamWriter) -> None:
        writer.write(b"beans\r\n")

    async with server(tmp_path, nonsense) as line:
        with pytest.raises(LostConnectionError, match="can't be read"):
            await ask(line, "a")
