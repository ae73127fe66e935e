"""The one clock of the HTTP edge."""

import time


def now_ms() -> int:
    """Read the wall clock, Unix milliseconds."""
    return time.time_ns() // 1_000_000


def since_ms(arrived_s: float) -> float:
    """Tell how long ago a reading of `time.perf_counter` was, milliseconds."""
    return (time.perf_counter() - arrived_s) * 1000
