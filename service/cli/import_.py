"""`waxwane import`: events from files into the store."""

import contextlib
import shlex
import sys
import time
from collections.abc import Callable, Coroutine, Iterator, Sequence
from pathlib import Path
from typing import Annotated, Any, Final

import orjson
import typer

from service.cli.import_progress import Progress, shown_progress
from service.cli.interrupt import Interrupts
from service.cli.opening import STORE_SETTINGS, Opened, opened
from service.cli.options import Json, with_settings
from service.cli.output import print_json, print_table
from service.errors import InvalidField
from service.importing.archives import STDIN, check_readable
from service.importing.summary import SHOWN_REJECTED, Rejected, Stop, Summary, as_document, rate_per_s
from service.settings import Settings
from service.web import clock

REJECTED: Final = 1
_TURN_S: Final = 0.0002
_STOP_STATUS: Final = {"damaged": 1, "store": 2, "interrupted": 130}

Files = Annotated[
    list[str],
    typer.Argument(
        metavar="FILE…",
        help="Files of one JSON event a line, plain or compressed with gzip, bzip2 or xz; - is standard input.",
    ),
]
Rejects = Annotated[
    Path | None,
    typer.Option(metavar="FILE", help="Write every rejected line to this file, with its number and the reason."),
]
FromLine = Annotated[int, typer.Option(min=1, help="Begin at this line of the first file.")]


def register(app: typer.Typer) -> None:
    """Add the command."""
    app.command("import")(with_settings(import_, STORE_SETTINGS))


def import_(
    overrides: dict[str, str | None],
    *,
    files: Files,
    rejects: Rejects = None,
    from_line: FromLine = 1,
    json: Json = False,
) -> None:
    """Apply the events in files. Running it again does no harm: an event counts once.

    Exit status 1 where lines were rejected or a file is damaged; 2 where it could not start, or where the store
    stayed away: the message then says how to go on.
    """
    settings = Settings.load(overrides)
    sizes = [check_readable(name) for name in files]
    with _rejects_file(rejects, files) as on_rejected, opened(settings, background=False) as store:
        summary = Summary(on_rejected)
        started_s = time.perf_counter()
        with shown_progress(sizes) as progress:
            _import(store, files, from_line, summary, progress)
        seconds = time.perf_counter() - started_s
    if json:
        print_json(as_document(summary, seconds))
    else:
        _show(summary, seconds, several=len(files) > 1)
    if summary.stop is not None:
        typer.echo(f"waxwane: {_advice(summary.stop, files)}", err=True)
        raise typer.Exit(_STOP_STATUS[summary.stop.cause])
    raise typer.Exit(REJECTED if summary.rejected else 0)


@contextlib.contextmanager
def quick_turns() -> Iterator[None]:
    """Let threads take turns quickly: the one that feeds the server must not wait for the one that reads ahead."""
    before_s = sys.getswitchinterval()
    sys.setswitchinterval(_TURN_S)
    try:
        yield
    finally:
        sys.setswitchinterval(before_s)


def _import(store: Opened, files: Sequence[str], from_line: int, summary: Summary, progress: Progress) -> None:
    from service.importing.bulk import BulkImporter  # noqa: PLC0415  it loads what most commands do without
    from service.importing.parsing import Parser  # noqa: PLC0415  the same
    from service.importing.run import import_files  # noqa: PLC0415  the same
    from service.importing.target import EngineTarget  # noqa: PLC0415  the same

    def finish(coroutine: Coroutine[Any, Any, Any]) -> Any:  # noqa: ANN401  whatever it gives
        with interrupts.finishing():
            return store.run(coroutine)

    def on_window(name: str, consumed_bytes: int) -> None:
        store.run(store.engine.store.trim_boards())
        progress(name, consumed_bytes, summary)
        interrupts.check()

    def pause(seconds: float) -> None:
        interrupts.check()
        time.sleep(seconds)

    target = EngineTarget(store.engine, finish)
    with Interrupts() as interrupts, Parser(store.engine.store.meta[b"hash_key"]) as parser, quick_turns():
        importer = BulkImporter(target, clock.now_ms, pause, summary)
        import_files(files, from_line, importer, parser.read, on_window)


@contextlib.contextmanager
def _rejects_file(path: Path | None, files: Sequence[str]) -> Iterator[Callable[[Rejected], None]]:
    """Open the file that rejected lines are written to, one JSON object a line."""
    if path is None:
        yield lambda _: None
        return
    if path.resolve() in [Path(name).resolve() for name in files if name != STDIN]:
        raise InvalidField("--rejects", str(path), "a file that is not one of those imported")
    try:
        file = path.open("wb")
    except OSError as error:
        raise InvalidField("--rejects", str(path), f"a file that can be written ({error.strerror})") from None
    with file:
        yield lambda rejected: _write(file.write, rejected)


def _write(write: Callable[[bytes], int], rejected: Rejected) -> None:
    event = orjson.Fragment(rejected.event_json)
    document = {"file": rejected.file, "line": rejected.line, "reason": rejected.reason, "event": event}
    write(orjson.dumps(document, option=orjson.OPT_APPEND_NEWLINE))


def _show(summary: Summary, seconds: float, *, several: bool) -> None:
    rate = rate_per_s(summary.read, seconds)
    typer.echo(f"read       {summary.read:,} events in {seconds:,.1f} s, {rate:,.0f} events/s")
    for name in ("applied", "duplicate", "expired", "rejected"):
        typer.echo(f"{name:<10} {getattr(summary, name):,}")
    if summary.first_rejected:
        _show_rejected(summary.first_rejected, several=several)
    more = summary.rejected - len(summary.first_rejected)
    if more:
        typer.echo(f"{more:,} more were rejected than the {SHOWN_REJECTED} shown; --rejects FILE writes all of them.")


def _show_rejected(rejected: Sequence[Rejected], *, several: bool) -> None:
    typer.echo()
    if several:
        print_table(("file", "line", "reason"), [(one.file, one.line, one.reason) for one in rejected])
    else:
        print_table(("line", "reason"), [(one.line, one.reason) for one in rejected])


def _advice(stop: Stop, files: Sequence[str]) -> str:
    """Say why an import ended early, and how to go on."""
    if stop.cause == "damaged":
        return f"{stop.file}: {stop.reason}; what could be read was applied"
    command = f"waxwane import --from-line {stop.line} {shlex.join(files[files.index(stop.file) :])}"
    return f"{stop.file}: {stop.reason}; all before line {stop.line} was applied; go on with: {command}"
