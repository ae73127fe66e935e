"""Shows the demo in a terminal, or as plain text where the output is no terminal."""

import textwrap
from collections.abc import Callable, Mapping, Sequence

from rich.console import Console
from rich.progress import BarColumn, Progress, ProgressColumn, Task, TextColumn
from rich.text import Text

from service.demo.answers import Feed
from service.demo.reasons import Reason, age_in_words, sentence
from service.demo.rows import Departure, Row
from service.demo.story import Beat, Skipped

WIDTH = 80
_MARGIN, _INDENT = "  ", "     "
_STRONG, _FAINT, _UP, _DOWN, _ABOUT = "bold", "dim", "green", "red", "yellow"
# Less than this is rounded away.
_SEEN_DIFFERENCE = 0.005
_RULE = (
    "A score adds up over every post and reaction: how much you care about who did it x what it is worth x how "
    "fresh it is."
)


class Screen:
    """Prints.

    Args:
        console: where to.
        pause: called between steps, for the eye to follow.

    """

    def __init__(self, console: Console, pause: Callable[[], None]) -> None:
        self._console = console
        self._pause = pause
        self._up, self._down = ("▲", "▼") if console.encoding.startswith("utf") else ("+", "-")

    def opening(self, people: int, seed: int) -> None:
        """Say what is about to be shown."""
        self._heading(f"waxwane demo: {people} allotment gardeners and their week")
        self._text(f"All invented, with seed {seed}.", _FAINT)

    def started(self, url: str) -> None:
        """Say where the service answers."""
        self._text(f"A service of its own answers at {url}; every event goes in over HTTP.", _FAINT)
        self._console.print()

    def progress(self) -> Progress:
        """Make the bar that shows how many events are in, and how fast they went."""
        bar = BarColumn(bar_width=30, complete_style="green", finished_style="green")
        columns = (TextColumn("  loading"), bar, TextColumn("{task.completed:,.0f} events,"), _Rate())
        return Progress(*columns, console=self._console)

    def loaded(self, counts: Mapping[str, int]) -> None:
        """Say what was loaded."""
        self._text(", ".join(f"{count:,} {name}" for name, count in counts.items()) + " are in.")
        self._console.print()

    def first_feed(self, reader: str, ties: str, feed: Feed, shown: Sequence[Row], why: Sequence[list[Reason]]) -> None:
        """Show a reader's feed, and under each post the strongest reasons for its score."""
        self._pause()
        self._heading(f"You are {reader}")
        self._text(f"{ties}. Your feed, and why each post is there:")
        self._console.print()
        self._columns()
        for row, found in zip(shown, why, strict=True):
            self._row(row, about=False)
            self._line(_INDENT + sentence(found, self._width() - len(_INDENT)), _FAINT)
        self._console.print()
        self._text(timing(feed), _FAINT)
        self._text(_RULE, _FAINT)

    def since_start(self, first_feed_s: float) -> None:
        """Say how long it took to come to the first feed."""
        self._text(f"From the command to this feed: {first_feed_s:.1f} s.", _FAINT)

    def beat(self, number: int, beat: Beat, shown: Sequence[Row], left: Sequence[Departure]) -> None:
        """Show what happened, and the feed after it."""
        self._pause()
        self._console.print()
        self._heading(f"{number}. {beat.title}")
        self._text(beat.happens)
        self._pause()
        self._console.print()
        self._columns(was=True)
        for row in shown:
            self._row(row, about=row.item.post in beat.about)
        for one in left:
            self._departure(one)
        self._console.print()
        self._text(beat.why, "cyan")
        self._text(f"Ranked anew in {beat.after.stages_ms.get('total', 0.0):.1f} ms.", _FAINT)

    def skipped(self, number: int, skipped: Skipped) -> None:
        """Say that a beat has no cast."""
        self._console.print()
        self._heading(f"{number}. {skipped.name}: not for this reader")
        self._text(f"There is {skipped.reason}.", _FAINT)

    def going_on(self, paragraphs: Sequence[tuple[str, Sequence[str]]]) -> None:
        """Say how to go on: paragraphs, each with lines to copy."""
        self._pause()
        self._console.print()
        self._heading("How to go on")
        for text, lines in paragraphs:
            self._text(text)
            for line in lines:
                self._line(f"    {line}", _STRONG)
            self._console.print()

    def _heading(self, text: str) -> None:
        self._line(text, "bold green")

    def _text(self, text: str, style: str = "") -> None:
        for line in textwrap.wrap(text, self._width() - 2 * len(_MARGIN), break_on_hyphens=False):
            self._line(_MARGIN + line, style)

    def _line(self, text: str, style: str = "") -> None:
        # Not wrapped: it fits already, or has to survive being copied.
        self._console.print(Text(text, style), soft_wrap=True)

    def _width(self) -> int:
        return min(self._console.width, WIDTH)

    def _columns(self, *, was: bool = False) -> None:
        names = f"{'#':>4} {'':5}{'author':<14} {'post':<12} {'form':<6} {'age':>6} {'score':>7}"
        self._line(names + (f" {'before':>8}" if was else ""), "underline dim")

    def _row(self, row: Row, *, about: bool) -> None:
        item = row.item
        line = Text(f"{row.rank:>4} ").append_text(self._move(row))
        line.append(f"{item.author:<14} {row.title:<12} ", _STRONG)
        line.append(f"{item.form:<6} {age_in_words(row.age_ms):>6} ")
        line.append(f"{item.score:>7.2f}", _STRONG)
        if row.was_score is not None and abs(row.was_score - item.score) >= _SEEN_DIFFERENCE:
            line.append(f" {row.was_score:>8.2f}", _FAINT)
        if about:
            line.stylize(_ABOUT)
        self._console.print(line, soft_wrap=True)

    def _move(self, row: Row) -> Text:
        if row.was_rank is None:
            return Text(f"{'new':<5}", _UP)
        if not row.climb:
            return Text(" " * 5)
        text = f"{self._up if row.climb > 0 else self._down}{abs(row.climb)}"
        return Text(f"{text:<5}", _UP if row.climb > 0 else _DOWN)

    def _departure(self, one: Departure) -> None:
        now = "gone" if one.rank is None else f"to {one.rank}"
        self._line(f"{one.was_rank:>4} {now:<5}{one.post}", _DOWN)


class _Rate(ProgressColumn):
    """Events a second, over the whole time."""

    def render(self, task: Task) -> Text:
        return Text(f"{task.completed / task.elapsed:,.0f} a second" if task.elapsed else "")


def timing(feed: Feed) -> str:
    """Say how long the ranking took and whether it is certain.

    >>> timing(Feed(0, True, [], {"rows": 0.5, "total": 3.14}))
    'Ranked in 3.1 ms on the server: the exact first 0.'

    """
    certain = f"the exact first {len(feed.items)}" if feed.complete else "the best found within the budget"
    return f"Ranked in {feed.stages_ms.get('total', 0.0):.1f} ms on the server: {certain}."
