"""Examples for the OpenAPI document, from the world of a few gardeners."""

from typing import Any, Final

EVENTS: Final[dict[str, dict[str, Any]]] = {
    "post": {
        "id": "e1",
        "type": "post",
        "at": "2026-05-04T08:15:00Z",
        "actor": "mina",
        "post": "p1",
        "form": "photo",
        "audience": "everyone",
        "topics": ["beans"],
    },
    "interaction": {
        "id": "e2",
        "type": "interaction",
        "at": "2026-05-04T08:20:00+02:00",
        "actor": "joel",
        "post": "p1",
        "kind": "comment.photo",
    },
    "tie": {
        "id": "e3",
        "type": "tie",
        "at": "2026-05-04T08:21:00Z",
        "actor": "joel",
        "target": "mina",
        "relation": "follow",
    },
    "retract": {"id": "e4", "type": "retract", "at": "2026-05-04T08:25:00Z", "actor": "joel", "event": "e2"},
    "withdraw": {"id": "e5", "type": "withdraw", "at": "2026-05-04T08:30:00Z", "actor": "mina", "post": "p1"},
    "seen": {"id": "e6", "type": "seen", "at": "2026-05-04T08:31:00Z", "actor": "joel", "posts": ["p1"]},
    "erase": {"id": "e7", "type": "erase", "at": 1777883520000, "actor": "joel"},
}

CLOUDEVENT: Final[dict[str, Any]] = {
    "specversion": "1.0",
    "id": "e2",
    "source": "/beds/4",
    "type": "org.allotments.interaction",
    "time": "2026-05-04T08:20:00Z",
    "data": {"type": "interaction", "actor": "joel", "post": "p1", "kind": "like"},
}

EVENTS_ANSWER: Final[dict[str, Any]] = {
    "applied": 6,
    "duplicate": 0,
    "expired": 0,
    "rejected": [{"index": 3, "id": "e4", "reason": "event is missing; allowed: a value, as it is required"}],
}

FEED: Final[dict[str, Any]] = {
    "reader": "joel",
    "as_of": "2026-05-04T09:00:00.000Z",
    "policy": "allotments",
    "complete": True,
    "items": [
        {"post": "p1", "author": "mina", "form": "photo", "posted_at": "2026-05-04T08:15:00.000Z", "score": 5.25}
    ],
    "next": "c2Vjb25kIHBhZ2U",
}

EXPLANATION: Final[dict[str, Any]] = {
    "reader": "joel",
    "post": "p1",
    "as_of": "2026-05-04T20:15:00.000Z",
    "policy": "allotments",
    "score": 1.742,
    "factors": [{"name": "seen", "value": 1.0}],
    "parts": [
        {
            "source": "tie",
            "actor": "mina",
            "kind": "post.photo",
            "at": "2026-05-04T08:15:00.000Z",
            "affinity": 1.0,
            "weight": 3.0,
            "freshness": 0.5,
            "product": 1.5,
        },
        {"source": "crowd", "affinity": 0.02, "sum": 12.1, "product": 0.242},
    ],
}

EXPOSURES: Final = (
    '{"id":"1777885200000-0","served_at":"2026-05-04T09:00:00.000Z","reader":"joel","session":"8f1d2a9b3c4e5f60",'
    '"as_of":"2026-05-04T09:00:00.000Z","policy":"allotments","temperature":0.5,"complete":true,"slots":[{"place":1,'
    '"post":"p1","score":5.25,"source":"tie","chance":0.42,"chance_at_least":0.4}]}\n'
)

POLICY_TOML: Final = """\
name = "allotments"

[weights]
"post.photo" = 3.0
comment = 1.0

[freshness]
curve = "half_life"
half_life = "12h"

[affinity]
stranger = 0.02
follow = 1.0
friend = 2.0
ceiling = 10.0
half_life = "30d"
"""

POLICY: Final[dict[str, Any]] = {
    "name": "allotments",
    "default": True,
    "exact": True,
    "error": 0.0,
    "settings": {"weights": {"post.photo": 3.0, "comment": 1.0}},
    "toml": POLICY_TOML,
}

PROBLEM: Final[dict[str, Any]] = {
    "type": "about:blank",
    "title": "A value is not allowed",
    "status": 422,
    "detail": "k 201 is not allowed; allowed: less than or equal to 200",
    "errors": [{"field": "k", "value": "201", "allowed": "less than or equal to 200"}],
}
