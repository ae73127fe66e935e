"""When a request arrived, waiting for a busy process included.

A request's budget runs from its arrival. What the application sees first is later by as long as the event loop was busy
with others: the bytes lay in the socket meanwhile. So a pulse tells how late the loop is, and arrival is put back by as
much: a little too early rather than too late.
"""

import asyncio
import time
from collections.abc import Callable
from typing import Final
from weakref import WeakKeyDictionary

from uvicorn.protocols.http.httptools_impl import HttpToolsProtocol

ARRIVED: Final = "arrived_s"
"""Where a scope's state holds the time of arrival, on the clock of `time.perf_counter`."""

_EVERY_S: Final = 0.005
_FRESH_S: Final = 0.001


class Pulse:
    """Beats on an event loop, and tells how late it is.

    Args:
        loop: to beat on.
        clock: seconds.

    """

    def __init__(self, loop: asyncio.AbstractEventLoop, clock: Callable[[], float] = time.perf_counter) -> None:
        self._loop = loop
        self._clock = clock
        self._due_s = self._beaten_s = clock()
        self._late_s = 0.0
        self._beat()

    def late_s(self, now_s: float) -> float:
        """Tell how long the loop has been busy without looking at its sockets, seconds.

        That is how overdue the next beat is, or how late one was that came just before.
        """
        overdue_s = max(0.0, now_s - self._due_s)
        return max(overdue_s, self._late_s) if now_s - self._beaten_s < _FRESH_S else overdue_s

    def _beat(self) -> None:
        self._beaten_s = self._clock()
        self._late_s = max(0.0, self._beaten_s - self._due_s)
        self._due_s = self._beaten_s + _EVERY_S
        self._loop.call_later(_EVERY_S, self._beat)


_pulses: WeakKeyDictionary[asyncio.AbstractEventLoop, Pulse] = WeakKeyDictionary()


def pulse_of(loop: asyncio.AbstractEventLoop) -> Pulse:
    """Give the pulse of a loop; the first who asks starts it."""
    if loop not in _pulses:
        _pulses[loop] = Pulse(loop)
    return _pulses[loop]


class ArrivalProtocol(HttpToolsProtocol):
    """The HTTP server's protocol, which notes when each request's first bytes arrived."""

    _received_s = 0.0

    def connection_made(self, transport: asyncio.Transport) -> None:  # type: ignore[override]
        """See to it that the loop has a pulse."""
        self._pulse = pulse_of(self.loop)
        super().connection_made(transport)

    def data_received(self, data: bytes) -> None:
        """Note the time and go on."""
        now_s = time.perf_counter()
        self._received_s = now_s - self._pulse.late_s(now_s)
        super().data_received(data)

    def on_message_begin(self) -> None:
        """Tell the application."""
        super().on_message_begin()
        self.scope["state"][ARRIVED] = self._received_s
