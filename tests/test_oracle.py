"""Hand-computed cases for the brute-force oracle that the service is compared with."""

import tomllib
from random import Random
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from tests.oracle import AHEAD_MS, DAY_MS, RETENTION_MS, Event, Oracle, assert_same_feed, assert_tie_order
from tests.worlds import NOW_MS, World, policies, random_schedule, random_world, schedules, worlds

HOUR_MS = 3_600_000
POLICY: dict[str, Any] = {
    "name": "allotments",
    "weights": {"post": 1.5, "post.photo": 3.0, "comment": 1.0, "comment.photo": 2.0, "like": 0.5, "hide": 0},
    "freshness": {"curve": "half_life", "half_life": "12h"},
    "affinity": {
        "stranger": 0.02,
        "follow": 1.0,
        "friend": 2.0,
        "ceiling": 10.0,
        "half_life": "30d",
        "gain": {"like": 0.1, "comment": 0.5, "hide": -1.5},
    },
    "seen": {"factor": 0.25},
}


def at(hours_ago: float) -> int:
    return NOW_MS - int(hours_ago * HOUR_MS)


def post(name: str, actor: str = "mina", hours_ago: float = 0, **fields: Any) -> Event:
    made = {"id": f"post-{name}-{hours_ago}", "type": "post", "at": at(hours_ago), "actor": actor, "post": name}
    return made | {"form": "photo", "audience": "everyone", "topics": []} | fields


def act(event_id: str, actor: str, on: str, kind: str = "comment", hours_ago: float = 0) -> Event:
    made = {"id": event_id, "type": "interaction", "at": at(hours_ago), "actor": actor}
    return made | {"post": on, "kind": kind}


def tie(actor: str, target: str, relation: str = "follow", hours_ago: float = 0, event_id: str = "") -> Event:
    made = {"id": event_id or f"tie-{actor}-{target}-{hours_ago}", "type": "tie", "at": at(hours_ago)}
    return made | {"actor": actor, "target": target, "relation": relation}


def event(kind: str, actor: str, hours_ago: float = 0, **fields: Any) -> Event:
    return {"id": f"{kind}-{actor}-{hours_ago}", "type": kind, "at": at(hours_ago), "actor": actor} | fields


def oracle(*events: Event, **sections: Any) -> Oracle:
    return Oracle.from_events(events, NOW_MS, policy=POLICY | sections)


def names(told: Oracle, reader: str = "joel") -> list[str]:
    return [name for name, _ in told.feed(reader, None, NOW_MS)]


def test_score_sums_every_edge() -> None:
    """A score is the sum over all edges of affinity, weight and freshness."""
    told = oracle(
        post("p", hours_ago=24), tie("joel", "mina"), act("a", "ada", "p", "comment.photo", 12), act("b", "mina", "p")
    )
    # 1 * 3 * 1/4 + 0.02 * 2 * 1/2 + 1 * 1 * 1
    assert names(told) == ["p"]
    assert told.score("joel", "p", NOW_MS) == pytest.approx(1.77, rel=1e-15)
    assert told.score("joel", "p", NOW_MS + 12 * HOUR_MS) == pytest.approx(0.885, rel=1e-15)


def test_power_curve() -> None:
    """A power curve takes (1 + age / scale) to minus the exponent."""
    curve = {"curve": "power", "scale": "6h", "exponent": 1.5}
    told = oracle(post("p", hours_ago=18), tie("joel", "mina"), freshness=curve)
    assert told.score("joel", "p", NOW_MS) == pytest.approx(3.0 / 8.0, rel=1e-15)


def test_future_edge_is_fresh() -> None:
    """An edge up to five minutes ahead has age 0."""
    told = oracle(post("p", hours_ago=-5 / 60), tie("joel", "mina"))
    assert told.score("joel", "p", NOW_MS) == 3.0


@pytest.mark.parametrize(
    ("relation", "expected"), [("follow", 1.0), ("friend", 2.0), ("none", 0.02), ("mute", 0.0), ("block", 0.0)]
)
def test_affinity_base(relation: str, expected: float) -> None:
    """A relation alone gives its base value, and a muted or blocked person gets nothing."""
    assert oracle(tie("joel", "mina", relation)).affinity("joel", "mina", NOW_MS) == expected


