"""Apply one window of lines: most interactions at once, everything else event by event.

Order does not matter by contract, so a window is applied in three parts: posts, so that authors are known; then the
interactions that were read as columns; then all the rest in the order of its lines.
"""

from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from functools import partial
from typing import Final, Protocol, TypeVar

import numpy as np
import orjson
from numpy.typing import NDArray

from service.errors import StoreUnavailable
from service.events.bodies import NDJSON, parse_body
from service.events.model import AnyEvent, PostEvent
from service.importing.columns import Columns
from service.importing.lines import LINE_BYTES, Line
from service.importing.summary import Rejected, Summary
from service.importing.windows import Window
from service.store.bulk import Outcomes
from service.store.bulk_columns import Edges
from service.store.ingest import AHEAD_MS
from service.store.verdict import DUPLICATE, EXPIRED, Verdict

T = TypeVar("T")
Rows = NDArray[np.intp]

BATCH_LINES: Final = 1_000
"""How many events are applied together where they are applied one by one."""

PAUSES_S: Final = (0.5, 1.0, 2.0, 4.0)
"""How long to wait before each further try, seconds."""

_EXPIRED: Final = 255
"""Stands where an interaction is past retention; no outcome of the store's has this code."""

TOO_LONG: Final = f"the line is longer than {LINE_BYTES} bytes"


class Target(Protocol):
    """What events are applied to; each method raises `StoreUnavailable` where it does not answer."""

    @property
    def retention_ms(self) -> int:
        """The age past which events are expired, milliseconds."""

    def apply(self, events: Sequence[AnyEvent], now_ms: int) -> list[Verdict]:
        """Apply events one by one."""

    def apply_edges(self, edges: Edges, now_ms: int) -> tuple[Outcomes, dict[int, Verdict]]:
        """Apply interactions at once; the outcome of each, and what each outcome means."""

    def kind_codes(self, kinds: Sequence[str]) -> list[int]:
        """Give the codes of kinds, -1 for those that can't be taken."""


@dataclass(frozen=True, slots=True)
class _Rows:
    """Which rows of the columns are taken at once.

    Args:
        fresh: those that stand for themselves.
        twins: those that repeat another row word for word.
        firsts: the rows that `twins` repeat.
        slow: lines that go one by one, in order.

    """

    fresh: Rows
    twins: Rows
    firsts: Rows
    slow: list[int]


@dataclass(slots=True)
class _Counts:
    """What became of a window's lines; `reasons` are by place."""

    outcomes: Counter[str] = field(default_factory=Counter)
    reasons: dict[int, str] = field(default_factory=dict)

    def add(self, places: Sequence[int], verdicts: Sequence[Verdict]) -> None:
        """Count the verdicts on some lines."""
        self.outcomes.update(verdict.outcome for verdict in verdicts)
        for place, verdict in zip(places, verdicts, strict=True):
            if verdict.outcome == "rejected":
                self.reasons[place] = verdict.reason or "it is not allowed"

    def add_outcomes(self, places: Rows, outcomes: Outcomes, meaning: Mapping[int, Verdict]) -> None:
        """Count the outcomes of some lines."""
        for outcome, count in zip(*np.unique(outcomes, return_counts=True), strict=True):
            verdict = meaning[int(outcome)]
            if verdict.outcome == "rejected":
                self.add(places[outcomes == outcome].tolist(), [verdict] * int(count))
            else:
                self.outcomes[verdict.outcome] += int(count)


