"""Apply one batch of lines: validate, apply, count, and try again while the store is away."""

from collections import Counter
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Final

import orjson

from service.errors import StoreUnavailable
from service.events.bodies import NDJSON, parse_body
from service.events.model import AnyEvent
from service.importing.lines import LINE_BYTES, Line
from service.importing.summary import Rejected, Summary
from service.store.verdict import Verdict

PAUSES_S: Final = (0.5, 1.0, 2.0, 4.0)
"""How long to wait before each further try, seconds."""

TOO_LONG: Final = f"the line is longer than {LINE_BYTES} bytes"

Apply = Callable[[Sequence[AnyEvent], int], list[Verdict]]


@dataclass(frozen=True, slots=True)
class Importer:
    """Applies batches of lines and counts what became of them.

    Args:
        apply: applies events at a time, Unix milliseconds, and gives a verdict for each.
        now_ms: the clock, Unix milliseconds; read once for each try of a batch.
        pause: waits for some seconds.
        summary: where everything is counted.

    """

    apply: Apply
    now_ms: Callable[[], int]
    pause: Callable[[float], None]
    summary: Summary

    def take(self, file: str, batch: Sequence[Line]) -> None:
        """Apply a batch.

        Args:
            file: name of the input.
            batch: lines in order, none of them blank.

        Raises:
            StoreUnavailable: the store stayed away; nothing of the batch is counted, and it may be sent again.

        """
        lines = [line for line in batch if line.content is not None]
        parsed = parse_body(b"\n".join(_contents(lines)), NDJSON, {}, max_batch=len(lines))
        reasons = {line.number: TOO_LONG for line in batch if line.content is None}
        reasons |= {lines[one.index].number: one.reason for one in parsed.rejected}
        verdicts = self._persist([event for _, event in parsed.events])
        for (index, _), verdict in zip(parsed.events, verdicts, strict=True):
            if verdict.outcome == "rejected":
                reasons[lines[index].number] = verdict.reason or "it is not allowed"
        self._count(verdicts)
        for line in batch:
            if line.number in reasons:
                self.summary.reject(Rejected(file, line.number, reasons[line.number], _event_json(line)))

    def _persist(self, events: Sequence[AnyEvent]) -> list[Verdict]:
        """Apply events; where the store is away, wait and try again, which changes nothing but the counts."""
        if not events:
            return []
        for pause_s in PAUSES_S:
            try:
                return self.apply(events, self.now_ms())
            except StoreUnavailable:
                self.pause(pause_s)
        return self.apply(events, self.now_ms())

    def _count(self, verdicts: Sequence[Verdict]) -> None:
        counts = Counter(verdict.outcome for verdict in verdicts)
        self.summary.applied += counts["applied"]
        self.summary.duplicate += counts["duplicate"]
        self.summary.expired += counts["expired"]


def _contents(lines: Sequence[Line]) -> list[bytes]:
    return [line.content or b"" for line in lines]


def _event_json(line: Line) -> bytes:
    if line.content is None:
        return b"null"
    try:
        orjson.loads(line.content)
    except orjson.JSONDecodeError:
        return orjson.dumps(line.content.decode("utf-8", "replace"))
    return line.content
