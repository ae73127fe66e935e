"""Read lines and gather them into batches, in constant memory."""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import BinaryIO, Final

from service.errors import WaxwaneError
from service.importing.archives import DAMAGE

LINE_BYTES: Final = 1 << 20
"""The longest line that is taken, bytes without its end."""

BATCH_LINES: Final = 1_000
BATCH_BYTES: Final = 4 << 20

_BYTE_ORDER_MARK: Final = b"\xef\xbb\xbf"


class DamagedError(WaxwaneError):
    """An input can't be read to its end.

    Args:
        line: the last line that was read whole.
        reason: what went wrong.

    """

    def __init__(self, line: int, reason: str) -> None:
        super().__init__(f"the file is cut off or damaged after line {line}: {reason}")
        self.line = line


@dataclass(frozen=True, slots=True)
class Line:
    """One line; `content` is None where it is too long to be taken."""

    number: int
    content: bytes | None


def read_lines(stream: BinaryIO) -> Iterator[Line]:
    r"""Read the lines that are not blank, numbered from 1.

    Args:
        stream: text in UTF-8; a byte order mark at its beginning counts for nothing.

    Raises:
        DamagedError: it can't be read to its end.

    >>> import io
    >>> [(line.number, line.content) for line in read_lines(io.BytesIO(b"one\n \ntwo"))]
    [(1, b'one'), (3, b'two')]

    """
    number = 0
    try:
        while content := stream.readline(LINE_BYTES + 1):
            taken = _rest_skipped(stream, content)
            number += 1
            if number == 1 and taken is not None:
                taken = taken.removeprefix(_BYTE_ORDER_MARK)
            stripped = None if taken is None else taken.strip()
            if stripped != b"":
                yield Line(number, stripped)
    except DAMAGE as error:
        raise DamagedError(number, str(error) or type(error).__name__) from error


def _rest_skipped(stream: BinaryIO, content: bytes) -> bytes | None:
    """Give a line back as it is; of one that is too long, skip the rest piece by piece and give None."""
    if len(content) <= LINE_BYTES or content.endswith(b"\n"):
        return content
    while content and not content.endswith(b"\n"):
        content = stream.readline(LINE_BYTES)
    return None


def batches(lines: Iterator[Line], from_line: int = 1) -> Iterator[list[Line]]:
    """Gather lines into batches of at most `BATCH_LINES` lines and about `BATCH_BYTES` bytes.

    Args:
        lines: in order.
        from_line: the first that counts.

    Raises:
        DamagedError: the input can't be read to its end; all lines before are in the batches given.

    """
    wanted = (line for line in lines if line.number >= from_line)
    while True:
        batch: list[Line] = []
        try:
            _fill(batch, wanted)
        except DamagedError:
            if batch:
                yield batch
            raise
        if not batch:
            return
        yield batch


def _fill(batch: list[Line], lines: Iterator[Line]) -> None:
    size = 0
    for line in lines:
        batch.append(line)
        size += len(line.content or b"")
        if len(batch) == BATCH_LINES or size >= BATCH_BYTES:
            return
