"""The connection to Redis: timeouts chosen on purpose, no silent retries, the client's errors translated."""

from collections.abc import AsyncIterator, Sequence
from contextlib import asynccontextmanager
from typing import Any

from redis.asyncio import BlockingConnectionPool, Redis
from redis.asyncio.retry import Retry
from redis.backoff import NoBackoff
from redis.exceptions import NoScriptError, RedisError

from service.errors import StoreUnavailable
from service.store.calls import Call
from service.store.scripts import load, names

_POOL_WAIT_S = 1.0


class Connection:
    """Two pools to one server: one for reads, whose waits are short, one for writes.

    Neither retries: a read has a budget, and a write that was cut off is settled by sending its events again.

    Args:
        url: redis://, rediss:// or unix:// address.
        read_timeout_s: longest wait for an answer to a read, seconds.
        write_timeout_s: longest wait for an answer to a write, seconds.
        pool_size: most connections of each pool.

    """

    def __init__(self, url: str, *, read_timeout_s: float, write_timeout_s: float, pool_size: int) -> None:
        self.reads = _client(url, read_timeout_s, pool_size)
        self.writes = _client(url, write_timeout_s, pool_size)

    async def start(self) -> None:
        """Hand the scripts to the server.

        Raises:
            StoreUnavailable: the server does not answer.

        """
        async with translated():
            await self._load_scripts()

    async def close(self) -> None:
        """Close all connections."""
        await self.reads.aclose()
        await self.writes.aclose()

    async def run(self, calls: Sequence[Call]) -> list[Any]:
        """Run calls in one round trip, in order, and give their answers.

        Raises:
            StoreUnavailable: the server does not answer, or refused a call.

        """
        if not calls:
            return []
        async with translated():
            answers = await self._pipeline(calls)
            lost = [i for i, answer in enumerate(answers) if isinstance(answer, NoScriptError)]
            if lost:
                await self._load_scripts()
                for i, answer in zip(lost, await self._pipeline([calls[i] for i in lost]), strict=True):
                    answers[i] = answer
            for answer in answers:
                if isinstance(answer, Exception):
                    raise answer
            return answers

    async def read(self, *command: bytes | str | int) -> Any:  # noqa: ANN401  whatever the command answers
        """Run one plain command on the read pool."""
        async with translated():
            return await self.reads.execute_command(*command)  # type: ignore[no-untyped-call]

    async def read_many(self, commands: Sequence[tuple[bytes | str | int, ...]]) -> list[Any]:
        """Run plain commands on the read pool in one round trip."""
        async with translated():
            pipe = self.reads.pipeline(transaction=False)
            for command in commands:
                pipe.execute_command(*command)
            return list(await pipe.execute())

    async def _pipeline(self, calls: Sequence[Call]) -> list[Any]:
        pipe = self.writes.pipeline(transaction=False)
        for call in calls:
            if call.script is None:
                pipe.execute_command(*call.args)
            else:
                pipe.execute_command("EVALSHA", call.script.sha, len(call.keys), *call.keys, *call.args)
        return list(await pipe.execute(raise_on_error=False))

    async def _load_scripts(self) -> None:
        pipe = self.writes.pipeline(transaction=False)
        for name in names():
            pipe.execute_command("SCRIPT LOAD", load(name).source)
        await pipe.execute()


def _client(url: str, timeout_s: float, pool_size: int) -> Redis:
    pool = BlockingConnectionPool.from_url(
        url,
        max_connections=pool_size,
        timeout=_POOL_WAIT_S,
        socket_timeout=timeout_s,
        socket_connect_timeout=min(timeout_s, 1.0),
        retry=Retry(NoBackoff(), 0),
        decode_responses=False,
        protocol=2,
    )
    return Redis.from_pool(pool)


@asynccontextmanager
async def translated() -> AsyncIterator[None]:
    """Turn the client's errors into ours.

    Raises:
        StoreUnavailable: for every error of the client or the network.

    """
    try:
        yield
    except (TimeoutError, RedisError, OSError) as error:
        raise StoreUnavailable(f"the store failed: {type(error).__name__}") from error
