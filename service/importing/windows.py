"""Read a file's lines in large windows."""

from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from typing import BinaryIO, Final

from service.importing.archives import DAMAGE
from service.importing.lines import LINE_BYTES, DamagedError, Line

WINDOW_LINES: Final = 400_000
WINDOW_BYTES: Final = 96 << 20

_BLOCK_BYTES: Final = 1 << 18
_BYTE_ORDER_MARK: Final = b"\xef\xbb\xbf"


@dataclass(slots=True)
class Window:
    """Lines that stand one after the other, blank ones among them.

    Args:
        first: number of the first, from 1.
        lines: their bytes; None where one is too long to be taken.
        bytes: of all lines together.

    """

    first: int
    lines: list[bytes | None] = field(default_factory=list)
    bytes: int = 0

    def line(self, place: int) -> Line:
        """Give the line at a place, from 0."""
        content = self.lines[place]
        return Line(self.first + place, None if content is None else content.strip())


def windows(
    stream: BinaryIO,
    from_line: int = 1,
    *,
    most_lines: int | None = None,
    most_bytes: int = WINDOW_BYTES,
    idle: Callable[[], bool] = lambda: False,
) -> Iterator[Window]:
    r"""Read lines in windows.

    Args:
        stream: text in UTF-8; a byte order mark at its beginning counts for nothing.
        from_line: the first that counts, from 1.
        most_lines: so many lines make a window, `WINDOW_LINES` where nothing is said.
        most_bytes: about as many bytes make a window.
        idle: called before each read; says whether nothing would come now: a window then ends, however small it is.

    Raises:
        DamagedError: it can't be read to its end; all whole lines before are in the windows given.

    >>> import io
    >>> [(w.first, w.lines) for w in windows(io.BytesIO(b"one\n\ntwo"), 2)]
    [(2, [b'', b'two'])]

    """
    window, number, most_lines = Window(from_line), 0, most_lines or WINDOW_LINES
    try:
        for lines in _split(stream, idle):
            before, number = number, number + len(lines)
            counted = lines[max(0, from_line - 1 - before) :]
            window.lines += counted
            window.bytes += sum(len(line) for line in counted if line is not None)
            while len(window.lines) >= most_lines or window.bytes >= most_bytes:
                full, window = _cut(window, most_lines)
                yield full
            if not lines and window.lines:
                full, window = _cut(window, most_lines)
                yield full
    except DAMAGE as error:
        if window.lines:
            yield window
        raise DamagedError(number, str(error) or type(error).__name__) from error
    if window.lines:
        yield window


def _cut(window: Window, most_lines: int) -> tuple[Window, Window]:
    """Cut a full window off; what is left begins the next."""
    rest = Window(window.first + len(window.lines[:most_lines]), window.lines[most_lines:])
    rest.bytes = sum(len(line) for line in rest.lines if line is not None)
    return Window(window.first, window.lines[:most_lines], window.bytes - rest.bytes), rest


def _split(stream: BinaryIO, idle: Callable[[], bool]) -> Iterator[list[bytes | None]]:
    """Split what is read into whole lines; of one that is too long only a None is left, of a pause an empty list."""
    read = getattr(stream, "read1", stream.read)
    carry, skipping, begun = b"", False, False
    while True:
        while idle():
            yield []
        block = read(_BLOCK_BYTES)
        if not block:
            break
        lines: list[bytes | None] = list((carry + block).split(b"\n"))
        carry = lines.pop() or b""
        if lines and (skipping or len(lines[0] or b"") > LINE_BYTES):
            lines[0], skipping = None, False
        if skipping or len(carry) > LINE_BYTES:
            carry, skipping = b"", True
        if lines and not begun:
            lines[0], begun = _without_mark(lines[0]), True
        if lines:
            yield lines
    if skipping:
        yield [None]
    elif carry:
        yield [carry if begun else _without_mark(carry)]


def _without_mark(line: bytes | None) -> bytes | None:
    return None if line is None else line.removeprefix(_BYTE_ORDER_MARK)
