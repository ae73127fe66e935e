"""Everything that the demo shows, for machines."""

from collections.abc import Sequence
from typing import Any

from service.demo.answers import Feed
from service.demo.reasons import Reason
from service.demo.rows import Departure, Row
from service.demo.story import Beat, Skipped

Document = dict[str, Any]


def of_feed(feed: Feed, shown: Sequence[Row]) -> Document:
    """Write a feed as it is shown."""
    return {
        "as_of_ms": feed.as_of_ms,
        "complete": feed.complete,
        "stages_ms": feed.stages_ms,
        "items": [_of_row(row) for row in shown],
    }


def of_first_feed(feed: Feed, shown: Sequence[Row], why: Sequence[Sequence[Reason]]) -> Document:
    """Write the first feed with its reasons."""
    document = of_feed(feed, shown)
    for item, found in zip(document["items"], why, strict=True):
        item["reasons"] = [{"text": one.text, "points": one.points} for one in found]
    return document


def of_beat(beat: Beat, shown: Sequence[Row], left: Sequence[Departure]) -> Document:
    """Write a beat: what was sent, what followed and why."""
    return {
        "name": beat.name,
        "title": beat.title,
        "happens": beat.happens,
        "why": beat.why,
        "about": sorted(beat.about),
        "events": beat.events,
        "feed": of_feed(beat.after, shown),
        "left": [{"post": one.post, "was_rank": one.was_rank, "rank": one.rank} for one in left],
    }


def of_skipped(skipped: Skipped) -> Document:
    """Write a beat that has no cast."""
    return {"name": skipped.name, "skipped": skipped.reason}


def _of_row(row: Row) -> Document:
    return {
        "rank": row.rank,
        "was_rank": row.was_rank,
        "post": row.item.post,
        "author": row.item.author,
        "form": row.item.form,
        "age_ms": row.age_ms,
        "score": row.item.score,
        "was_score": row.was_score,
    }
