"""Ctrl-C at a good moment: what is under way is finished first."""

import contextlib
import signal
from collections.abc import Iterator
from types import FrameType
from typing import Self


class Interrupts:
    """Takes Ctrl-C for as long as the `with` block lasts: between pieces of work it acts at once.

    During a piece of work the first one only marks `asked`; a second one acts at once.
    """

    def __init__(self) -> None:
        self.asked = False
        self._working = False
        self._before = signal.getsignal(signal.SIGINT)

    def __enter__(self) -> Self:
        # Where it was switched off, as for a command in the background, it stays so.
        if self._before is signal.default_int_handler:
            signal.signal(signal.SIGINT, self._act)
        return self

    def __exit__(self, *_exception: object) -> None:
        signal.signal(signal.SIGINT, self._before)

    @contextlib.contextmanager
    def finishing(self) -> Iterator[None]:
        """Mark a piece of work that is to be finished."""
        self._working = True
        try:
            yield
        finally:
            self._working = False

    def check(self) -> None:
        """Act on what was asked during a piece of work.

        Raises:
            KeyboardInterrupt: it was.

        """
        if self.asked:
            raise KeyboardInterrupt

    def _act(self, _signal: int, _frame: FrameType | None) -> None:
        if self._working and not self.asked:
            self.asked = True
            return
        raise KeyboardInterrupt
