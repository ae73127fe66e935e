"""Wait for the state of processes, bounded."""

import time
from collections.abc import Callable
from pathlib import Path
from typing import TypeVar

T = TypeVar("T")


def until(look: Callable[[], T], timeout_s: float = 20.0) -> T:
    """Call `look` until it returns something true, and return that."""
    deadline_s = time.monotonic() + timeout_s
    while not (seen := look()):
        assert time.monotonic() < deadline_s, f"not within {timeout_s} s: {look}"
        time.sleep(0.01)
    return seen


def alive(pid: int) -> bool:
    """Tell whether a process runs; one that has ended and is not yet collected does not."""
    try:
        status = Path(f"/proc/{pid}/stat").read_text()
    except FileNotFoundError:
        return False
    return status.rpartition(")")[2].split()[0] != "Z"
