"""The demo's week as events: valid, in time, and as people would act."""

from collections import Counter

import numpy as np
import pytest

from scoring.policy import parse_policy
from service.demo import chronicle, rhythm
from service.demo.community import DAY_MS, WEEK_MS
from service.events.model import parse_event
from service.settings import BUILT_IN_POLICY
from tests.demo_samples import HOUR_MS, NOW_MS, week

EVENTS = [parse_event(event) for event in week().events]
ACTS = {event.id: event for event in EVENTS if event.type == "interaction"}


def test_same_arguments_same_events() -> None:
    """The same size, seed and time give the same events; another seed gives others."""
    assert chronicle.write(300, 3, NOW_MS) == week()
    assert chronicle.write(300, 4, NOW_MS).events != week().events


def test_another_time_moves_all_times_and_nothing_else() -> None:
    """A week that ends nine hours later has the same events, each nine hours later."""
    later = [parse_event(event) for event in week(now_ms=NOW_MS + 9 * HOUR_MS).events]
    assert [event.model_copy(update={"at": event.at - 9 * HOUR_MS}) for event in later] == EVENTS


@pytest.mark.parametrize("seed", range(3))
def test_size(seed: int) -> None:
    """The usual size is at least 300 people and 12,000 to 20,000 events, which load within the time promised."""
    made = chronicle.write(320, seed, NOW_MS)
    assert len({event["actor"] for event in made.events}) == 320
    assert 12_000 <= len(made.events) <= 20_000
    assert len({event["id"] for event in made.events}) == len(made.events)


def test_every_sort_of_event_is_there() -> None:
    """The week holds ties, posts, interactions, retracts, withdrawals and looks at feeds."""
    assert set(Counter(event.type for event in EVENTS)) == {
        "tie",
        "post",
        "interaction",
        "retract",
        "withdraw",
        "seen",
    }


def test_times_lie_in_the_window() -> None:
    """Everything lies in the last week, oldest first; only ties reach back a week further."""
    times = [event.at for event in EVENTS]
    assert times == sorted(times)
    assert times[-1] <= NOW_MS
    assert min(event.at for event in EVENTS if event.type != "tie") >= NOW_MS - WEEK_MS
    assert times[0] >= NOW_MS - 2 * WEEK_MS


def test_policy_knows_every_kind() -> None:
    """The built-in policy knows each kind, one of them by the part before its dot."""
    policy = parse_policy(BUILT_IN_POLICY.read_text())
    kinds = {event.kind for event in ACTS.values()} | {f"post.{post.form}" for post in week().posts.values()}
    assert {"comment.question", "hide", "post.video"} <= kinds
    assert all(policy.knows(kind) for kind in kinds)
    assert policy.weight("comment.question") == policy.weight("comment") == 1.0


def test_people_react_to_what_they_can_see() -> None:
    """Nobody reacts to their own post, before it was there, or to one whose audience leaves them out."""
    ties, posts = week().community.ties(), week().posts
    for event in ACTS.values():
        post = posts[event.post]
        assert event.actor != post.author
        assert event.at >= NOW_MS - post.age_ms
        assert post.audience != "nobody"
        if post.audience == "friends":
            assert ties[post.author].get(event.actor) == "friend"
        if post.audience == "followers":
            assert ties[event.actor].get(post.author) in ("follow", "friend")


def test_reactions_are_quick_with_a_long_tail() -> None:
    """Half of the reactions come within a few hours, and some take more than a day."""
    delays_h = [(event.at - NOW_MS + week().posts[event.post].age_ms) / HOUR_MS for event in ACTS.values()]
    assert 0.5 < np.median(delays_h) < 4
    assert 0.01 < np.mean(np.array(delays_h) > 24) < 0.1


def test_retracts_take_back_ones_own() -> None:
    """Each retract names an interaction by the same actor and comes after it."""
    retracts = [event for event in EVENTS if event.type == "retract"]
    assert len(retracts) > 20
    assert all(ACTS[one.event].actor == one.actor and one.at >= ACTS[one.event].at for one in retracts)


def test_withdrawals_are_the_authors() -> None:
    """A withdrawal is by the post's author, after the post, and the week knows of it."""
    withdrawn = {event.post: event for event in EVENTS if event.type == "withdraw"}
    assert set(withdrawn) == {post.id for post in week().posts.values() if post.withdrawn}
    for name, event in withdrawn.items():
        assert event.actor == week().posts[name].author
        assert event.at >= NOW_MS - week().posts[name].age_ms


def test_post_ids_are_readable() -> None:
    """A post's id is its author, its topic and a number, and it fits the feed's columns."""
    for post in week().posts.values():
        author, topic, number = post.id.split("-")
        assert (author, topic) == (post.author, post.topic)
        assert int(number) >= 1
        assert len(f"{topic}-{number}") <= 12


def test_nights_are_quiet_and_weekends_busy() -> None:
    """Few posts fall into the night, and a weekend's day has more than another."""
    ages = rhythm.ages_ms(20_000, np.random.default_rng(1))
    hours = Counter(rhythm.hour_of_day(age) for age in ages.tolist())
    assert sum(hours[hour] for hour in range(5)) < 0.01 * len(ages)
    assert hours[17] > 50 * hours[2]
    # Sunday from midnight to five and Saturday, 41 hours; Monday to Friday, 120 hours.
    weekend = np.sum(ages < 17 * HOUR_MS + DAY_MS) / 41
    assert weekend > 1.3 * np.sum(ages >= 17 * HOUR_MS + DAY_MS) / 127


def test_night_is_put_off_to_the_morning() -> None:
    """What would happen at two in the morning happens after six; what happens by day stays."""
    rng = np.random.default_rng(1)
    assert rhythm.hour_of_day(15 * HOUR_MS) == 2
    moved = [rhythm.out_of_the_night(15 * HOUR_MS, rng) for _ in range(100)]
    assert all(6 <= rhythm.hour_of_day(age) <= 12 for age in moved)
    assert rhythm.out_of_the_night(3 * HOUR_MS, rng) == 3 * HOUR_MS
