"""A line of an input, and how long it may be."""

from dataclasses import dataclass
from typing import Final

from service.errors import WaxwaneError

LINE_BYTES: Final = 1 << 20
"""The longest line that is taken, bytes without its end."""


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
