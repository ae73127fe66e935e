"""The reference running sum against pandas, against published values, and against the plain double loop."""

import math
import random
from typing import Any

import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from scoring.sums import DecayedSum

HOUR_MS = 3_600_000
DAY_MS = 24 * HOUR_MS
START_MS = 1_767_225_600_000  # 2026-01-01T00:00:00Z

Events = list[tuple[int, float]]

# A stream with a burst, a tie and long silences; its sums recomputed with pandas 3.1 (the indicator trick below).
GOLDEN_HALF_LIFE_MS = 6 * HOUR_MS
GOLDEN: Events = [
    (START_MS, 1.0),
    (START_MS + 7_000, 4.0),
    (START_MS + 3 * HOUR_MS + HOUR_MS // 2, 2.5),
    (START_MS + 3 * HOUR_MS + HOUR_MS // 2, 8.0),
    (START_MS + DAY_MS + 10 * HOUR_MS, 1.0),
    (START_MS + 8 * DAY_MS + 1_000, 3.0),
]
GOLDEN_SUMS = [1.0, 4.999775394196924, 5.837699395689569, 13.837699395689569, 1.4081577814438244, 3.000000016653831]

events_in_a_month = st.lists(
    st.tuples(st.integers(START_MS, START_MS + 30 * DAY_MS), st.floats(min_value=-100.0, max_value=100.0)), max_size=30
)


def summed(events: Events, half_life_ms: float) -> DecayedSum:
    """Return the running sum of events in the order given."""
    total = DecayedSum(half_life_ms)
    for event_ms, weight in events:
        total.update(event_ms, weight)
    return total


def directly(events: Events, half_life_ms: float, now_ms: int) -> float:
    """Return the decayed sum of events, each decayed by itself."""
    return math.fsum(weight * 2.0 ** (-(now_ms - event_ms) / half_life_ms) for event_ms, weight in events)


def by_pandas(events: Events, half_life_ms: float) -> list[float]:
    """Return the decayed sum after each event of an ordered stream, from pandas' ewm means alone.

    pandas has means over irregular times, and no sums. A mean is a decayed sum over a decayed count; the mean of an
    indicator of the first event is that event's decay over the same count, which gives the count.
    """
    times = pd.Series(pd.to_datetime([event_ms for event_ms, _ in events], unit="ms"))
    half_life: Any = pd.Timedelta(milliseconds=half_life_ms)  # the stubs know only numbers here
    weights = pd.Series([weight for _, weight in events])
    indicator = pd.Series([1.0] + [0.0] * (len(events) - 1))
    means = weights.ewm(halflife=half_life, times=times).mean()
    first = indicator.ewm(halflife=half_life, times=times).mean()
    decays = [2.0 ** (-(event_ms - events[0][0]) / half_life_ms) for event_ms, _ in events]
    return [float(mean * decay / share) for mean, decay, share in zip(means, decays, first, strict=True)]


def seeded_stream(seed: int, count: int) -> Events:
    """Return an ordered stream with bursts, ties, silences and weights of 0."""
    draw = random.Random(seed)
    now_ms, events = START_MS, []
    for _ in range(count):
        now_ms += draw.choice([0, 0, 1, 1_000, 60_000, HOUR_MS, 2 * DAY_MS])
        events.append((now_ms, draw.choice([0.0, 0.5, 1.0, 2.0, 6.0])))
    return events


def test_the_golden_stream_has_its_sums() -> None:
    """After each event of the golden stream the sum is the recomputed one."""
    total, sums = DecayedSum(GOLDEN_HALF_LIFE_MS), []
    for event_ms, weight in GOLDEN:
        total.update(event_ms, weight)
        sums.append(total.get(event_ms))
    assert sums == pytest.approx(GOLDEN_SUMS, rel=1e-14)


def test_the_golden_stream_agrees_with_pandas() -> None:
    """The recomputed sums are those that pandas' exponentially weighted means give."""
    assert by_pandas(GOLDEN, GOLDEN_HALF_LIFE_MS) == pytest.approx(GOLDEN_SUMS, rel=1e-13)


@pytest.mark.parametrize("half_life_ms", [HOUR_MS, 12 * HOUR_MS, 7 * DAY_MS])
def test_a_seeded_stream_agrees_with_pandas_after_every_prefix(half_life_ms: int) -> None:
    """A running sum and pandas agree at each event of a stream with ties and silences."""
    events = seeded_stream(seed=5, count=40)
    total, sums = DecayedSum(half_life_ms), []
    for event_ms, weight in events:
        total.update(event_ms, weight)
        sums.append(total.get(event_ms))
    assert sums == pytest.approx(by_pandas(events, half_life_ms), rel=1e-10, abs=1e-12)


def test_equally_spaced_events_agree_with_the_recursive_sum() -> None:
    """Values 1 to 4 one second apart, half-life two seconds: pandas' ewm(halflife=2).sum() (pandas 3.1, recomputed)."""
    total, sums = DecayedSum(2_000), []
    for second, weight in enumerate([1.0, 2.0, 3.0, 4.0]):
        total.update(second * 1_000, weight)
        sums.append(total.get(second * 1_000))
    assert sums == pytest.approx([1.0, 2.7071067811865475, 4.914213562373095, 7.474873734152917], rel=1e-15)
    assert sums == pytest.approx(pd.Series([1.0, 2.0, 3.0, 4.0]).ewm(halflife=2).sum().tolist(), rel=1e-14)


@pytest.mark.parametrize("seed", range(4))
def test_every_prefix_agrees_with_the_double_loop(seed: int) -> None:
    """In shuffled order, the sum after every prefix is the sum of its events, each decayed by itself."""
    events = seeded_stream(seed, count=60)
    random.Random(seed).shuffle(events)
    total = DecayedSum(half_life_ms=6 * HOUR_MS)
    for count, (event_ms, weight) in enumerate(events, start=1):
        total.update(event_ms, weight)
        newest_ms = max(time_ms for time_ms, _ in events[:count])
        for now_ms in (newest_ms, newest_ms + 1, newest_ms + 5 * DAY_MS):
            expected = directly(events[:count], 6 * HOUR_MS, now_ms)
            assert total.get(now_ms) == pytest.approx(expected, rel=1e-12, abs=1e-300)


# OpenStax, Chemistry, Appendix M (half-lives retyped; fractions recomputed): days, and what is left of 1.
@pytest.mark.parametrize(
    ("half_life_ms", "days", "left"),
    [
        (8.040 * DAY_MS, 7, 0.5469016174),
        (14.29 * DAY_MS, 30, 0.233360099),
        (3.82 * DAY_MS, 14, 0.0788403797),
        (15.0 * HOUR_MS, 1, 0.329876978),
        (138.4 * DAY_MS, 365.25, 0.160529506),
    ],
)
def test_one_event_decays_as_published(half_life_ms: float, days: float, left: float) -> None:
    """One event of weight 1 leaves what is left of an isotope of that half-life."""
    assert summed([(0, 1.0)], half_life_ms).get(round(days * DAY_MS)) == pytest.approx(left, rel=4e-9)


def test_five_and_seven_half_lives_leave_what_the_handbook_says() -> None:
    """DOE-HDBK-1019/1-93, volume 1, figure 10 (retyped): 3.1 % after five half-lives, 0.78 % after seven."""
    total = summed([(0, 1.0)], half_life_ms=1000)
    assert total.get(5_000) == 1 / 32
    assert total.get(7_000) == 1 / 128


def test_exponential_forward_decay_does_not_depend_on_a_landmark() -> None:
    """Count and sum of the stream of Cormode et al. (ICDE 2009, example 1) with g(n) = exp(0.1 n), at time 110.

    The stream is retyped from published unit tests of it; the values are recomputed, for landmarks 0, 100 and 103.
    """
    stream = [(105, 4.0), (107, 8.0), (103, 3.0), (108, 6.0), (104, 4.0)]
    half_life_ms = 6.931471805599453  # ln 2 / 0.1
    assert summed([(time, 1.0) for time, _ in stream], half_life_ms).get(110) == pytest.approx(
        3.21147657335776, rel=1e-14
    )
    assert summed(stream, half_life_ms).get(110) == pytest.approx(16.9500553785225, rel=1e-14)


def test_nothing_seen_is_zero_at_any_time() -> None:
    """A sum without events is 0 and has no time of its own."""
    total = DecayedSum(HOUR_MS)
    assert total.as_of_ms is None
    assert total.get(0) == total.get(START_MS) == 0.0


def test_events_at_time_zero_and_of_weight_zero_are_events() -> None:
    """Time 0 and weight 0 are values, not the absence of one."""
    total = summed([(0, 0.0)], HOUR_MS)
    assert total.as_of_ms == 0
    total.update(0, 1.0)
    assert total.get(HOUR_MS) == 0.5


def test_a_span_of_thousands_of_half_lives_neither_overflows_nor_breaks() -> None:
    """After 6,352 half-lives the old sum is 0 and the new event counts in full; a fixed landmark would overflow."""
    total = summed([(0, 5.0), (6_352 * DAY_MS, 3.0)], half_life_ms=DAY_MS)
    assert total.get(6_352 * DAY_MS) == 3.0
    total.update(1, 7.0)
    assert total.get(6_353 * DAY_MS) == 1.5


def test_reading_before_the_newest_event_is_refused() -> None:
    """What had been summed at an earlier time is not kept, and a wrong number is not made up."""
    with pytest.raises(ValueError, match=r"^now_ms: 999 is not allowed: it is 1000, the newest event, or later"):
        summed([(1_000, 1.0)], HOUR_MS).get(999)


def test_reading_changes_nothing() -> None:
    """Reading at a late time and then at an early one gives both times' sums."""
    total = summed([(0, 8.0)], half_life_ms=1_000)
    assert [total.get(now_ms) for now_ms in (3_000, 0, 1_000)] == [1.0, 8.0, 4.0]


def test_sums_of_other_half_lives_are_not_merged() -> None:
    """Only sums of one half-life can be added."""
    with pytest.raises(ValueError, match=r"^half_life_ms: 7 is not allowed"):
        DecayedSum(6).merge(DecayedSum(7))


@given(events_in_a_month, st.randoms(use_true_random=False))
def test_order_does_not_matter(events: Events, draw: random.Random) -> None:
    """Any order of the same events ends in the same sum."""
    shuffled = draw.sample(events, len(events))
    now_ms = START_MS + 31 * DAY_MS
    expected = summed(events, DAY_MS).get(now_ms)
    assert summed(shuffled, DAY_MS).get(now_ms) == pytest.approx(expected, rel=1e-9, abs=1e-9)


@given(events_in_a_month, st.integers(0, 30))
def test_merged_parts_equal_the_whole(events: Events, cut: int) -> None:
    """Two sums over parts of a stream add up to the sum over all of it, and the second part is left as it was."""
    now_ms = START_MS + 31 * DAY_MS
    first, second = summed(events[:cut], DAY_MS), summed(events[cut:], DAY_MS)
    before = second.get(now_ms)
    first.merge(second)
    assert first.get(now_ms) == pytest.approx(summed(events, DAY_MS).get(now_ms), rel=1e-9, abs=1e-9)
    assert second.get(now_ms) == before


@given(events_in_a_month.filter(bool), st.data())
def test_undo_takes_one_event_back(events: Events, data: st.DataObject) -> None:
    """Without one of its events a sum is what it would have been, wherever the event stood."""
    place = data.draw(st.integers(0, len(events) - 1))
    total, now_ms = summed(events, DAY_MS), START_MS + 31 * DAY_MS
    total.undo(*events[place])
    rest = events[:place] + events[place + 1 :]
    assert total.get(now_ms) == pytest.approx(directly(rest, DAY_MS, now_ms), rel=1e-9, abs=1e-12 * len(events) * 100)


@given(events_in_a_month.filter(bool), st.integers(0, 30 * DAY_MS))
def test_the_whole_sum_decays_by_one_factor(events: Events, later_ms: int) -> None:
    """Between events everything scales alike, so an order by one half-life does not change with time."""
    total = summed(events, DAY_MS)
    assert total.as_of_ms is not None
    now = total.get(total.as_of_ms)
    assert total.get(total.as_of_ms + later_ms) == pytest.approx(now * 2.0 ** (-later_ms / DAY_MS), rel=1e-12)
