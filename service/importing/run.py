"""Import files one after the other, and remember where it stopped."""

import contextlib
import queue
import threading
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

from service.errors import StoreUnavailable
from service.importing.archives import Source, opened
from service.importing.bulk import PAUSES_S, BulkImporter
from service.importing.columns import Columns
from service.importing.lines import DamagedError
from service.importing.summary import Stop
from service.importing.windows import Window, windows

_LOOK_S = 0.1

Read = Callable[[Window], Columns]

STAYED_AWAY = f"the store did not answer, {len(PAUSES_S) + 1} times in a row"


@dataclass(frozen=True, slots=True)
class Ready:
    """A window, read and taken apart; `consumed_bytes` of the file had been read by then."""

    window: Window
    columns: Columns
    consumed_bytes: int


def import_files(
    names: Sequence[str],
    from_line: int,
    importer: BulkImporter,
    read: Read,
    on_window: Callable[[str, int], None] = lambda _name, _bytes: None,
) -> None:
    """Import files; where that ends early, the importer's summary has a `stop`.

    Args:
        names: paths; `-` is standard input.
        from_line: the first line of the first file that counts.
        importer: applies the windows.
        read: takes a window apart; called in a thread of its own.
        on_window: called after each window with the file's name and how many of its stored bytes were read.

    Raises:
        UnreadableFileError: a file can't be opened.
        UnsupportedArchiveError: a file is compressed in a way that can't be read here.

    """
    for name in names:
        with opened(name) as source:
            _import_one(source, from_line, importer, read, on_window)
        if importer.summary.stop is not None:
            return
        from_line = 1


def _import_one(
    source: Source,
    from_line: int,
    importer: BulkImporter,
    read: Read,
    on_window: Callable[[str, int], None],
) -> None:
    line, name = from_line, source.name
    try:
        for ready in ahead(source, from_line, read):
            line = ready.window.first
            importer.take(name, ready.window, ready.columns)
            line = ready.window.first + ready.window.count
            on_window(name, ready.consumed_bytes)
    except DamagedError as error:
        importer.summary.stop = Stop("damaged", name, error.line + 1, error.detail)
    except StoreUnavailable:
        importer.summary.stop = Stop("store", name, line, STAYED_AWAY)
    except KeyboardInterrupt:
        importer.summary.stop = Stop("interrupted", name, line, "it was interrupted")


def ahead(source: Source, from_line: int, read: Read) -> Iterator[Ready]:
    """Read windows in a thread of its own, one ahead of what is applied.

    Of a pipe, a window ends where nothing more comes at the moment.

    Args:
        source: the input.
        from_line: the first line that counts.
        read: takes a window apart.

    Raises:
        DamagedError: it can't be read to its end.

    """
    reading = _Reading(source, from_line, read)
    thread = threading.Thread(target=reading.work)
    thread.start()
    try:
        while True:
            ready = reading.out.get()
            reading.taken.set()
            if isinstance(ready, Exception):
                raise ready
            if ready is None:
                return
            yield ready
    finally:
        reading.stopped.set()
        thread.join()


class _StoppedError(Exception):
    """Nobody wants further windows."""


class _Reading:
    """Reads windows until the end of an input, or until `stopped` is set.

    Args:
        source: the input.
        from_line: the first line that counts.
        read: takes a window apart.

    """

    def __init__(self, source: Source, from_line: int, read: Read) -> None:
        self.out: queue.SimpleQueue[Ready | Exception | None] = queue.SimpleQueue()
        self.stopped = threading.Event()
        self.taken = threading.Event()
        self._source, self._from_line, self._read = source, from_line, read

    def work(self) -> None:
        """Put all windows, then None or what went wrong."""
        with contextlib.suppress(_StoppedError):
            try:
                for window in windows(self._source.stream, self._from_line, idle=self._idle):
                    self._put(Ready(window, self._read(window), self._source.consumed_bytes))
                self._put(None)
            except _StoppedError:
                raise
            except Exception as error:  # noqa: BLE001  whatever it is, it is raised where the windows are taken
                self._put(error)

    def _idle(self) -> bool:
        if self.stopped.is_set():
            raise _StoppedError
        return self._source.is_idle()

    def _put(self, ready: Ready | Exception | None) -> None:
        """Hand over, and wait until that is taken: more than one window ahead would only take memory."""
        self.taken.clear()
        self.out.put(ready)
        while not self.taken.wait(_LOOK_S):
            if self.stopped.is_set():
                raise _StoppedError