def test_affinity_gains_decay() -> None:
    """Interactions with a person's posts add gains that halve in the affinity's half-life."""
    told = oracle(post("p", hours_ago=700), act("a", "joel", "p", "comment.photo", 360), act("b", "joel", "p", "like"))
    # 0.02 + 0.5 / sqrt 2 + 0.1: fifteen days of a half-life of thirty
    assert told.affinity("joel", "mina", NOW_MS) == pytest.approx(0.4735533905932738, rel=1e-15)
    assert told.affinity("mina", "joel", NOW_MS) == 0.02


def test_affinity_limits() -> None:
    """Affinity stays between 0 and the ceiling."""
    fans = [act(f"c{n}", "joel", "p") for n in range(30)]
    assert oracle(post("p"), *fans).affinity("joel", "mina", NOW_MS) == 10.0
    assert oracle(post("p"), act("h", "joel", "p", "hide")).affinity("joel", "mina", NOW_MS) == 0.0


def test_affinity_to_oneself_is_nothing() -> None:
    """A reader's own edges count 0 for that reader and fully for others."""
    told = oracle(post("p"), tie("joel", "mina"), act("a", "joel", "p"), act("b", "joel", "q"), post("q", "joel"))
    assert told.affinity("joel", "joel", NOW_MS) == 0.0
    assert told.score("joel", "p", NOW_MS) == pytest.approx((1.0 + 0.5) * 3.0, rel=1e-15)
    assert told.score("ada", "p", NOW_MS) == pytest.approx(0.02 * 3.0 + 0.02 * 1.0, rel=1e-15)


def test_affinity_needs_an_author() -> None:
    """Interactions count in affinity once the post's author is known, also on a withdrawn post."""
    liked = act("a", "joel", "p", "like")
    assert oracle(liked).affinity("joel", "mina", NOW_MS) == 0.02
    assert oracle(liked, post("p")).affinity("joel", "mina", NOW_MS) == pytest.approx(0.12, rel=1e-15)
    told = oracle(liked, post("p"), event("withdraw", "ada", post="p"))
    assert told.affinity("joel", "mina", NOW_MS) == pytest.approx(0.12, rel=1e-15)


def test_repeats_count_once() -> None:
    """An event sent three times counts once."""
    told = oracle(post("p"), *[act("a", "ada", "p")] * 3)
    assert told.verdicts == ["applied", "applied", "duplicate", "duplicate"]
    assert told.score("joel", "p", NOW_MS) == pytest.approx(0.08, rel=1e-15)


def test_accepted_span_of_time() -> None:
    """Events as old as retention and five minutes ahead are taken, those a millisecond beyond are not."""
    offsets = (-RETENTION_MS - 1, -RETENTION_MS, AHEAD_MS, AHEAD_MS + 1)
    told = oracle(*(post(f"p{n}") | {"at": NOW_MS + offset} for n, offset in enumerate(offsets)))
    assert told.verdicts == ["expired", "applied", "applied", "rejected"]


def test_unknown_kinds_are_rejected() -> None:
    """A kind is known by itself or by a stem, not by a longer or similar name."""
    kinds = ("comment.photo.close", "commentary", "like.late", "photo.comment")
    told = oracle(*(act(f"a{n}", "ada", "p", kind) for n, kind in enumerate(kinds)), post("p", form="bean"))
    assert told.verdicts == ["applied", "rejected", "applied", "rejected", "applied"]
    assert [told.weight(kind) for kind in ("comment.photo.close", "post.bean")] == [2.0, 1.5]


def test_edits_keep_the_creation_edge() -> None:
    """An edit changes form and audience and leaves one creation edge at the earliest time."""
    told = oracle(post("p", hours_ago=1, form="note"), post("p", hours_ago=12), post("p", hours_ago=6, form="video"))
    assert told.score("ada", "p", NOW_MS) == pytest.approx(0.02 * 1.5 * 0.5, rel=1e-15)
    assert (told.posts["p"].form, told.posts["p"].created_ms) == ("note", at(12))


def test_equal_times_take_the_greater_id() -> None:
    """Of two edits or ties at the same time the one with the greater id by bytes stands."""
    two = [post("p", audience="nobody") | {"id": "é"}, post("p") | {"id": "z"}]
    assert oracle(*two).posts["p"].audience == "nobody"
    ties = [tie("joel", "mina", "mute", event_id="b"), tie("joel", "mina", "friend", event_id="a10")]
    assert oracle(*ties).relation("joel", "mina") == "mute"


