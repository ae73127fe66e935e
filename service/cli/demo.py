"""`waxwane demo`: a community of gardeners, one reader's feed, and how it changes."""

import contextlib
import signal
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Annotated

import typer

from service.cli.options import Json
from service.cli.output import print_json

INTERRUPTED = 130
_MIN_PEOPLE, _MAX_PEOPLE = 300, 2_000
_DEFAULT_SEED = 3
_WATCHED_PACE_S = 1.0


def register(app: typer.Typer) -> None:
    """Add the command."""
    app.command("demo")(demo)


def demo(
    *,
    reader: Annotated[str | None, typer.Option(help="Whose feed to show; not set: somebody with many ties.")] = None,
    people: Annotated[
        int, typer.Option(min=_MIN_PEOPLE, max=_MAX_PEOPLE, help="How many gardeners; more take longer to load.")
    ] = 320,
    seed: Annotated[int, typer.Option(min=0, help="Of all chance: the same seed invents the same week.")] = (
        _DEFAULT_SEED
    ),
    k: Annotated[int, typer.Option("--k", min=3, max=50, help="How many posts to show.")] = 8,
    pace: Annotated[
        float | None, typer.Option(min=0, help="Pause between steps, seconds; not set: 1 in a terminal, else 0.")
    ] = None,
    data: Annotated[
        Path | None, typer.Option(help="New or empty folder for the store, which stays; not set: a temporary one.")
    ] = None,
    keep: Annotated[bool, typer.Option("--keep", help="Leave the service running until Ctrl-C.")] = False,
    json: Json = False,
) -> None:
    """Show what the service does: invented gardeners, one reader's feed with reasons, and how it changes.

    It starts a service of its own with an embedded store, loads a week of events over HTTP, lets new ones arrive,
    and says how to go on. Nothing else needs to run, and nothing stays behind unless --data is given.
    """
    started_s = time.perf_counter()
    from rich.console import Console  # noqa: PLC0415  other commands need none of these

    from service.demo.screen import Screen  # noqa: PLC0415  as above
    from service.demo.show import Clocks, Wishes, play  # noqa: PLC0415  as above
    from service.web import clock  # noqa: PLC0415  as above

    pause_s = pace if pace is not None else _WATCHED_PACE_S if sys.stdout.isatty() and not json else 0.0
    screen = Screen(Console(quiet=json, highlight=False), lambda: time.sleep(pause_s))
    wishes = Wishes(people=people, seed=seed, reader=reader, k=k, data=data and data.expanduser(), keep=keep)
    clocks = Clocks(clock.now_ms, lambda: time.perf_counter() - started_s)
    told: list[bool] = []

    def finish(document: dict[str, object]) -> None:
        told.append(True)
        if json:
            print_json(document)

    with _ended_in_order(told):
        play(wishes, screen, clocks, finish)


@contextlib.contextmanager
def _ended_in_order(told: list[bool]) -> Iterator[None]:
    """Let Ctrl-C and SIGTERM end the block in order: no fault once everything was told, else exit status 130."""

    def stop(_signal: int, _frame: object) -> None:
        # A second one must not cut the orderly end short.
        signal.signal(signal.SIGTERM, signal.SIG_IGN)
        raise KeyboardInterrupt

    before = signal.signal(signal.SIGTERM, stop)
    try:
        yield
    except KeyboardInterrupt:
        typer.echo("\nStopped; the service has ended.", err=True)
        if not told:
            raise typer.Exit(INTERRUPTED) from None
    finally:
        signal.signal(signal.SIGTERM, before)
