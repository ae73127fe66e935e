"""What the demo looks like: 80 columns, with and without colour."""

import io
import json

import pytest
from rich.console import Console

from service.demo import ending, rows
from service.demo.reasons import Reason
from service.demo.screen import Screen
from service.demo.story import Beat, Skipped
from service.events.model import parse_event
from tests.demo_samples import feed, item

BEFORE = feed(item("mina.plot17-beans-1", 9.5), item("joel.plot3-kale-2", 4.0, 30), item("ivo.plot9-slugs-1", 3.0))
AFTER = feed(item("joel.plot3-kale-2", 8.0, 30), item("ravi.plot5-leeks-4", 5.0, 0), item("ivo.plot9-slugs-1", 3.0))


def beat() -> Beat:
    """A beat in which one post leaves, one climbs and one is new."""
    return Beat("test", "Something happens", "Mina goes.", "Because.", [], BEFORE, AFTER, frozenset())


def shown(act: str, *arguments: object, colour: bool = False, width: int = 80) -> str:
    """What an act of the screen prints."""
    out = io.StringIO()
    console = Console(file=out, width=width, force_terminal=colour, color_system="truecolor" if colour else None)
    getattr(Screen(console, lambda: None), act)(*arguments)
    return out.getvalue()


def test_first_feed() -> None:
    """Each post has its place, author, name, form, age and score, and under it the reasons."""
    why = [[Reason("a friend posted it", 9.1), Reason("everybody else", 0.4)]]
    text = shown("first_feed", "zola.plot2", "You have 1 friend", BEFORE, rows.rows(BEFORE, 1), why)
    assert text.splitlines()[:6] == [
        "You are zola.plot2",
        "  You have 1 friend. Your feed, and why each post is there:",
        "",
        "   #      author         post         form      age   score",
        "   1      mina.plot17    beans-1      photo     1 h    9.50",
        "     a friend posted it +9.1, everybody else +0.4",
    ]
    assert "  Ranked in 2.5 ms on the server: the exact first 3." in text


def test_beat_marks_every_move() -> None:
    """Who climbed, fell, is new or left is marked, with the score before where it differs."""
    text = shown("beat", 1, beat(), rows.rows(AFTER, 3, BEFORE), rows.departures(BEFORE, AFTER, 3))
    assert text.splitlines()[4:10] == [
        "   #      author         post         form      age   score   before",
        "   1 ▲1   joel.plot3     kale-2       photo    30 h    8.00     4.00",
        "   2 new  ravi.plot5     leeks-4      photo     now    5.00",
        "   3      ivo.plot9      slugs-1      photo     1 h    3.00",
        "   1 gone mina.plot17-beans-1",
        "",
    ]


def test_post_that_only_fell_out_of_sight() -> None:
    """A post that is still in the feed, below the ones shown, is told with its new place."""
    assert rows.departures(BEFORE, AFTER, 2) == [rows.Departure("mina.plot17-beans-1", 1, None)]
    lower = feed(AFTER.items[1], AFTER.items[0])
    assert rows.departures(AFTER, lower, 1) == [rows.Departure("joel.plot3-kale-2", 1, 2)]
    text = shown("beat", 1, beat(), rows.rows(lower, 1, AFTER), rows.departures(AFTER, lower, 1))
    assert "   1 ▲1   ravi.plot5     leeks-4" in text
    assert "   1 to 2 joel.plot3-kale-2\n" in text


def test_without_unicode() -> None:
    """Where the output holds no arrows, + and - stand for them."""
    out = io.TextIOWrapper(io.BytesIO(), encoding="ascii")
    Screen(Console(file=out, width=80), lambda: None).beat(1, beat(), rows.rows(AFTER, 3, BEFORE), [])
    out.seek(0)
    assert "   1 +1   joel.plot3" in out.read()


def test_colour_is_for_terminals_only() -> None:
    """With colour the same text is shown, and without it no escape codes."""
    arguments = (1, beat(), rows.rows(AFTER, 3, BEFORE), rows.departures(BEFORE, AFTER, 3))
    assert "\x1b[" not in shown("beat", *arguments)
    assert "\x1b[32m" in shown("beat", *arguments, colour=True)


@pytest.mark.parametrize("keep", [True, False])
def test_how_to_go_on_fits_80_columns(*, keep: bool) -> None:
    """The lines to copy are whole and fit 80 columns, whether the service stays or goes."""
    told = ending.paragraphs(
        "http://127.0.0.1:45678", "yusuf.plot317", "yusuf.plot317-pumpkins-12", 8, keep=keep, data=None
    )
    text = shown("going_on", told)
    assert max(map(len, text.splitlines())) <= 80
    assert ("http://127.0.0.1:45678/v1/events" in text) == keep
    assert ("waxwane demo --keep" in text) != keep
    for command in ("curl ", "waxwane import", "--help", "/openapi.json"):
        assert command in text


@pytest.mark.parametrize("keep", [True, False])
def test_events_to_copy_are_valid(*, keep: bool) -> None:
    """What the lines to copy would send, once the shell has put in the time, are valid events."""
    told = ending.paragraphs("http://127.0.0.1:45678", "mina.plot17", "joel.plot3-kale-2", 8, keep=keep, data=None)
    text = "\n".join(line for _, lines in told for line in lines)
    sent = text.replace("'$(date -u +%FT%TZ)'", "2026-05-04T09:00:00Z").split("-d '")[1].split("'")[0]
    events = json.loads(sent)
    parsed = [parse_event(event) for event in (events if isinstance(events, list) else [events])]
    assert [event.type for event in parsed] == (["interaction"] if keep else ["tie", "post"])


def test_skipped_beat_says_why() -> None:
    """A beat without a cast says what is missing."""
    assert "There is no friend." in shown("skipped", 1, Skipped("renewal", "no friend"))


def test_long_text_wraps_at_80_columns() -> None:
    """Sentences wrap at 80 columns also on a wider terminal, and nothing ends in spaces."""
    text = shown("first_feed", "zola.plot2", "You have 1 friend", BEFORE, [], [], width=200)
    assert 60 < max(map(len, text.splitlines())) <= 80
    assert all(line == line.rstrip() for line in text.splitlines())