def test_another_author_is_rejected() -> None:
    """A post belongs to whoever's post event arrives first, whatever the times."""
    told = oracle(post("p", hours_ago=1), post("p", "ada", hours_ago=2))
    assert told.verdicts == ["applied", "rejected"]
    assert told.posts["p"].author == "mina"


def test_eligible_by_any_edge_of_a_tie() -> None:
    """A post enters a feed through an edge by someone followed or befriended, and only through one."""
    told = oracle(post("p"), post("q"), tie("joel", "ada", "friend"), act("a", "ada", "p"), act("b", "joel", "q"))
    assert names(told) == ["p"]
    assert told.visible("joel", "q")


def test_interaction_waits_for_its_post() -> None:
    """A post without its post event is not shown, however many edges it has."""
    assert names(oracle(tie("joel", "ada"), act("a", "ada", "p"))) == []


@pytest.mark.parametrize(
    ("audience", "reader_says", "author_says", "expected"),
    [
        ("everyone", "none", "none", True),
        ("followers", "none", "friend", False),
        ("followers", "follow", "none", True),
        ("followers", "friend", "none", True),
        ("friends", "friend", "follow", False),
        ("friends", "none", "friend", True),
        ("nobody", "friend", "friend", False),
        ("everyone", "mute", "none", False),
        ("everyone", "block", "none", False),
        ("everyone", "follow", "block", False),
        ("everyone", "follow", "mute", True),
    ],
)
def test_audience(*, audience: str, reader_says: str, author_says: str, expected: bool) -> None:
    """Who may see a post follows from its audience and from what both sides declared."""
    told = oracle(
        post("p", audience=audience),
        tie("joel", "mina", reader_says),
        tie("mina", "joel", author_says),
        tie("joel", "ada"),
        act("a", "ada", "p"),
    )
    assert names(told) == (["p"] if expected else [])


def test_own_posts_are_left_out() -> None:
    """A reader's own post is not shown even when a tie comments on it."""
    assert names(oracle(post("p", "joel"), tie("joel", "ada"), act("a", "ada", "p"))) == []


def test_withdraw_is_final() -> None:
    """Anyone may withdraw a post, before or after it, and nothing brings it back."""
    for hours_ago in (2, 0):
        told = oracle(tie("joel", "mina"), event("withdraw", "bea", hours_ago, post="p"), post("p", hours_ago=1))
        assert names(told) == []
    told = oracle(tie("joel", "mina"), event("withdraw", "bea", 3, post="p"), event("erase", "bea", 2), post("p"))
    assert names(told) == []


def test_retract_counts_nowhere() -> None:
    """A retracted interaction leaves score, eligibility and affinity; only its actor can take it back."""
    told = [post("p"), tie("joel", "ada"), act("a", "ada", "p"), post("q", "bea"), act("b", "joel", "q")]
    stays = oracle(*told, event("retract", "joel", 5, event="a"), event("retract", "mina", 5, event="b"))
    assert names(stays) == ["p"]
    assert stays.affinity("joel", "bea", NOW_MS) == pytest.approx(0.52, rel=1e-15)
    gone = oracle(event("retract", "ada", 5, event="a"), event("retract", "joel", 5, event="b"), *told)
    assert names(gone) == []
    assert gone.score("joel", "p", NOW_MS) == pytest.approx(0.06, rel=1e-15)
    assert gone.affinity("joel", "bea", NOW_MS) == 0.02


def test_retract_of_other_types_has_no_effect() -> None:
    """Retracting a post or a tie changes nothing."""
    events = [post("p") | {"id": "one"}, tie("joel", "mina", event_id="two")]
    told = oracle(*events, event("retract", "mina", 1, event="one"), event("retract", "joel", 1, event="two"))
    assert names(told) == ["p"]


def test_erase_takes_out_what_came_before() -> None:
    """An erase removes a person's posts, edges and ties up to its time, and none after it."""
    told = oracle(
        post("old", hours_ago=5),
        post("new", hours_ago=3),
        post("other", "bea", hours_ago=9),
        act("a", "mina", "other", hours_ago=4),
        act("b", "mina", "other", hours_ago=3.5),
        tie("mina", "bea", hours_ago=6),
        tie("joel", "mina", hours_ago=3),
        tie("ada", "mina", hours_ago=5),
        event("erase", "mina", 4),
        event("erase", "mina", 8),
    )
    assert set(told.posts) == {"new", "other"}
    assert [edge.at_ms for edge in told.edges if edge.actor == "mina"] == [at(3), at(3.5)]
    assert told.relation("mina", "bea") == "none"
    assert names(told) == ["new", "other"]
    assert names(told, "ada") == []


