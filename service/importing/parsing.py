"""Take lines apart in a process of their own, so that the one that feeds the server is not held up."""

import contextlib
import dataclasses
import multiprocessing
import signal
from multiprocessing.connection import Connection
from multiprocessing.process import BaseProcess
from typing import Final, Self

from service.importing.columns import Columns, HashMany, Reader
from service.importing.windows import Window
from service.store.ids import IdHasher

WORTH_A_PROCESS: Final = 50_000
"""Fewer lines than these are taken apart at once: a process takes half a second to start."""

_FIELDS: Final = tuple(field.name for field in dataclasses.fields(Columns))
"""They are sent one by one, as each message is held twice for a moment."""


class Parser:
    """Takes windows apart; its process is started when it is first needed and ends with the `with` block.

    Args:
        hash_key: the store's key for hashing ids.

    """

    def __init__(self, hash_key: bytes) -> None:
        self._hash_key = hash_key
        self._hash_many = IdHasher(hash_key).hash_many
        self._line: Connection | None = None
        self._gone = False
        self.process: BaseProcess | None = None

    def __enter__(self) -> Self:
        return self

    def __exit__(self, *_exception: object) -> None:
        if self._line is not None:
            self._line.close()

    def read(self, window: Window) -> Columns:
        """Read the lines of one window; where the process is gone, for lack of memory say, they are read here."""
        if self._gone or (self._line is None and window.count < WORTH_A_PROCESS):
            return _read_here(self._hash_many, window)
        try:
            if self._line is None:
                self._line = self._start()
            self._line.send(len(window.blocks))
            for block in window.blocks:
                self._line.send(block)
            return Columns(*[self._line.recv() for _ in _FIELDS])
        except (EOFError, OSError):
            self._gone = True
            return _read_here(self._hash_many, window)

    def _start(self) -> Connection:
        context = multiprocessing.get_context("spawn")
        ours, theirs = context.Pipe()
        self.process = context.Process(target=_serve, args=(theirs, self._hash_key), daemon=True)
        self.process.start()
        theirs.close()
        return ours


def _read_here(hash_many: HashMany, window: Window) -> Columns:
    reader = Reader(hash_many)
    for block in window.blocks:
        reader.add(block.lines())
    return reader.columns()


def _serve(line: Connection, hash_key: bytes) -> None:
    """Take windows apart until the other side is gone; Ctrl-C is the other side's to act on."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    hash_many = IdHasher(hash_key).hash_many
    with contextlib.suppress(EOFError, OSError):
        while True:
            reader = Reader(hash_many)
            for _ in range(line.recv()):
                reader.add(line.recv().lines())
            columns = reader.columns()
            for name in _FIELDS:
                line.send(getattr(columns, name))
            del reader, columns