@dataclass(frozen=True, slots=True)
class BulkImporter:
    """Applies windows of lines and counts what became of them.

    Args:
        target: what they are applied to.
        now_ms: the clock, Unix milliseconds; read anew for each try.
        pause: waits for some seconds.
        summary: where everything is counted.

    """

    target: Target
    now_ms: Callable[[], int]
    pause: Callable[[float], None]
    summary: Summary

    def take(self, file: str, window: Window, columns: Columns) -> None:
        """Apply a window.

        Args:
            file: name of the input.
            window: its lines.
            columns: what was read of them.

        Raises:
            StoreUnavailable: the store stayed away; nothing of the window is counted, and it may be sent again.

        """
        counts = _Counts()
        codes = np.array(self._persist(lambda _: self.target.kind_codes(columns.kind_names)), np.int64)
        rows = _chosen(columns, codes, self.now_ms())
        events = _parse(window, rows.slow, counts)
        self._apply([pair for pair in events if isinstance(pair[1], PostEvent)], counts)
        self._apply_rows(columns, codes, rows, counts)
        self._apply([pair for pair in events if not isinstance(pair[1], PostEvent)], counts)
        self._report(file, window, counts)

    def _apply(self, events: Sequence[tuple[int, AnyEvent]], counts: _Counts) -> None:
        """Apply events one by one, each given with its line's place."""
        for first in range(0, len(events), BATCH_LINES):
            places, some = zip(*events[first : first + BATCH_LINES], strict=True)
            counts.add(places, self._persist(partial(self.target.apply, some)))

    def _apply_rows(self, columns: Columns, codes: NDArray[np.int64], rows: _Rows, counts: _Counts) -> None:
        """Apply rows at once; a repeat is what its first is, and a duplicate where that counts already."""
        if not len(rows.fresh):
            return
        outcomes = np.full(len(columns.places), _EXPIRED, np.uint8)

        def apply(now_ms: int) -> dict[int, Verdict]:
            timely = rows.fresh[now_ms - columns.at_ms[rows.fresh] <= self.target.retention_ms]
            if not len(timely):
                return {}
            outcomes[timely], meaning = self.target.apply_edges(_edges(columns, codes, timely), now_ms)
            return meaning

        meaning = self._persist(apply) | {_EXPIRED: EXPIRED}
        counts.add_outcomes(columns.places[rows.fresh], outcomes[rows.fresh], meaning)
        again = {code: DUPLICATE if one.outcome == "applied" else one for code, one in meaning.items()}
        counts.add_outcomes(columns.places[rows.twins], outcomes[rows.firsts], again)

    def _persist(self, apply: Callable[[int], T]) -> T:
        """Apply; where the store is away, wait and try again, which changes nothing but the counts."""
        for pause_s in PAUSES_S:
            try:
                return apply(self.now_ms())
            except StoreUnavailable:
                self.pause(pause_s)
        return apply(self.now_ms())

    def _report(self, file: str, window: Window, counts: _Counts) -> None:
        self.summary.applied += counts.outcomes["applied"]
        self.summary.duplicate += counts.outcomes["duplicate"]
        self.summary.expired += counts.outcomes["expired"]
        for place in sorted(counts.reasons):
            line = window.line(place)
            self.summary.reject(Rejected(file, line.number, counts.reasons[place], _event_json(line)))


def _chosen(columns: Columns, codes: NDArray[np.int64], now_ms: int) -> _Rows:
    """Choose the rows that are taken at once: of known kinds, not too far ahead, no two of one identity but twins."""
    first, count = columns.firsts, len(columns.places)
    itself = first == np.arange(count)
    good = (columns.at_ms <= now_ms + AHEAD_MS) & (codes[columns.kinds] >= 0) if count else itself
    same = np.ones(count, np.bool_)
    for column in (columns.posts, columns.at_ms, columns.kinds):
        same &= column == column[first]
    twins = np.flatnonzero(good & ~itself & same)
    slow = columns.places[~(good & (itself | same))].tolist()
    return _Rows(np.flatnonzero(good & itself), twins, first[twins], sorted(columns.others + slow))


def _edges(columns: Columns, codes: NDArray[np.int64], rows: Rows) -> Edges:
    return Edges(
        columns.ids[rows],
        columns.people[rows],
        columns.posts[rows],
        columns.at_ms[rows],
        codes[columns.kinds[rows]].astype(np.uint64),
        columns.person_ids,
        columns.post_ids,
    )


def _parse(window: Window, places: Sequence[int], counts: _Counts) -> list[tuple[int, AnyEvent]]:
    """Validate lines one by one."""
    events: list[tuple[int, AnyEvent]] = []
    for first in range(0, len(places), BATCH_LINES):
        lines = [(place, window.line(place).content) for place in places[first : first + BATCH_LINES]]
        counts.reasons.update({place: TOO_LONG for place, content in lines if content is None})
        taken = [(place, content) for place, content in lines if content is not None]
        parsed = parse_body(b"\n".join([content for _, content in taken]), NDJSON, {}, max_batch=len(taken))
        counts.reasons.update({taken[one.index][0]: one.reason for one in parsed.rejected})
        events += [(taken[index][0], event) for index, event in parsed.events]
    return events


def _event_json(line: Line) -> bytes:
    if line.content is None:
        return b"null"
    try:
        orjson.loads(line.content)
    except orjson.JSONDecodeError:
        return orjson.dumps(line.content.decode("utf-8", "replace"))
    return line.content