def test_erase_and_others_interactions() -> None:
    """Others' earlier interactions stay edges if the post comes back, but no longer count in affinity."""
    told = oracle(
        post("p", hours_ago=36),
        act("a", "joel", "p", hours_ago=24),
        act("b", "bea", "p", hours_ago=24),
        event("erase", "mina", 20),
        post("p", hours_ago=12),
    )
    assert told.affinity("joel", "mina", NOW_MS) == 0.02
    # 0.02 * 3 * 1/2 + 0.02 * 1 * 1/4, the reader's own edge counts 0
    assert told.score("joel", "p", NOW_MS) == pytest.approx(0.035, rel=1e-15)
    later = oracle(post("p", hours_ago=12), act("a", "joel", "p"), event("erase", "mina", 20))
    assert later.affinity("joel", "mina", NOW_MS) == 0.52


def test_erase_takes_out_a_retract() -> None:
    """An interaction later than an erase stands when the retract of it was erased."""
    told = oracle(
        post("p"), act("a", "bea", "p", hours_ago=1), event("retract", "bea", 3, event="a"), event("erase", "bea", 2)
    )
    assert told.score("joel", "p", NOW_MS) == pytest.approx(0.06 + 0.02 * 2 ** (-1 / 12), rel=1e-15)


def test_seen_factor() -> None:
    """A seen post keeps the factor until somebody followed adds a newer edge."""
    events = [post("p", hours_ago=12), tie("joel", "mina"), event("seen", "joel", 6, posts=["x", "p"])]
    assert oracle(*events).score("joel", "p", NOW_MS) == 0.375
    assert oracle(*events, act("a", "ada", "p")).seen_factor("joel", "p") == 0.25
    assert oracle(*events, act("a", "mina", "p", hours_ago=6)).seen_factor("joel", "p") == 0.25
    assert oracle(*events, act("a", "mina", "p", hours_ago=5)).seen_factor("joel", "p") == 1.0
    assert oracle(*events, seen={}).seen_factor("joel", "p") == 1.0
    assert oracle(*events, event("erase", "joel", 6)).seen_factor("joel", "p") == 1.0


def test_order_of_ties() -> None:
    """Equal scores go newest first, then by id as bytes; newest order needs no scores."""
    made = [post(name, hours_ago=1) for name in ("b", "é", "B", "z")] + [post("old", hours_ago=2)]
    late = [act("a", "mina", "old", "comment.photo"), tie("joel", "mina")]
    told = oracle(*made, *late)
    assert names(told) == ["old", "B", "b", "z", "é"]
    assert told.feed("joel", 3, NOW_MS, "newest") == [("B", None), ("b", None), ("z", None)]
    tied = oracle(*made, *late, weights={"post": 0, "comment": 0})
    assert names(tied) == ["B", "b", "z", "é", "old"]


def test_ties_end_at_ten_digits() -> None:
    """Scores that differ in the eleventh digit are a tie, in the ninth they are not."""
    ranked = oracle(post("x", hours_ago=2), post("y", hours_ago=1))._ranked
    assert [name for name, _ in ranked({"x": 1 + 5e-11, "y": 1.0})] == ["y", "x"]
    assert [name for name, _ in ranked({"x": 1 + 5e-9, "y": 1.0})] == ["x", "y"]


def test_parts_name_ties_interactions_and_crowd() -> None:
    """Parts list edges by known people one by one and the crowd's as one sum."""
    told = oracle(
        post("p", hours_ago=12),
        tie("joel", "mina", "friend"),
        post("q", "ada"),
        act("a", "joel", "q", "like"),
        act("b", "ada", "p"),
        act("c", "bea", "p"),
        act("d", "cleo", "p", "like"),
        act("e", "joel", "p"),
    )
    parts = told.parts("joel", "p", NOW_MS)
    assert [part["source"] for part in parts] == ["tie", "interaction", "self", "crowd"]
    # 2.5 * 3 * 1/2, 0.12 * 1, own edge 0, 0.02 * 1.5
    assert [part["product"] for part in parts] == pytest.approx([3.75, 0.12, 0.0, 0.03], rel=1e-15)
    assert parts[-1]["sum"] == 1.5


