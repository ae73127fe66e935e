"""Decayed sums as the store keeps them: against pandas, against the slow running sum, and against half-life tables."""

import math
import random
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
import pytest

from scoring.bank import DEFAULT_BANK
from scoring.sums import DecayedSum
from service.engine import Engine
from service.feed.types import FeedRequest
from service.store import keys
from service.store.records import read_record
from tests.engines import DAY_MS, flush, ranked, running, send

NOW_MS = 1_777_885_200_000
AHEAD_MS = 5 * 60_000
HALF_LIVES_MS = {f"h{place}": half_life for place, half_life in enumerate(DEFAULT_BANK.half_lives_ms)}
RAW_EDGES = 16


@dataclass(frozen=True)
class Arrival:
    """A like of the post or its taking back, with the server's clock when it came."""

    now_ms: int
    like: str
    at_ms: int
    back: bool = False


def policy(name: str, half_life: str, stranger: float = 1.0) -> str:
    """Write a policy in which a follower's feed scores a post by the plain decayed count of its edges."""
    return f"""
name = "{name}"
[weights]
"post.note" = 1.0
like = 1.0
[freshness]
curve = "half_life"
half_life = "{half_life}"
[affinity]
stranger = {stranger}
follow = 1.0
friend = 1.0
ceiling = 10.0
half_life = "30d"
"""


def bank_policies() -> list[str]:
    return [policy(name, f"{half_life / 1000:.0f}s") for name, half_life in HALF_LIVES_MS.items()]


def stream(seed: int, count: int) -> list[Arrival]:
    """Draw likes at irregular times that arrive late, in time, or ahead of the clock, and some that are taken back."""
    draw = random.Random(seed)
    at_ms, now_ms, arrivals, likes = NOW_MS - 12 * DAY_MS, 0, list[Arrival](), []
    for number in range(count):
        at_ms += draw.choice([0, 0, 1, 7_000, 60_000, 3_600_000, 9 * 3_600_000])
        late_ms = draw.choice([-AHEAD_MS, -AHEAD_MS, -1, 0, 0, 1_000, 3_600_000, 2 * DAY_MS])
        likes.append((at_ms + late_ms, f"like {number}", at_ms))
    for arrives_ms, like, like_ms in sorted(likes):
        now_ms = max(now_ms, arrives_ms)
        arrivals.append(Arrival(now_ms, like, like_ms))
        if draw.random() < 0.15:
            back = draw.choice(arrivals)
            arrivals.append(Arrival(now_ms, back.like, back.at_ms, back=True))
    return arrivals


def standing(arrivals: Sequence[Arrival]) -> list[int]:
    """List the times of the likes that stand."""
    back = {arrival.like for arrival in arrivals if arrival.back}
    return [arrival.at_ms for arrival in arrivals if not arrival.back and arrival.like not in back]


def event_of(arrival: Arrival, number: int) -> dict[str, Any]:
    if arrival.back:
        return {"id": f"back {number}", "type": "retract", "at": arrival.now_ms, "actor": "ada", "event": arrival.like}
    return {
        "id": arrival.like,
        "type": "interaction",
        "at": arrival.at_ms,
        "actor": "ada",
        "post": "bed",
        "kind": "like",
    }


def groundwork(at_ms: int) -> list[dict[str, Any]]:
    return [
        {"id": "tie", "type": "tie", "at": at_ms, "actor": "joel", "target": "mina", "relation": "follow"},
        {"id": "post", "type": "post", "at": at_ms, "actor": "mina", "post": "bed", "form": "note"},
    ]


def pandas_sum(times_ms: Sequence[int], now_ms: int, half_life_ms: float) -> float:
    """Sum 2^(-age / half-life) with pandas alone.

    pandas offers a decayed mean at irregular times (`Series.ewm(halflife=…, times=…).mean()`), no sum. With x = 1 in
    the last row and 0 before, that mean is 1 over the sum of all rows' weights; so mean times sum of weights is the
    sum. The last row stands for now and adds nothing. Edges ahead of now count as of now, by the contract.
    """
    times = pd.to_datetime(np.array([*sorted(min(each, now_ms) for each in times_ms), now_ms]), unit="ms")
    values, last = np.ones(len(times)), np.zeros(len(times))
    values[-1], last[-1] = 0.0, 1.0
    frame = pd.DataFrame({"value": values, "last": last})
    means = frame.ewm(halflife=pd.Timedelta(milliseconds=half_life_ms), times=times.to_numpy()).mean().iloc[-1]
    return float(means["value"] / means["last"])


