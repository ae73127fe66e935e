"""Open a file of events, plain or compressed; what it is shows in its first bytes, not in its name."""

import bz2
import contextlib
import gzip
import importlib
import importlib.util
import io
import lzma
import select
import stat
import sys
import zlib
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import BinaryIO, Final, cast

from service.errors import WaxwaneError

STDIN: Final = "-"
SUPPORTED: Final = "plain text, gzip, bzip2 and xz"

_MAGIC: Final = {
    b"\x1f\x8b": "gzip",
    b"BZh": "bzip2",
    b"\xfd7zXZ\x00": "xz",
    b"\x28\xb5\x2f\xfd": "zstd",
    b"PK\x03\x04": "zip",
}
_HEAD_BYTES: Final = max(map(len, _MAGIC))
_BUFFER_BYTES: Final = 1 << 16
_IDLE_S: Final = 0.05
_ZSTD: Final = "compression.zstd"

DAMAGE: Final = (EOFError, OSError, zlib.error, lzma.LZMAError)
"""What reading a damaged or truncated archive raises."""


class UnsupportedArchiveError(WaxwaneError):
    """The file is compressed in a way that can't be read here."""

    def __init__(self, name: str, compression: str) -> None:
        super().__init__(
            f"{name} is compressed with {compression}, which can't be read here; supported: {SUPPORTED}; "
            f"decompress it first and pass the events on standard input: … | waxwane import {STDIN}"
        )


class UnreadableFileError(WaxwaneError):
    """The file can't be opened."""

    def __init__(self, name: str, error: OSError) -> None:
        super().__init__(f"{name} can't be opened: {error.strerror or error}")


class Source:
    """One input, read from its beginning to its end, once.

    Args:
        name: what it is called in messages.
        file: its bytes as they are stored.

    Raises:
        UnsupportedArchiveError: it is compressed in a way that can't be read here.

    """

    def __init__(self, name: str, file: BinaryIO) -> None:
        self.name = name
        self._pipe = file if name == STDIN or _is_read_once(name) else None
        head = file.read(_HEAD_BYTES)
        self._counted = _Counted(head, file)
        self.stream = _decompressed(name, compression_of(head), self._counted)

    def is_idle(self) -> bool:
        """Say whether it is a pipe through which nothing comes at the moment."""
        if self._pipe is None:
            return False
        with contextlib.suppress(OSError, ValueError):
            return not select.select([self._pipe.fileno()], [], [], _IDLE_S)[0]
        return False

    @property
    def consumed_bytes(self) -> int:
        """How many of the stored bytes have been read so far."""
        return self._counted.count


@contextlib.contextmanager
def opened(name: str) -> Iterator[Source]:
    """Open an input for as long as the `with` block lasts.

    Args:
        name: a path; `-` is standard input, which stays open.

    Raises:
        UnreadableFileError: it can't be opened.
        UnsupportedArchiveError: it is compressed in a way that can't be read here.

    """
    if name == STDIN:
        yield Source(name, sys.stdin.buffer)
        return
    with _open(name) as file:
        yield Source(name, file)


def check_readable(name: str) -> int | None:
    """Look at an input before anything is read from it.

    Returns:
        Its size in stored bytes; None where that can't be known, as with a pipe.

    Raises:
        UnreadableFileError: it can't be opened.
        UnsupportedArchiveError: it is compressed in a way that can't be read here.

    """
    if name == STDIN or _is_read_once(name):
        return None
    with opened(name):
        return Path(name).stat().st_size


def compression_of(head: bytes) -> str | None:
    r"""Recognise a compression by a file's first bytes.

    >>> compression_of(b"BZh91AY"), compression_of(b"\x28\xb5\x2f\xfd\x04\x00"), compression_of(b'{"id":')
    ('bzip2', 'zstd', None)

    """
    return next((name for magic, name in _MAGIC.items() if head.startswith(magic)), None)


def _is_read_once(name: str) -> bool:
    """Tell whether what is read of it is gone: a pipe or a device."""
    with contextlib.suppress(OSError):
        mode = Path(name).stat().st_mode
        return stat.S_ISFIFO(mode) or stat.S_ISCHR(mode)
    return False


def _open(name: str) -> BinaryIO:
    try:
        return Path(name).open("rb")
    except OSError as error:
        raise UnreadableFileError(name, error) from None


def _decompressed(name: str, compression: str | None, counted: "_Counted") -> BinaryIO:
    buffered = cast("BinaryIO", io.BufferedReader(counted, _BUFFER_BYTES))
    if compression is None:
        return buffered
    openers: dict[str, Callable[[BinaryIO], object]] = {
        "gzip": lambda file: gzip.GzipFile(fileobj=file, mode="rb"),
        "bzip2": bz2.BZ2File,
        "xz": lzma.LZMAFile,
    }
    if compression == "zstd" and sys.version_info >= (3, 14) and importlib.util.find_spec(_ZSTD):
        openers["zstd"] = importlib.import_module(_ZSTD).ZstdFile
    if compression not in openers:
        raise UnsupportedArchiveError(name, compression)
    return cast("BinaryIO", openers[compression](buffered))


class _Counted(io.RawIOBase):
    """Puts back the first bytes of a file and counts what is read of it."""

    def __init__(self, head: bytes, file: BinaryIO) -> None:
        self._head = head
        self._file = file
        self.count = 0

    def readable(self) -> bool:
        return True

    def readinto(self, buffer: memoryview) -> int:  # type: ignore[override]  # what the buffered reader hands over
        data = self._head[: len(buffer)]
        self._head = self._head[len(data) :]
        data = data or _read_some(self._file, len(buffer))
        buffer[: len(data)] = data
        self.count += len(data)
        return len(data)


def _read_some(file: BinaryIO, most: int) -> bytes:
    """Read what is there: from a pipe, what has arrived, rather than wait until the buffer is full."""
    read: Callable[[int], bytes] = getattr(file, "read1", file.read)
    return read(most)
