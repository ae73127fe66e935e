"""Interactions applied in whole runs end in the state and the feeds of events that are applied one by one."""

import asyncio
import random
from collections.abc import Callable, Coroutine, Sequence
from dataclasses import replace
from typing import Any

import pytest

from service.store import bulk
from service.store.calls import Call
from service.store.connection import Connection
from service.store.store import Store
from tests.bulk_loads import Event, Run, bulk_load, import_apart, in_calls, loaded, same, same_calls, started
from tests.engines import assert_as_oracle, flush, make_engine, send
from tests.worlds import World, random_world


def with_repeats(world: World, seed: int) -> list[Event]:
    """A fifth of the events once more, somewhere."""
    rng = random.Random(seed)
    events = world.events + rng.sample(world.events, len(world.events) // 5)
    rng.shuffle(events)
    return events


@pytest.mark.parametrize(
    ("seed", "people", "posts", "events", "window_lines"),
    [(seed, 5, 6, 80, 37) for seed in range(12)]
    + [(50, 12, 3, 900, 400), (51, 12, 16, 900, 5_000), (52, 3, 1, 600, 64)],
)
def test_equal_state(redis_db: str, seed: int, people: int, posts: int, events: int, window_lines: int) -> None:
    """Key by key, the store is what it is after the same events one by one, and so are the outcomes and the feeds."""
    world = random_world(seed, people=people, posts=posts, events=events)
    lines = with_repeats(world, seed)
    calls = same_calls(lines, window_lines)
    outcomes, expected = loaded(redis_db, world, in_calls(calls, world.now_ms))

    def load(engine: Any, run: Run) -> Any:
        summary = bulk_load(engine, run, lines, world.now_ms, window_lines)
        run(assert_as_oracle(engine, world, world.oracle()))
        return summary

    summary, actual = loaded(redis_db, world, load)
    counted = {name: getattr(summary, name) for name in ("applied", "duplicate", "expired", "rejected")}
    assert counted == {name: outcomes[name] for name in counted}
    assert actual.keys() == expected.keys()
    for key in expected:
        assert same(actual[key], expected[key]), (key, actual[key], expected[key])


class Killed(BaseException):
    """The process ended here."""


class Ending:
    """Lets a number of writing commands through, then ends the process, as SIGKILL would."""

    def __init__(self, commands: int) -> None:
        self.left, self.dead = commands, False
        self._whole = Connection._pipeline

    def patched(self) -> Callable[[Connection, Sequence[Call]], Coroutine[Any, Any, list[Any]]]:
        """Give what stands in for `Connection._pipeline`."""

        async def pipeline(connection: Connection, calls: Sequence[Call]) -> list[Any]:
            return await self._run(connection, calls)

        return pipeline

    async def _run(self, connection: Connection, calls: Sequence[Call]) -> list[Any]:
        let = calls[: self.left]
        self.left -= len(let)
        self.dead = self.dead or len(let) < len(calls)
        answers = await self._whole(connection, let) if let else []
        if self.dead:
            raise Killed
        return answers


def ended_early(url: str, world: World, commands: int) -> bool:
    """Import in a process that ends after some commands; False where it came to its end."""
    with asyncio.Runner() as runner, pytest.MonkeyPatch.context() as patch:
        engine = started(url, world, runner.run)
        ending = Ending(commands)
        patch.setattr(Connection, "_pipeline", ending.patched())
        try:
            bulk_load(engine, runner.run, world.events, world.now_ms, 1_000)
        except Killed:
            return True
        finally:
            runner.run(engine.close())
    return False


@pytest.mark.parametrize("sweeps", [0, 1])
@pytest.mark.parametrize("seed", [3, 8])
def test_an_import_cut_off_anywhere_can_be_run_again(
    redis_db: str, monkeypatch: pytest.MonkeyPatch, seed: int, sweeps: int
) -> None:
    """For every point between two commands: the import run again, after a sweep or at once, ends in the same feeds."""
    monkeypatch.setattr(bulk, "CALLS_AT_ONCE", 2)
    world = random_world(seed, people=4, posts=5, events=25, shares={"interaction": 20, "retract": 1, "tie": 1})
    oracle, points = world.oracle(), 0
    while True:
        flush(redis_db)
        cut = ended_early(redis_db, world, points)
        with asyncio.Runner() as runner:
            engine = started(redis_db, world, runner.run)
            if sweeps:
                runner.run(engine.store.finish_open_entries(world.now_ms + 1))
                assert runner.run(engine.store.finish_open_entries(world.now_ms + 1)) == 0
            bulk_load(engine, runner.run, world.events, world.now_ms, 1_000)
            runner.run(assert_as_oracle(engine, world, oracle))
            assert runner.run(engine.store.finish_open_entries(world.now_ms + 1)) == 0
            runner.run(engine.close())
        if not cut:
            break
        points += 1
    assert points > 50


async def test_imports_and_live_writes_at_once_count_each_event_once(redis_db: str) -> None:
    """Two imports and two senders of the same events, at the same time and in different orders, end in its feeds."""
    world = random_world(34, people=6, posts=8, events=150)
    flush(redis_db)

    def import_in_a_thread(seed: int) -> None:
        import_apart(redis_db, world, random.Random(seed).sample(world.events, len(world.events)), 61)

    async def sender(seed: int) -> None:
        events = random.Random(seed).sample(world.events, len(world.events))
        engine = make_engine(redis_db, world.policy_toml)
        await engine.start(background=False)
        for at in range(0, len(events), 17):
            await send(engine, events[at : at + 17], world.now_ms)
        await engine.close()

    await asyncio.gather(*(asyncio.to_thread(import_in_a_thread, seed) for seed in (1, 2)), sender(3), sender(4))
    engine = make_engine(redis_db, world.policy_toml)
    await engine.start(background=False)
    await assert_as_oracle(engine, world, world.oracle())
    assert await engine.store.finish_open_entries(world.now_ms) == 0
    await engine.close()


def test_a_person_is_never_given_more_than_the_limit(redis_db: str, monkeypatch: pytest.MonkeyPatch) -> None:
    """Of a run that reaches past the limit, the first are taken and each of the others is rejected with the reason."""
    whole = Store._set_up

    def small(store: Store) -> None:
        store.limits = type(store.limits)(
            **{name: getattr(store.limits, name) for name in store.limits.__slots__} | {"row_edges": 5}
        )
        whole(store)

    monkeypatch.setattr(Store, "_set_up", small)
    world = random_world(1, people=2, posts=1, events=0)
    like = {"type": "interaction", "at": world.now_ms, "actor": "joel", "post": "bed", "kind": "like"}
    events = [like | {"id": f"l{number}"} for number in range(8)]
    summary, _ = loaded(redis_db, world, lambda engine, run: bulk_load(engine, run, events, world.now_ms, 100))
    assert (summary.applied, summary.rejected) == (5, 3)
    assert [one.line for one in summary.first_rejected] == [6, 7, 8]
    assert "this person has reached what is kept for one person" in summary.first_rejected[0].reason


def test_long_rows_are_appended_to(redis_db: str) -> None:
    """Where a row is too long to be written anew, what is appended ends in the same state too, ids found again."""
    world = random_world(1, people=2, posts=1, events=0)
    like = {"type": "interaction", "actor": "joel", "kind": "like"}
    events = [like | {"id": f"l{n}", "post": f"bed{n % 40}", "at": world.now_ms - 7_000 * n} for n in range(2_300)]
    _, expected = loaded(redis_db, world, in_calls([events], world.now_ms))

    def load(engine: Any, run: Run) -> list[int]:
        parts = (events[:2_000], events[2_000:], events[1_990:2_010])
        return [bulk_load(engine, run, part, world.now_ms, 5_000).applied for part in parts]

    applied, actual = loaded(redis_db, world, load)
    assert applied == [2_000, 300, 0]
    assert actual.keys() == expected.keys()
    for key in expected:
        assert same(actual[key], expected[key]), key


@pytest.mark.parametrize("named_changes", [0, bulk.NAMED_CHANGES])
async def test_a_worker_that_remembers_shows_an_import_at_once(
    redis_db: str, monkeypatch: pytest.MonkeyPatch, named_changes: int
) -> None:
    """Feeds that were read before are right after an import elsewhere, whether it names what changed or not."""
    monkeypatch.setattr(bulk, "NAMED_CHANGES", named_changes)
    world = random_world(21, people=6, posts=8, events=200, shares={"interaction": 9, "post": 2, "tie": 3})
    before = replace(world, events=world.events[:120])
    flush(redis_db)
    engine = make_engine(redis_db, world.policy_toml)
    await engine.start(background=False)
    await send(engine, before.events, world.now_ms)
    await assert_as_oracle(engine, world, before.oracle())
    await asyncio.to_thread(import_apart, redis_db, world, world.events[120:], 1_000)
    await assert_as_oracle(engine, world, world.oracle())
    await engine.close()
