"""Feeds and explanations as tables for people, within 80 columns."""

from collections.abc import Sequence
from typing import Final, Literal

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from service.feed.types import Explanation, FeedAnswer
from service.times import format_ms

Column = tuple[str, Literal["left", "right"]]

_TIMES: Final = "×"  # noqa: RUF001  the sign is meant

_FEED: Final[tuple[Column, ...]] = (
    ("#", "right"),
    ("post", "left"),
    ("author", "left"),
    ("form", "left"),
    ("posted", "right"),
)
_SCORE: Final[Column] = ("score", "right")
_PARTS: Final[tuple[Column, ...]] = (
    ("actor", "left"),
    ("kind", "left"),
    ("age", "right"),
    ("affinity", "right"),
    (f"{_TIMES} weight", "right"),
    (f"{_TIMES} freshness", "right"),
    ("= product", "right"),
)
_WORDS: Final = frozenset({"post", "author", "actor", "kind", "form"})
_UNITS_MS: Final = ((86_400_000, "d"), (3_600_000, "h"), (60_000, "min"))


def feed_table(answer: FeedAnswer) -> RenderableType:
    """Draw a page of a feed, with lines below that say what it is."""
    if not answer.items:
        return Text(f"No posts for {answer.reader}: nobody the reader follows has added to a post that may be shown.")
    scored = any(item.score is not None for item in answer.items)
    rows = [
        [str(rank), item.post, item.author, item.form, age(answer.as_of_ms - item.posted_ms)]
        + ([number(item.score)] if item.score is not None else [])
        for rank, item in enumerate(answer.items, start=1)
    ]
    table = _table((*_FEED, _SCORE) if scored else _FEED, rows)
    return Group(table, Text(), Text(_what_it_is(answer, scored=scored), style="dim"))


def _what_it_is(answer: FeedAnswer, *, scored: bool) -> str:
    order = f"ranked by policy {answer.policy}" if scored else "newest first"
    certain = f"exactly the first {len(answer.items)}" if answer.complete else "the best found within the time budget"
    more = "; there are more" if answer.next else ""
    return f"{order}, as of {format_ms(answer.as_of_ms)}\n{certain}{more}"


def explanation_table(explanation: Explanation) -> RenderableType:
    """Draw the parts of a score, greatest product first, and how they make the score."""
    rows = [
        [part.actor, part.kind, age(explanation.as_of_ms - part.at_ms)]
        + [number(value) for value in (part.affinity, part.weight, part.freshness, part.product)]
        for part in sorted(explanation.ties, key=lambda part: -part.product)
    ]
    heading = f"{explanation.post} for {explanation.reader}, policy {explanation.policy}, "
    heading += f"as of {format_ms(explanation.as_of_ms)}"
    parts: list[RenderableType] = [Text(heading, style="dim"), Text()]
    if rows:
        parts += [_table(_PARTS, rows), Text()]
    return Group(*parts, _sums(explanation))


def _sums(explanation: Explanation) -> Table:
    """Draw the lines from the products to the score."""
    crowd = explanation.crowd
    known = sum(part.product for part in explanation.ties)
    crowd_words = f"everybody else, {number(crowd.affinity)} {_TIMES} {number(crowd.sum)}"
    rows = [["the reader's circle, sum of the products above", number(known)], [crowd_words, number(crowd.product)]]
    rows += [[f"times the factor {factor.name}", f"{_TIMES} {number(factor.value)}"] for factor in explanation.factors]
    rows.append(["score", number(explanation.score)])
    table = Table.grid(padding=(0, 2))
    table.add_column(overflow="fold")
    table.add_column(justify="right", no_wrap=True)
    for row in rows:
        table.add_row(*map(Text, row), style="bold" if row is rows[-1] else None)
    return table


def _table(columns: Sequence[Column], rows: Sequence[Sequence[str]]) -> Table:
    table = Table(box=None, pad_edge=False)
    for name, side in columns:
        # Ids may be long and fold; figures stay whole.
        table.add_column(name, justify=side, overflow="fold", no_wrap=name not in _WORDS)
    for row in rows:
        table.add_row(*map(Text, row))
    return table


def age(span_ms: int) -> str:
    """Write how long ago something was, in its greatest unit.

    >>> age(0), age(200_000), age(3 * 3_600_000), age(50 * 3_600_000), age(-5)
    ('just now', '3 min ago', '3 h ago', '2 d ago', 'just now')

    """
    for unit_ms, name in _UNITS_MS:
        if span_ms >= unit_ms:
            return f"{span_ms // unit_ms} {name} ago"
    return "just now"


def number(value: float) -> str:
    """Write a figure to five digits.

    >>> number(5.25), number(0.0201234567), number(1234567.0), number(1.5e-12)
    ('5.25', '0.020123', '1.2346e+06', '1.5e-12')

    """
    return f"{value:.5g}"
