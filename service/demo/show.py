"""The whole show: start a service, load a community, show a feed, tell the story, say how to go on."""

from collections import Counter
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from service.demo import child, chronicle, ending, rows, summary
from service.demo.answers import Feed
from service.demo.chronicle import Chronicle
from service.demo.client import CallError, Client
from service.demo.reasons import Reason, reasons
from service.demo.scene import Scene, choose_reader
from service.demo.screen import Screen
from service.demo.story import Skipped, tell

_NAMES = {"tie": "ties", "post": "posts", "interaction": "reactions"}
_OTHERS = "other events"


@dataclass(frozen=True, slots=True)
class Wishes:
    """What the caller asked for.

    Args:
        people: size of the community.
        seed: of all chance.
        reader: whose feed; None chooses somebody.
        k: how many posts are shown.
        data: a new or empty folder for the store; None for a temporary one.
        keep: whether the service is to stay up.

    """

    people: int
    seed: int
    reader: str | None
    k: int
    data: Path | None
    keep: bool


@dataclass(frozen=True, slots=True)
class Clocks:
    """What tells the time: `now_ms` the wall clock, Unix milliseconds; `since_start_s` the time since the start."""

    now_ms: Callable[[], int]
    since_start_s: Callable[[], float]


def play(wishes: Wishes, screen: Screen, clocks: Clocks, finish: Callable[[dict[str, Any]], None]) -> None:
    """Show everything.

    Args:
        wishes: what was asked for.
        screen: where it is shown.
        clocks: what tells the time.
        finish: called with everything that was shown, before the service ends; with `keep` it then stays up.

    Raises:
        WaxwaneError: a wish can't be met, or the service failed.

    """
    if wishes.data is not None:
        child.check_data(wishes.data)
    week = chronicle.write(wishes.people, wishes.seed, clocks.now_ms())
    reader = choose_reader(week, wishes.reader)
    screen.opening(wishes.people, wishes.seed)
    with child.running(wishes.data) as running:
        screen.started(running.client.url)
        _load(running.client, week, screen)
        scene = Scene(running.client, week, reader, wishes.k, clocks.now_ms)
        document, feed = _first_feed(scene, screen, clocks)
        document |= {"reader": reader, "people": wishes.people, "seed": wishes.seed, "url": running.client.url}
        document["events"] = len(week.events)
        document["beats"], last = _story(scene, feed, screen)
        screen.going_on(_ending(running.client.url, scene, last, wishes))
        finish(document)
        if wishes.keep:
            running.wait()


def _load(client: Client, week: Chronicle, screen: Screen) -> None:
    with screen.progress() as bar:
        task = bar.add_task("loading", total=len(week.events))
        for answer in client.load(week.events):
            if answer["rejected"]:
                raise CallError("POST /v1/events", 200, answer["rejected"][0]["reason"])
            bar.advance(task, answer["applied"] + answer["duplicate"] + answer["expired"])
    kinds = Counter(_NAMES.get(event["type"], _OTHERS) for event in week.events)
    screen.loaded({name: kinds[name] for name in (*_NAMES.values(), _OTHERS)})


def _first_feed(scene: Scene, screen: Screen, clocks: Clocks) -> tuple[dict[str, Any], Feed]:
    feed = scene.feed()
    shown = rows.rows(feed, scene.k)
    why = [_reasons(scene, row.item.post) for row in shown]
    screen.first_feed(scene.reader, _ties(scene), feed, shown, why)
    first_feed_s = round(clocks.since_start_s(), 3)
    screen.since_start(first_feed_s)
    return {"first_feed": summary.of_first_feed(feed, shown, why), "first_feed_s": first_feed_s}, feed


def _reasons(scene: Scene, post: str) -> list[Reason]:
    explanation = scene.explain(post)
    return reasons(explanation, scene.relations) if explanation else []


def _ties(scene: Scene) -> str:
    counts = Counter(scene.relations.values())
    told = [f"You have {counts['friend']} friends", f"follow {counts['follow']} others"]
    if counts["mute"] + counts["block"]:
        told.append(f"and mute or block {counts['mute'] + counts['block']}")
    return ", ".join(told)


def _story(scene: Scene, feed: Feed, screen: Screen) -> tuple[list[dict[str, Any]], Feed]:
    beats = []
    for number, outcome in enumerate(tell(scene, feed), 1):
        if isinstance(outcome, Skipped):
            screen.skipped(number, outcome)
            beats.append(summary.of_skipped(outcome))
            continue
        shown = rows.rows(outcome.after, scene.k, outcome.before)
        left = rows.departures(outcome.before, outcome.after, scene.k)
        screen.beat(number, outcome, shown, left)
        beats.append(summary.of_beat(outcome, shown, left))
        feed = outcome.after
    return beats, feed


def _ending(url: str, scene: Scene, feed: Feed, wishes: Wishes) -> list[ending.Paragraph]:
    post = feed.items[0].post if feed.items else next(iter(scene.chronicle.posts))
    return ending.paragraphs(url, scene.reader, post, wishes.k, keep=wishes.keep, data=wishes.data)
