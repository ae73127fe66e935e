"""Background work that is done again and again until it is stopped."""

import asyncio
from collections.abc import Awaitable, Callable

import structlog

from service.errors import StoreUnavailable

log = structlog.get_logger(__name__)


class Periodic:
    """Does a job at an interval; a store that is away is noted and tried again.

    It is stopped by word, not by cancellation: a cancellation that reaches a client in the middle of its own clean-up
    can be taken for a network error, and then the job would go on.

    Args:
        name: for the log.
        job: what to do.
        every_s: pause between two runs, seconds.
        at_once: whether the first run comes before the first pause.

    """

    def __init__(self, name: str, job: Callable[[], Awaitable[None]], every_s: float, *, at_once: bool) -> None:
        self._name = name
        self._job = job
        self._every_s = every_s
        self._at_once = at_once
        self._stopped = asyncio.Event()
        self._task: asyncio.Task[None] | None = None

    def start(self) -> None:
        """Begin."""
        self._task = asyncio.create_task(self._run(), name=self._name)

    async def stop(self) -> None:
        """Let the run that is under way end, and do no more."""
        self._stopped.set()
        if self._task is not None:
            await asyncio.wait([self._task])
            self._task = None

    async def _run(self) -> None:
        if not self._at_once:
            await self._pause()
        while not self._stopped.is_set():
            try:
                await self._job()
            except StoreUnavailable as error:
                log.warning("background_work_failed", work=self._name, reason=error.detail)
            await self._pause()

    async def _pause(self) -> None:
        try:
            await asyncio.wait_for(self._stopped.wait(), self._every_s)
        except TimeoutError:
            return