async def scores(engine: Engine, now_ms: int) -> dict[str, float]:
    """Give the post's score under each policy."""
    found = {}
    for name in HALF_LIVES_MS:
        [(_, score)] = await ranked(engine, "joel", now_ms, policy=name)
        found[name] = score or 0.0
    return found


async def folded(engine: Engine) -> int:
    """Count the running sums that the post has beside its newest edges."""
    value = await engine.store.connection.read("GET", keys.key("post", engine.store.hasher.hash("bed")))
    record = read_record(value)
    assert len(record.edges) // 8 <= RAW_EDGES + 40
    return record.kinds


def test_pandas_sums_by_the_identity() -> None:
    """The reference itself is right: the golden stream (half-life 6 h, six weights of one) has its direct sums."""
    hours = [0, 0.5, 3.5, 3.5, 34, 36]
    times_ms = [NOW_MS + int(hour * 3_600_000) for hour in hours]
    direct = math.fsum(2.0 ** (-(36 - hour) / 6) for hour in hours)
    assert pandas_sum(times_ms, times_ms[-1], 6 * 3_600_000.0) == pytest.approx(direct, rel=1e-12)


@pytest.mark.parametrize("seed", [1, 2])
async def test_scores_are_decayed_sums_after_every_prefix(redis_db: str, seed: int) -> None:
    """After each of some 120 arrivals, late, ahead or taken back, every half-life of the bank gives pandas' sum."""
    arrivals = stream(seed, 105)
    start_ms = NOW_MS - 12 * DAY_MS
    async with running(redis_db, *bank_policies()) as engine:
        await send(engine, groundwork(start_ms), start_ms)
        for number, arrival in enumerate(arrivals):
            [verdict] = await send(engine, [event_of(arrival, number)], arrival.now_ms)
            assert verdict.outcome == "applied"
            times_ms = [start_ms, *standing(arrivals[: number + 1])]
            for name, score in (await scores(engine, arrival.now_ms)).items():
                expected = pandas_sum(times_ms, arrival.now_ms, HALF_LIVES_MS[name])
                assert score == pytest.approx(expected, rel=1e-9, abs=0), (number, name)
        assert await folded(engine) == 2
        assert len(times_ms) > 4 * RAW_EDGES


async def test_the_order_of_arrival_does_not_matter(redis_db: str) -> None:
    """The same edges and retracts in five shuffled orders, in batches, end in the sums of the slow running sum."""
    arrivals = stream(3, 105)
    events = [event_of(arrival, number) for number, arrival in enumerate(arrivals)]
    start_ms, later_ms = NOW_MS - 12 * DAY_MS, NOW_MS + DAY_MS
    for seed in range(5):
        random.Random(seed).shuffle(events)
        flush(redis_db)
        async with running(redis_db, *bank_policies()) as engine:
            for at in range(0, len(events), 7):
                await send(engine, events[at : at + 7], later_ms)
            await send(engine, groundwork(start_ms), later_ms)
            for name, half_life_ms in HALF_LIVES_MS.items():
                slow = DecayedSum(half_life_ms)
                for at_ms in [start_ms, *standing(arrivals)]:
                    slow.update(at_ms, 1.0)
                [(_, score)] = await ranked(engine, "joel", later_ms, policy=name)
                assert score == pytest.approx(slow.get(later_ms), rel=1e-9, abs=0), name


async def test_edges_ahead_of_the_clock_wait_for_it(redis_db: str) -> None:
    """Twenty edges 5 minutes ahead are each worth 1 until their time has come, and decay from then on."""
    half_life_ms = HALF_LIVES_MS["h0"]
    async with running(redis_db, *bank_policies()) as engine:
        likes = [Arrival(NOW_MS, f"like {number}", NOW_MS + AHEAD_MS) for number in range(20)]
        await send(engine, groundwork(NOW_MS), NOW_MS)
        await send(engine, [event_of(like, 0) for like in likes], NOW_MS)
        for wait_ms in (0, 1, AHEAD_MS - 1, AHEAD_MS, AHEAD_MS + 1, 3 * AHEAD_MS):
            fresh = 2.0 ** (-max(0, wait_ms - AHEAD_MS) / half_life_ms)
            created = 2.0 ** (-wait_ms / half_life_ms)
            [(_, score)] = await ranked(engine, "joel", NOW_MS + wait_ms, policy="h0")
            assert score == pytest.approx(20 * fresh + created, rel=1e-12)


