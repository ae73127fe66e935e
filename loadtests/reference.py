"""The reference world: one reader with 300 ties who make 60 edges each in the last day.

300 ties is common practice, no published source. 18,000 edges fall on some 16,700 candidates: most posts have one edge
by a tie, a few have many, by Zipf's law. A crowd of strangers adds edges to the popular ones.
"""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np

READER = "reader"
HOUR_MS = 3_600_000


@dataclass(frozen=True, slots=True)
class Shape:
    """Size of a world.

    Args:
        ties: how many people the reader follows.
        edges: edges of each of them in the last day.
        own_posts: how many of these are posts of their own.
        strangers: people beyond the ties.
        crowd_edges: edges by strangers.
        seed: of the generator.

    """

    ties: int = 300
    edges: int = 60
    own_posts: int = 30
    strangers: int = 8_000
    crowd_edges: int = 20_000
    seed: int = 7


def events(shape: Shape, now_ms: int) -> Iterator[dict[str, Any]]:
    """Generate the world's events.

    Args:
        shape: its size.
        now_ms: the time that all edges come before, Unix milliseconds.

    """
    rng = np.random.default_rng(shape.seed)
    for tie in range(shape.ties):
        relation = "friend" if tie % 10 == 0 else "follow"
        yield _event(f"t{tie}", "tie", now_ms, READER, target=f"tie{tie}", relation=relation)
    yield from _own_posts(shape, now_ms, rng)
    yield from _interactions(shape, now_ms, rng)


def _own_posts(shape: Shape, now_ms: int, rng: np.random.Generator) -> Iterator[dict[str, Any]]:
    forms = ("note", "note", "photo", "video")
    for tie in range(shape.ties):
        for number in range(shape.own_posts):
            post, form = f"tie{tie}-{number}", forms[int(rng.integers(4))]
            yield _event(f"p-{post}", "post", _time(now_ms, rng), f"tie{tie}", post=post, form=form)
    for stranger in range(shape.strangers):
        for number in range(4):
            post = f"s{stranger}-{number}"
            yield _event(f"p-{post}", "post", _time(now_ms, rng), f"s{stranger}", post=post, form="photo")


def _interactions(shape: Shape, now_ms: int, rng: np.random.Generator) -> Iterator[dict[str, Any]]:
    kinds = ("like", "like", "like", "comment", "share")
    strange, own = shape.strangers * 4, shape.ties * shape.own_posts
    for tie in range(shape.ties):
        for number in range(shape.edges - shape.own_posts):
            place = _zipf_place(rng, strange) if rng.random() < 0.15 else int(rng.integers(strange))
            post = f"s{place % shape.strangers}-{place // shape.strangers}"
            kind = kinds[int(rng.integers(5))]
            yield _event(f"i-{tie}-{number}", "interaction", _time(now_ms, rng), f"tie{tie}", post=post, kind=kind)
    for number in range(shape.crowd_edges):
        place = _zipf_place(rng, strange + own)
        own_place = place - strange
        post = (
            f"s{place % shape.strangers}-{place // shape.strangers}"
            if place < strange
            else f"tie{own_place % shape.ties}-{own_place // shape.ties}"
        )
        actor, kind = f"s{int(rng.integers(shape.strangers))}", kinds[int(rng.integers(5))]
        yield _event(f"c-{number}", "interaction", _time(now_ms, rng), actor, post=post, kind=kind)


def _zipf_place(rng: np.random.Generator, count: int) -> int:
    """Draw a place from 0 to count - 1 with a chance of about one over the rank; ranks are spread over places."""
    rank = int(np.exp(rng.random() * np.log(count)))
    return (rank * 7_919) % count


def _time(now_ms: int, rng: np.random.Generator) -> int:
    return now_ms - 1 - int(rng.integers(24 * HOUR_MS))


def _event(identity: str, event_type: str, at_ms: int, actor: str, **more: Any) -> dict[str, Any]:  # noqa: ANN401
    return {"id": identity, "type": event_type, "at": at_ms, "actor": actor, **more}
