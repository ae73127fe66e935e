"""Take lines apart in a process of their own, so that the one that feeds the server is not held up."""

import contextlib
import multiprocessing
import signal
from collections.abc import Sequence
from multiprocessing.connection import Connection
from typing import Final, Self, cast

from service.importing.columns import Columns, Reader
from service.store.ids import IdHasher

WORTH_A_PROCESS: Final = 50_000
"""Fewer lines than these are taken apart at once: a process takes half a second to start."""


class Parser:
    """Takes windows apart; its process is started when it is first needed and ends with the `with` block.

    Args:
        hash_key: the store's key for hashing ids.

    """

    def __init__(self, hash_key: bytes) -> None:
        self._hash_key = hash_key
        self._hash_many = IdHasher(hash_key).hash_many
        self._line: Connection | None = None

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_exception: object) -> None:
        if self._line is not None:
            self._line.close()

    def read(self, lines: Sequence[bytes | None]) -> Columns:
        """Read the lines of one window; see `Reader.read`."""
        if self._line is None and len(lines) < WORTH_A_PROCESS:
            return Reader(self._hash_many).read(lines)
        if self._line is None:
            self._line = self._start()
        self._line.send([place for place, line in enumerate(lines) if line is None])
        self._line.send_bytes(b"\n".join([line or b"" for line in lines]))
        return cast("Columns", self._line.recv())

    def _start(self) -> Connection:
        context = multiprocessing.get_context("spawn")
        ours, theirs = context.Pipe()
        context.Process(target=_serve, args=(theirs, self._hash_key), daemon=True).start()
        theirs.close()
        return ours


def _serve(line: Connection, hash_key: bytes) -> None:
    """Take windows apart until the other side is gone; Ctrl-C is the other side's to act on."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    hash_many = IdHasher(hash_key).hash_many
    with contextlib.suppress(EOFError, OSError):
        while True:
            absent = line.recv()
            lines: list[bytes | None] = list(line.recv_bytes().split(b"\n"))
            for place in absent:
                lines[place] = None
            line.send(Reader(hash_many).read(lines))
