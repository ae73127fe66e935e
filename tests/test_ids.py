"""Ids with one 64-bit hash, forged: the second is refused with a reason, and nothing of the first changes."""

from collections.abc import AsyncIterator, Mapping
from typing import Any

import pytest

from service.engine import Engine
from service.errors import NotFound
from service.feed.types import ExplainRequest
from service.settings import BUILT_IN_POLICY
from service.store.ids import NOBODY, IdHasher, bucket
from tests.engines import ranked, running, send

NOW_MS = 1_777_885_200_000
REASON = "an id of this event can't be stored: another id has the same 64-bit hash"
TWINS = {"twin": "mina", "other bed": "bed"}
"""Each of these gets the hash of its namesake: a person and a post."""

WORLD: list[dict[str, Any]] = [
    {"id": "f", "type": "tie", "actor": "joel", "target": "mina", "relation": "friend"},
    {"id": "g", "type": "tie", "actor": "mina", "target": "joel", "relation": "friend"},
    {"id": "p", "type": "post", "actor": "mina", "post": "bed", "form": "note"},
    {"id": "q", "type": "post", "actor": "joel", "post": "plot", "form": "photo", "audience": "friends"},
    {"id": "l", "type": "interaction", "actor": "ada", "post": "bed", "kind": "share"},
    {"id": "m", "type": "interaction", "actor": "joel", "post": "bed", "kind": "like"},
]
BY_THE_TWIN: list[dict[str, Any]] = [
    {"type": "post", "post": "shed", "form": "note"},
    {"type": "interaction", "post": "bed", "kind": "share"},
    {"type": "tie", "target": "joel", "relation": "block"},
    {"type": "retract", "event": "l"},
    {"type": "withdraw", "post": "bed"},
    {"type": "seen", "posts": ["plot"]},
    {"type": "erase"},
]
ON_THE_TWIN: list[dict[str, Any]] = [
    {"type": "post", "actor": "mina", "post": "other bed", "form": "photo"},
    {"type": "post", "actor": "ada", "post": "other bed", "form": "photo"},
    {"type": "interaction", "actor": "mina", "post": "other bed", "kind": "share"},
    {"type": "interaction", "actor": "ada", "post": "other bed", "kind": "share"},
    {"type": "withdraw", "actor": "joel", "post": "other bed"},
    {"type": "tie", "actor": "joel", "target": "twin", "relation": "block"},
]


def event(fields: Mapping[str, Any], at_ms: int = NOW_MS) -> dict[str, Any]:
    return {"at": at_ms, **fields}


def forge(engine: Engine) -> None:
    """Let twins have the hashes of their namesakes."""
    hasher = engine.store.hasher
    honest = hasher.hash
    hasher.hash = lambda text: honest(TWINS.get(text, text))  # type: ignore[assignment]  # the forgery


@pytest.fixture
async def engine(redis_db: str) -> AsyncIterator[Engine]:
    async with running(redis_db, BUILT_IN_POLICY.read_text()) as engine:
        forge(engine)
        yield engine


async def feeds(engine: Engine) -> dict[str, Any]:
    """Everything that the first ones' readers see, and what is stored about them."""
    people = ("joel", "mina", "ada")
    return {
        **{reader: await ranked(engine, reader, NOW_MS) for reader in people},
        **{f"{person}'s": await engine.export(person, NOW_MS) for person in people},
        "why": (await engine.explain(ExplainRequest("joel", "bed"), NOW_MS)).ties,
    }


@pytest.mark.parametrize("fields", BY_THE_TWIN, ids=lambda fields: fields["type"])
async def test_a_person_with_another_ones_hash_is_refused(engine: Engine, fields: dict[str, Any]) -> None:
    """Whatever the second person does is rejected with the reason, and the first one's feeds stay as they were."""
    assert {verdict.outcome for verdict in await send(engine, map(event, WORLD), NOW_MS)} == {"applied"}
    before = await feeds(engine)
    assert [post for post, _ in before["joel"]] == ["bed"]
    assert [post for post, _ in before["mina"]] == ["plot"]
    for _ in range(2):
        [verdict] = await send(engine, [event({"id": "x", "actor": "twin"} | fields, NOW_MS + 1)], NOW_MS)
        assert (verdict.outcome, verdict.reason) == ("rejected", REASON)
    assert await feeds(engine) == before


