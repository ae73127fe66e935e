"""What feeds have shown is logged with the chances of the closed form, and leaves with its reader."""

import itertools
from collections.abc import AsyncIterator, Callable
from contextlib import AbstractAsyncContextManager, asynccontextmanager
from typing import Any

import numpy as np
import pytest

from scoring.bank import DEFAULT_BANK
from scoring.noise import slot_chances
from service.engine import Engine
from service.feed.types import FeedAnswer, FeedRequest
from service.settings import BUILT_IN_POLICY
from service.store.store import StoreOptions
from tests.engines import DAY_MS, flush, send

NOW_MS = 1_777_885_200_000
POLICY = BUILT_IN_POLICY.read_text()
DRAWN = POLICY.replace("temperature = 0.0", "temperature = 0.5")
KINDS = {"bed-1": "like", "bed-2": "comment", "bed-3": "share", "bed-4": "comment.photo", "bed-5": "like"}
Started = Callable[[str], AbstractAsyncContextManager[Engine]]


def test_the_chances_are_the_closed_form() -> None:
    """For every order of scores 1, 2, 3 and 4 each chance is the weight over what is left, and their products sum to 1.

    First places .1, .2, .3, .4; pairs 1/45, 1/30 and so on (Plackett, Applied Statistics 24, 1975; recomputed).
    """
    scores = np.array([1.0, 2.0, 3.0, 4.0])
    total = 0.0
    for order in itertools.permutations(range(4)):
        chances = slot_chances(scores[list(order)], scores, 1.0)
        left = 10.0
        for chance, item in zip(chances, order, strict=True):
            assert chance == pytest.approx(scores[item] / left, rel=1e-12)
            left -= scores[item]
        total += float(np.prod(chances))
    assert total == pytest.approx(1.0, rel=1e-12)
    assert slot_chances(scores[[0, 1]], scores, 1.0).prod() == pytest.approx(1 / 45)
    assert slot_chances(scores[[3]], scores, 0.5) == pytest.approx(16 / 30)


def test_the_chances_at_their_ends() -> None:
    """Without randomness or scores all are 1; what is not seen lowers each; huge and tiny scores stay finite."""
    scores = np.array([4.0, 1.0])
    assert slot_chances(scores, scores, 0.0).tolist() == [1.0, 1.0]
    assert slot_chances(np.zeros(2), np.zeros(3), 1.0).tolist() == [1.0, 1.0]
    assert slot_chances(scores, scores, 1.0, unseen=0.75).tolist() == [0.5, 0.25]
    wide = np.array([1e300, 1e-300, 0.0])
    assert slot_chances(wide, wide, 0.05).tolist() == [1.0, 1.0, 1.0]


@pytest.fixture
def started(redis_db: str) -> Started:
    """Start engines that log what they show, on an empty store."""

    @asynccontextmanager
    async def start(policy: str, *, logged: bool = True) -> AsyncIterator[Engine]:
        flush(redis_db)
        options = StoreOptions(redis_db, DEFAULT_BANK, 30 * DAY_MS)
        engine = Engine(options, [policy], log_exposures=logged)
        await engine.start(background=False)
        try:
            yield engine
        finally:
            await engine.close()

    return start


def event(identity: str, event_type: str, actor: str, **more: Any) -> dict[str, Any]:
    return {"id": identity, "type": event_type, "at": NOW_MS, "actor": actor, **more}


async def fill(engine: Engine) -> None:
    events = [event(f"t-{reader}", "tie", reader, target="mina", relation="follow") for reader in ("joel", "zoe")]
    events += [event(f"p-{name}", "post", "lin", post=name, form="note") for name in KINDS]
    events += [event(f"i-{name}", "interaction", "mina", post=name, kind=kind) for name, kind in KINDS.items()]
    await send(engine, events, NOW_MS)


async def read(engine: Engine, reader: str, **asked: Any) -> FeedAnswer:
    return await engine.feed(FeedRequest(reader, **({"k": 3, "budget_ms": 60_000.0} | asked)), NOW_MS)


