"""Import files one after the other, and remember where it stopped."""

from collections.abc import Callable, Sequence

from service.errors import StoreUnavailable
from service.importing.archives import Source, opened
from service.importing.batch import PAUSES_S, Importer
from service.importing.lines import DamagedError, batches, read_lines
from service.importing.summary import Stop

STAYED_AWAY = f"the store did not answer, {len(PAUSES_S) + 1} times in a row"


def import_files(
    names: Sequence[str], from_line: int, importer: Importer, on_batch: Callable[[Source], None] = lambda _: None
) -> None:
    """Import files; where that ends early, the importer's summary has a `stop`.

    Args:
        names: paths; `-` is standard input.
        from_line: the first line of the first file that counts.
        importer: applies the batches.
        on_batch: called after each batch.

    Raises:
        UnreadableFileError: a file can't be opened.
        UnsupportedArchiveError: a file is compressed in a way that can't be read here.

    """
    for name in names:
        with opened(name) as source:
            _import_one(source, from_line, importer, on_batch)
        if importer.summary.stop is not None:
            return
        from_line = 1


def _import_one(source: Source, from_line: int, importer: Importer, on_batch: Callable[[Source], None]) -> None:
    line, name = from_line, source.name
    try:
        for batch in batches(read_lines(source.stream), from_line):
            line = batch[0].number
            importer.take(name, batch)
            line = batch[-1].number + 1
            on_batch(source)
    except DamagedError as error:
        importer.summary.stop = Stop("damaged", name, error.line + 1, error.detail)
    except StoreUnavailable:
        importer.summary.stop = Stop("store", name, line, STAYED_AWAY)
    except KeyboardInterrupt:
        importer.summary.stop = Stop("interrupted", name, line, "it was interrupted")