@pytest.mark.parametrize("fields", ON_THE_TWIN, ids=lambda fields: f"{fields['type']} by {fields['actor']}")
async def test_an_event_about_a_twin_is_refused(engine: Engine, fields: dict[str, Any]) -> None:
    """A post, an interaction, a withdrawal or a tie that names a colliding id is rejected each time it is sent."""
    await send(engine, map(event, WORLD), NOW_MS)
    before = await feeds(engine)
    for _ in range(2):
        [verdict] = await send(engine, [event({"id": "x"} | fields, NOW_MS + 1)], NOW_MS)
        assert (verdict.outcome, verdict.reason) == ("rejected", REASON)
    assert shown(await feeds(engine)) == shown(before)


def shown(found: dict[str, Any]) -> dict[str, Any]:
    """Leave out what a refused interaction leaves in its actor's row: an edge that is marked as taken back."""
    for about in (about for about in found.values() if isinstance(about, dict)):
        about["edges"] = [edge for edge in about["edges"] if not edge["retracted"]]
    return found


async def test_the_others_of_a_batch_are_applied(engine: Engine) -> None:
    """In one batch the colliding interaction is rejected and its neighbours by the same person count."""
    await send(engine, map(event, WORLD), NOW_MS)
    [(_, before)] = await ranked(engine, "joel", NOW_MS)
    share = {"type": "interaction", "actor": "ada", "kind": "share"}
    batch = [{"id": f"s{place}", "post": post} | share for place, post in enumerate(["bed", "other bed", "bed"])]
    verdicts = await send(engine, map(event, batch), NOW_MS)
    assert [verdict.outcome for verdict in verdicts] == ["applied", "rejected", "applied"]
    [(_, after)] = await ranked(engine, "joel", NOW_MS)
    assert after == pytest.approx((before or 0.0) + 2 * 0.02 * 2.0)
    again = await send(engine, map(event, batch), NOW_MS)
    assert [verdict.outcome for verdict in again] == ["duplicate", "rejected", "duplicate"]
    assert await ranked(engine, "joel", NOW_MS) == [("bed", after)]


async def test_whoever_comes_first_stays(engine: Engine) -> None:
    """Where the interaction with the one post came first, the other post is the one that is refused."""
    early = {"id": "s", "type": "interaction", "actor": "ada", "post": "other bed", "kind": "share"}
    await send(engine, [event(early)], NOW_MS)
    verdicts = await send(engine, map(event, WORLD), NOW_MS)
    assert [verdict.outcome for verdict in verdicts] == [
        *("applied", "applied", "rejected"),
        *("applied", "rejected", "rejected"),
    ]
    assert await ranked(engine, "joel", NOW_MS) == []


async def test_a_post_is_not_explained_by_its_twins_name(engine: Engine) -> None:
    """Asked by an id that was refused, the service knows no such post."""
    await send(engine, map(event, WORLD), NOW_MS)
    with pytest.raises(NotFound):
        await engine.explain(ExplainRequest("joel", "other bed"), NOW_MS)


async def test_a_reader_with_another_ones_hash_sees_nothing_of_it(engine: Engine) -> None:
    """A reader whose id collides with that of a known person gets the feed and the export of somebody unknown."""
    await send(engine, map(event, WORLD), NOW_MS)
    assert await ranked(engine, "twin", NOW_MS) == []
    assert await engine.export("twin", NOW_MS) == (await engine.export("nobody", NOW_MS)) | {"person": "twin"}


async def test_an_erasure_gives_the_hash_free(engine: Engine) -> None:
    """Once all that the first one did is erased, nothing stands in the way of the second."""
    await send(engine, map(event, WORLD), NOW_MS)
    assert [v.outcome for v in await send(engine, [event({"id": "z", "type": "erase", "actor": "mina"})], NOW_MS)] == [
        "applied"
    ]
    like = {"id": "x", "type": "interaction", "actor": "twin", "post": "plot", "kind": "like"}
    [verdict] = await send(engine, [event(like, NOW_MS + 1)], NOW_MS)
    assert verdict.outcome == "applied"


def test_a_hash_is_keyed() -> None:
    """The same id hashes differently under another store's key, evenly over the buckets, and never to zeros."""
    one, other = IdHasher(b"one"), IdHasher(b"other")
    hashes = [one.hash(f"plot {number}") for number in range(12_800)]
    assert len(set(hashes)) == 12_800
    assert NOBODY not in hashes
    assert one.hash("mina") != other.hash("mina")
    counts = [sum(bucket(each) == number for each in hashes[:12_800]) for number in range(128)]
    assert sum(counts) == 12_800
    assert 60 <= min(counts) <= 100 <= max(counts) <= 145