async def test_each_page_is_logged_with_its_chances(started: Started) -> None:
    """Both pages of a session are entries; every chance is score^2 over that of what was left, on both pages."""
    async with started(DRAWN) as engine:
        await fill(engine)
        first = await read(engine, "joel")
        second = await read(engine, "joel", cursor=first.next)
        entries = await engine.exposures("0-0", 10)
        pages = [[(slot["post"], slot["score"]) for slot in entry["slots"]] for entry in entries]
        assert pages == [[(item.post, item.score) for item in page.items] for page in (first, second)]
        slots = [slot for entry in entries for slot in entry["slots"]]
        assert [slot["place"] for slot in slots] == [1, 2, 3, 4, 5]
        left = sum(slot["score"] ** 2 for slot in slots)
        for slot in slots:
            assert slot["chance"] == slot["chance_at_least"] == pytest.approx(slot["score"] ** 2 / left, rel=1e-9)
            left -= slot["score"] ** 2
        assert {(entry["reader"], entry["policy"], entry["temperature"]) for entry in entries} == {
            ("joel", "allotments", 0.5)
        }
        assert entries[0]["session"] == entries[1]["session"]
        assert [one["id"] for one in await engine.exposures(entries[0]["id"], 10)] == [entries[1]["id"]]
        for _ in range(2):
            await read(engine, "joel", k=1, cursor=first.next)
        assert len(await engine.exposures("0-0", 10)) == 3  # a page served again was shown already


async def test_without_randomness_every_chance_is_one(started: Started) -> None:
    """With temperature 0, or explore off, what was shown was certain to be."""
    async with started(POLICY) as engine:
        await fill(engine)
        await read(engine, "joel")
        [entry] = await engine.exposures("0-0", 10)
        assert [slot["chance"] for slot in entry["slots"]] == [1.0, 1.0, 1.0]
        assert entry["temperature"] == 0.0


async def test_candidates_that_were_not_looked_up_widen_the_chances(started: Started) -> None:
    """Of 300 posts one batch is looked up: the true chance of each, 1 in 300, lies between the two."""
    async with started(DRAWN) as engine:
        names = [f"bed {n}" for n in range(300)]
        events = [event("t", "tie", "joel", target="mina", relation="follow")]
        events += [event(f"p{n}", "post", "mina", post=name, form="note") for n, name in enumerate(names)]
        await send(engine, events, NOW_MS)
        await read(engine, "joel", k=1)
        [entry] = await engine.exposures("0-0", 10)
        [slot] = entry["slots"]
        assert slot["chance_at_least"] <= 1 / 300 * (1 + 1e-9) < slot["chance"]


async def test_what_was_shown_leaves_with_its_reader(started: Started) -> None:
    """An erasure takes out the reader's entries, and no others; until then an export lists them."""
    async with started(DRAWN) as engine:
        await fill(engine)
        for reader in ("joel", "zoe", "joel"):
            await read(engine, reader)
        assert [one["reader"] for one in (await engine.export("joel", NOW_MS))["exposures"]] == ["joel", "joel"]
        later = 4_000_000_000_000  # the log's numbers are the server's time, which is not the test's
        erase = event("x", "erase", "joel") | {"at": later}
        await send(engine, [erase], later)
        assert [one["reader"] for one in await engine.exposures("0-0", 10)] == ["zoe"]
        assert (await engine.export("joel", NOW_MS))["exposures"] == []


async def test_nothing_is_logged_unless_asked_for(started: Any) -> None:
    """With the setting off there are no entries, nor for feeds newest first, which draw nothing."""
    async with started(DRAWN, logged=False) as engine:
        await fill(engine)
        await read(engine, "joel")
        assert await engine.exposures("0-0", 10) == []
    async with started(DRAWN) as engine:
        await fill(engine)
        await read(engine, "joel", order="newest")
        assert await engine.exposures("0-0", 10) == []
