"""Read a file's lines in large windows."""

from bisect import bisect_right
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from typing import BinaryIO, Final

from service.importing.archives import DAMAGE
from service.importing.lines import LINE_BYTES, DamagedError, Line

WINDOW_LINES: Final = 550_000
WINDOW_BYTES: Final = 96 << 20
FIRST_LINES: Final = 100_000
"""The first window is smaller, so that the server soon has something to do."""

_READ_BYTES: Final = 1 << 18
_BYTE_ORDER_MARK: Final = b"\xef\xbb\xbf"


@dataclass(frozen=True, slots=True)
class Block:
    """Whole lines as they were read together.

    Args:
        text: the lines, without the end of the last.
        count: how many they are.
        first_is_long: the first was too long to be taken; an empty line stands for it.

    """

    text: bytes
    count: int
    first_is_long: bool = False

    def lines(self) -> list[bytes | None]:
        """Split it; None stands for a line that is too long."""
        lines: list[bytes | None] = list(self.text.split(b"\n"))
        if self.first_is_long:
            lines[0] = None
        return lines

    def cut(self, count: int) -> tuple["Block", "Block"]:
        """Cut it in two after so many lines, at least 1 and fewer than there are."""
        parts = self.text.split(b"\n", count)
        head = Block(b"\n".join(parts[:count]), count, self.first_is_long)
        return head, Block(parts[count], self.count - count)


@dataclass(slots=True)
class Window:
    """Lines that stand one after the other, blank ones among them.

    Args:
        first: number of the first, from 1.

    """

    first: int
    blocks: list[Block] = field(default_factory=list)
    count: int = 0
    size_bytes: int = 0
    _starts: list[int] = field(default_factory=list)
    _split: tuple[int, list[bytes | None]] = (-1, [])

    def add(self, block: Block) -> None:
        """Add lines at its end; what came in small pieces is put together."""
        last = self.blocks[-1] if self.blocks else None
        if last and not block.first_is_long and len(last.text) + len(block.text) <= _READ_BYTES:
            text = last.text + b"\n" + block.text
            self.blocks[-1] = Block(text, last.count + block.count, last.first_is_long)
        else:
            self._starts.append(self.count)
            self.blocks.append(block)
        self.count += block.count
        self.size_bytes += len(block.text)

    def cut(self, most_lines: int) -> tuple["Window", "Window"]:
        """Cut off what is beyond so many lines, all of it in the last block; it begins the next window."""
        rest = Window(self.first + min(self.count, most_lines))
        if self.count > most_lines:
            start, last = self._starts.pop(), self.blocks.pop()
            self.count, self.size_bytes = start, self.size_bytes - len(last.text)
            head, tail = last.cut(most_lines - start)
            self.add(head)
            rest.add(tail)
        return self, rest

    def line(self, place: int) -> Line:
        """Give the line at a place, from 0; quick where places rise."""
        number = bisect_right(self._starts, place) - 1
        if self._split[0] != number:
            self._split = (number, self.blocks[number].lines())
        content = self._split[1][place - self._starts[number]]
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
        most_lines: so many lines make a window, `WINDOW_LINES` where nothing is said, and no more than `FIRST_LINES`
            the first.
        most_bytes: about as many bytes make a window.
        idle: called before each read; says whether nothing would come now: a window then ends, however small it is.

    Raises:
        DamagedError: it can't be read to its end; all whole lines before are in the windows given.

    >>> import io
    >>> [(w.first, w.count, w.line(1)) for w in windows(io.BytesIO(b"one\n\ntwo"), 2)]
    [(2, 2, Line(number=3, content=b'two'))]

    """
    window, number, later_lines = Window(from_line), 0, most_lines or WINDOW_LINES
    most_lines = min(FIRST_LINES, later_lines)
    try:
        for block in _blocks(stream, idle):
            if block is not None:
                skipped = min(block.count, max(0, from_line - 1 - number))
                number += block.count
                if skipped < block.count:
                    window.add(block.cut(skipped)[1] if skipped else block)
            while window.count >= most_lines:
                full, window = window.cut(most_lines)
                most_lines = later_lines
                yield full
            if window.count and (block is None or window.size_bytes >= most_bytes):
                full, window = window.cut(most_lines)
                yield full
    except DAMAGE as error:
        if window.count:
            yield window
        raise DamagedError(number, str(error) or type(error).__name__) from error
    if window.count:
        yield window


def _blocks(stream: BinaryIO, idle: Callable[[], bool]) -> Iterator[Block | None]:
    """Read whole lines; of one that is too long nothing is kept, and for a pause None is given."""
    read = getattr(stream, "read1", stream.read)
    carry, skipping, begun = b"", False, False
    while True:
        while idle():
            yield None
        data = read(_READ_BYTES)
        if not data:
            break
        text = carry + data
        end = text.rfind(b"\n")
        if end >= 0:
            block = _block(text[:end], skipping=skipping, begun=begun)
            carry, skipping, begun = text[end + 1 :], False, True
            yield block
        else:
            carry = text
        if skipping or len(carry) > LINE_BYTES:
            carry, skipping = b"", True
    if skipping or carry:
        yield _block(carry, skipping=skipping, begun=begun)


def _block(text: bytes, *, skipping: bool, begun: bool) -> Block:
    """Make a block; only its first line can be too long, as all others were read in one go."""
    end = text.find(b"\n")
    first_bytes = len(text) if end < 0 else end
    long = skipping or first_bytes > LINE_BYTES
    if long:
        text = text[first_bytes:]
    elif not begun:
        text = text.removeprefix(_BYTE_ORDER_MARK)
    return Block(text, text.count(b"\n") + 1, long)
