"""The progress bar of an import: how much of the files has been read, how fast, and for how much longer."""

import contextlib
import sys
import time
from collections.abc import Callable, Iterator, Sequence

from rich import progress as bars
from rich.console import Console

from service.importing.summary import Summary, rate_per_s

Progress = Callable[[str, int, Summary], None]
"""Told after each batch: the input's name, how many of its stored bytes were read, and the counts so far."""


@contextlib.contextmanager
def shown_progress(sizes: Sequence[int | None]) -> Iterator[Progress]:
    """Show a progress bar for as long as the `with` block lasts, where somebody is watching.

    Args:
        sizes: stored bytes of each input; None where it can't be known.

    """
    watched = sys.stdout.isatty() and sys.stderr.isatty()
    total = None if None in sizes else sum(size or 0 for size in sizes)
    with bars.Progress(
        bars.BarColumn(),
        bars.TaskProgressColumn(),
        bars.TextColumn("{task.fields[count]:,} events, {task.fields[rate]:,.0f}/s,"),
        bars.TimeRemainingColumn(),
        bars.TextColumn("left"),
        console=Console(stderr=True),
        disable=not watched,
        transient=True,
    ) as bar:
        task = bar.add_task("", total=total, count=0, rate=0.0)
        started_s = time.perf_counter()
        read: dict[str, int] = {}

        def update(name: str, consumed_bytes: int, summary: Summary) -> None:
            read[name] = consumed_bytes
            rate = rate_per_s(summary.read, time.perf_counter() - started_s)
            bar.update(task, completed=sum(read.values()), count=summary.read, rate=rate)

        yield update