async def test_taking_edges_back_leaves_the_sum_before(redis_db: str) -> None:
    """Sixty edges on top of sixty others, taken back in any order, leave the former score to 1e-9."""
    async with running(redis_db, *bank_policies()) as engine:
        await send(engine, groundwork(NOW_MS - 4 * DAY_MS), NOW_MS)
        first = [Arrival(NOW_MS, f"a {number}", NOW_MS - number * 3_600_000) for number in range(60)]
        more = [Arrival(NOW_MS, f"b {number}", NOW_MS - number * 1_800_001) for number in range(60)]
        await send(engine, [event_of(like, 0) for like in first], NOW_MS)
        before = await scores(engine, NOW_MS)
        await send(engine, [event_of(like, 0) for like in more], NOW_MS)
        between = await scores(engine, NOW_MS)
        assert all(between[name] > before[name] + 1 for name in before)
        back = [event_of(Arrival(NOW_MS, like.like, 0, back=True), number) for number, like in enumerate(more)]
        random.Random(4).shuffle(back)
        await send(engine, back, NOW_MS)
        assert await scores(engine, NOW_MS) == pytest.approx(before, rel=1e-9)


# Half-lives: OpenStax, Chemistry, Appendix M "Half-lives for several radioactive isotopes". Fractions: recomputed.
NUCLIDES = [
    ("I-131", "8.040d", 1.0, 0.9173994137),
    ("I-131", "8.040d", 7.0, 0.5469016174),
    ("I-131", "8.040d", 14.0, 0.2991013791),
    ("I-131", "8.040d", 24.12, 0.125),
    ("P-32", "14.29d", 7.0, 0.7120976298),
    ("P-32", "14.29d", 14.0, 0.5070830344),
    ("P-32", "14.29d", 30.0, 0.233360099),
    ("Rn-222", "3.82d", 1.0, 0.8340581611),
    ("Rn-222", "3.82d", 10.0, 0.162915859),
    ("Rn-222", "3.82d", 14.0, 0.0788403797),
    ("Na-24", "15.00h", 1.0, 0.329876978),
]


@pytest.mark.parametrize(("nuclide", "half_life", "age_days", "fraction"), NUCLIDES)
async def test_a_post_decays_as_a_nuclide_does(
    redis_db: str, nuclide: str, half_life: str, age_days: float, fraction: float
) -> None:
    """A post by a tie is worth the fraction that remains of a nuclide with the policy's half-life."""
    async with running(redis_db, policy(nuclide.lower(), half_life, stranger=0.02)) as engine:
        await send(engine, groundwork(NOW_MS), NOW_MS)
        [(_, score)] = await ranked(engine, "joel", NOW_MS, as_of_ms=NOW_MS + round(age_days * DAY_MS))
        assert score == pytest.approx(fraction, abs=6e-10)


@pytest.mark.parametrize("half_life_ms", [ms for ms in HALF_LIVES_MS.values() if 7 * ms <= 30 * DAY_MS])
@pytest.mark.parametrize(("half_lives", "left"), [(0, 1.0), (1, 1 / 2), (2, 1 / 4), (5, 1 / 32), (7, 1 / 128)])
async def test_whole_half_lives_leave_exact_fractions(
    redis_db: str, half_life_ms: float, half_lives: int, left: float
) -> None:
    """After 5 half-lives 1/32 remains and after 7 1/128 (DOE-HDBK-1019/1-93, volume 1, figure 10), to the last bit."""
    async with running(redis_db, policy("whole", f"{half_life_ms / 1000:.0f}s")) as engine:
        await send(engine, groundwork(NOW_MS), NOW_MS)
        request = FeedRequest("joel", as_of_ms=NOW_MS + half_lives * int(half_life_ms))
        [item] = (await engine.feed(request, NOW_MS)).items
        assert item.score == left