def test_policies_share_one_state() -> None:
    """Another policy ranks the same accepted events."""
    told = oracle(post("p", hours_ago=24), tie("joel", "mina"))
    slow = told.with_policy(POLICY | {"freshness": {"curve": "half_life", "half_life": "1d"}})
    assert (told.score("joel", "p", NOW_MS), slow.score("joel", "p", NOW_MS)) == (0.75, 1.5)


def test_same_feed_allows_only_equal_scores_to_swap() -> None:
    """The comparison lets equal scores swap and refuses any other difference."""
    due = [("a", 2.0), ("b", 1.0 + 1e-12), ("c", 1.0), ("d", 0.5)]
    assert_same_feed(due, [("a", 2.0), ("c", 1.0), ("b", 1.0), ("d", 0.5)])
    assert_same_feed(due, [("a", 2.0), ("c", 1.0)], k=2)
    wrong: list[list[tuple[str, float | None]]] = [
        [("b", 1.0), ("a", 2.0), ("c", 1.0), ("d", 0.5)],
        [("a", 2.0), ("b", 1.0), ("c", 1.0)],
        [("a", 2.0), ("b", 1.0), ("c", 1.0), ("e", 0.5)],
        [("a", 2.0), ("b", 1.0), ("b", 1.0), ("d", 0.5)],
        [("a", 2.0), ("b", 1.0), ("c", 1.0), ("d", 0.500001)],
        [("a", None), ("b", None), ("c", None), ("d", None)],
    ]
    for actual in wrong:
        with pytest.raises(AssertionError):
            assert_same_feed(due, actual)
    with pytest.raises(AssertionError):
        assert_same_feed([("a", None), ("b", None)], [("b", None), ("a", None)])


def test_tie_order_is_exact_for_equal_scores() -> None:
    """Exactly equal scores must stand in exactly the expected order."""
    assert_tie_order([("a", 1.0), ("b", 1.0)], [("a", 1.0 - 1e-15), ("b", 1.0)])
    with pytest.raises(AssertionError):
        assert_tie_order([("a", 1.0), ("b", 1.0)], [("b", 1.0), ("a", 1.0)])


@pytest.mark.parametrize("seed", range(20))
def test_parts_add_up_in_random_worlds(seed: int) -> None:
    """In dense worlds the parts times the factor are the score, for every reader and post."""
    world = random_world(seed)
    told = world.oracle()
    for reader in world.people:
        for name, score in told.feed(reader, None, NOW_MS + DAY_MS):
            products = [part["product"] for part in told.parts(reader, name, NOW_MS + DAY_MS)]
            total = sum(products) * told.seen_factor(reader, name)
            assert score == pytest.approx(total, rel=1e-12, abs=1e-15)


@given(st.data())
def test_any_arrival_ends_in_the_same_feeds(data: st.DataObject) -> None:
    """Shuffled, repeated and batched events give the same feeds to every reader."""
    world = data.draw(worlds())
    batches = data.draw(schedules(world.events))
    arrived = [event for batch in batches for event in batch]
    again = Oracle.from_events(arrived, NOW_MS, policy=world.policy)
    for reader in world.people:
        assert_same_feed(world.oracle().feed(reader, None, NOW_MS), again.feed(reader, None, NOW_MS), 1e-12)


@given(policies())
def test_policy_text_reads_back(policy: dict[str, Any]) -> None:
    """The text of a drawn policy is the same document."""
    assert tomllib.loads(World(policy, [], (), ()).policy_toml) == policy


def test_random_worlds_are_dense() -> None:
    """Twenty seeded worlds hold every verdict and type, seen posts, erased people and feeds of several posts."""
    made = [random_world(seed) for seed in range(20)]
    told = [world.oracle() for world in made]
    assert {verdict for each in told for verdict in each.verdicts} == {"applied", "expired", "rejected"}
    assert {event["type"] for world in made for event in world.events} == {
        "post", "interaction", "tie", "retract", "withdraw", "seen", "erase"
    }  # fmt: skip
    sizes = [len(each.feed(r, None, NOW_MS)) for world, each in zip(made, told, strict=True) for r in world.people]
    assert sum(size >= 3 for size in sizes) > len(sizes) // 5
    assert sum(bool(each.erased_at) for each in told) > 10


def test_worlds_and_schedules_repeat_from_a_seed() -> None:
    """The same seed gives the same world, and a schedule loses no event."""
    world = random_world(7)
    assert world == random_world(7)
    batches = random_schedule(Random(7), world.events)
    assert {event["id"] for batch in batches for event in batch} == {event["id"] for event in world.events}
    assert batches == random_schedule(Random(7), world.events)
