"""The scripts that pack nothing with a library, answer by answer: the same on the fake store and on a real server."""

import struct
from collections.abc import Iterator
from itertools import permutations
from typing import Any

import fakeredis
import pytest
import redis

from service.store import calls, keys, pieces, scripts
from service.store.calls import Call, Creation, Effect, NewEdge, NewEvent, StoreLimits, TieWrite
from service.store.pieces import stamp
from tests.lua import globals_of

NOW_MS = 1_777_885_200_000
DAY_MS = 86_400_000
OLDEST_MS = NOW_MS - 30 * DAY_MS
LIMITS = StoreLimits(31 * DAY_MS, 30 * DAY_MS, struct.pack("<d", 3_600_000.0), 1, row_edges=4, ties=2, seen_posts=3)
NOBODY = bytes(8)
RETRACTED = 1 << 15
SEQ = NOW_MS * 1000

MINA, JOEL, ADA = (bytes([7, 0xFF, number]) + b"person"[:5] for number in (1, 2, 3))
BED, PLOT, SHED = (bytes([9, number]) + b"post.."[:6] for number in (0x41, 0x7F, 0xC3))
E1, E2, E3 = (bytes([number]) + b"eventid" for number in (0x80, 0x0A, 0xFE))


class Store:
    """A store that runs calls, and looks at keys."""

    def __init__(self, client: redis.Redis) -> None:
        self.client: Any = client

    def run(self, call: Call) -> Any:
        """Run a stub's call."""
        if call.script is None:
            return self.client.execute_command(*call.args)
        return self.client.eval(call.script.source, len(call.keys), *call.keys, *call.args)

    def person(self, name: str, person: bytes = MINA) -> bytes:
        """Read a person's string, empty where there is none."""
        return self.client.get(keys.key(name, person)) or b""

    def relations(self, name: str, person: bytes) -> dict[bytes, bytes]:
        """Read a person's relations."""
        found: dict[bytes, bytes] = self.client.hgetall(keys.key(name, person))
        return found

    def outbox(self) -> list[bytes]:
        """List what is outstanding."""
        members: list[bytes] = self.client.zrange(keys.outbox(7), 0, -1)
        return members

    def life_ms(self, name: str, person: bytes = MINA) -> int:
        """Tell what is left of a key's life, -1 for good."""
        life: int = self.client.pttl(keys.key(name, person))
        return life


@pytest.fixture(params=["fake", "real"])
def store(request: pytest.FixtureRequest) -> Iterator[Store]:
    if request.param == "fake":
        yield Store(fakeredis.FakeRedis(version=(7,)))
        return
    with redis.Redis.from_url(request.getfixturevalue("redis_db")) as client:
        yield Store(client)


def event(id_hash: bytes = E1, at_ms: int = NOW_MS, person: bytes = MINA, name: str = "mina") -> NewEvent:
    return NewEvent(person, name, id_hash, at_ms, b"<" + id_hash + b">")


def edge(id_hash: bytes, post: bytes = BED, at_ms: int = NOW_MS, code: int = 5) -> NewEdge:
    return NewEdge(id_hash, post + stamp(at_ms, code), b"<" + id_hash + b">")


def take(*edges: NewEdge, person: bytes = MINA, name: str = "mina", now_ms: int = NOW_MS) -> Call:
    return calls.take_interactions(7, now_ms, LIMITS, [(person, name, edges)])


def tie(event_id: str, relation: int, at_ms: int = NOW_MS, source: bytes = MINA) -> TieWrite:
    return TieWrite(source, JOEL, "joel", at_ms, relation, event_id)


def effect(seq: int, low: int = 0) -> Effect:
    return Effect(7, "t", seq, low)


def test_which_scripts_need_the_real_server() -> None:
    """Only scripts that read or write a post's value need the packing library, which the fake store lacks."""
    packing = [name for name in scripts.names() if "struct" in globals_of(scripts.load(name).source)[0]]
    assert packing == ["add_edges", "bulk_add_edges", "purge_posts", "put_posts", "withdraw_post"]


def test_an_event_is_taken_once(store: Store) -> None:
    """It gets a number, is remembered, and its repetition finds it outstanding until it is settled."""
    assert store.run(calls.take_event(event(), NOW_MS, LIMITS)) == [0, SEQ, SEQ - 1, []]
    assert store.outbox() == [b"%d<%b>" % (SEQ, E1)]
    assert store.person("name") == b"mina"
    assert store.person("heard") == E1 + stamp(NOW_MS, 0)
    assert 0 < store.life_ms("heard") <= LIMITS.ttl_ms
    assert store.run(calls.take_event(event(), NOW_MS, LIMITS)) == [1, 0, SEQ - 1, [b"%d<%b>" % (SEQ, E1)]]
    assert store.run(calls.close_entry(7, SEQ)) == 1
    assert store.run(calls.close_entry(7, SEQ)) == 0
    assert store.run(calls.take_event(event(), NOW_MS, LIMITS)) == [1, 0, 0, []]


def test_numbers_never_run_backwards(store: Store) -> None:
    """A number is one more than the last, even where the clock went back, and the low mark waits for what is open."""
    store.run(calls.take_event(event(E1), NOW_MS, LIMITS))
    assert store.run(calls.take_event(event(E2), NOW_MS - 5_000, LIMITS)) == [0, SEQ + 1, SEQ - 1, []]
    store.run(calls.close_entry(7, SEQ))
    assert store.run(calls.take_event(event(E3), NOW_MS + 1, LIMITS)) == [0, SEQ + 1000, SEQ, []]


def test_what_an_event_depends_on_comes_first(store: Store) -> None:
    """Outstanding entries that hold the bytes asked for are returned, others are not."""
    store.run(calls.take_event(event(E1), NOW_MS, LIMITS))
    store.run(calls.take_event(event(E2), NOW_MS, LIMITS))
    first, second = event(E3), event(b"another ")
    answer = store.run(calls.take_posts(7, NOW_MS, LIMITS, [(first, E1), (second, E3)]))
    assert answer == [
        [0, SEQ + 2, SEQ - 1, [b"%d<%b>" % (SEQ, E1)]],
        [0, SEQ + 3, SEQ - 1, [b"%d<%b>" % (SEQ + 2, E3)]],
    ]
    again = store.run(calls.take_posts(7, NOW_MS, LIMITS, [(first, E1)]))
    assert again == [[1, 0, SEQ - 1, [b"%d<%b>" % (SEQ + 2, E3)]]]


def test_who_may_not_act(store: Store) -> None:
    """An erased person's past is refused with 2, unless it lasts; another id with the same hash with 3."""
    store.run(calls.take_erase(event(E1), NOW_MS, LIMITS))
    assert store.run(calls.take_event(event(E2), NOW_MS, LIMITS)) == [2, 0, 0, []]
    assert store.run(calls.take_event(event(E2), NOW_MS, LIMITS, lasting=True))[0] == 0
    assert store.run(calls.take_event(event(E3, NOW_MS + 1), NOW_MS, LIMITS))[0] == 0
    assert store.run(calls.take_event(event(b"another ", NOW_MS + 1, name="Mina"), NOW_MS, LIMITS)) == [3, 0, 0, []]
    assert store.run(take(edge(b"another "), name="Mina"))[0] == [3]
    assert store.run(calls.take_erase(event(b"another ", NOW_MS + 1, name="Mina"), NOW_MS, LIMITS))[0] == 3
    assert store.run(calls.take_seen(event(b"another ", NOW_MS + 1, name="Mina"), NOW_MS, LIMITS, [BED])) == 3
    assert store.run(calls.take_retract(event(b"another ", NOW_MS + 1, name="Mina"), NOW_MS, LIMITS, E1))[0] == 3


def test_limits_of_one_person(store: Store) -> None:
    """Where the row is full, or so many ties stand, an event is refused with 4; a tie that stands may change."""
    numbers = [bytes([number]) * 8 for number in range(1, 6)]
    assert store.run(take(*map(edge, numbers)))[0] == [0, 0, 0, 0, 4]
    post = (event(b"another "), PLOT)
    assert store.run(calls.take_posts(7, NOW_MS, LIMITS, [post])) == [[4, 0, 0, []]]
    for target in (JOEL, ADA):
        store.client.hset(keys.key("tie", MINA), target, stamp(NOW_MS, 1) + b"e")
        store.client.append(keys.key("out", MINA), target + stamp(NOW_MS, 1))
    assert store.run(calls.take_event(event(), NOW_MS, LIMITS, tie_target=BED)) == [4, 0, 0, []]
    assert store.run(calls.take_event(event(), NOW_MS, LIMITS, tie_target=ADA))[0] == 0


def test_interactions_go_into_the_row(store: Store) -> None:
    """New ones are appended in order of arrival, repeated ones not, and the authors are filled in when they settle."""
    answer = store.run(take(edge(E1), edge(E2, PLOT, NOW_MS - 9), edge(E1)))
    assert answer == [[0, 0, 1], SEQ, SEQ - 1, []]
    assert store.person("row") == BED + stamp(NOW_MS, 5) + PLOT + stamp(NOW_MS - 9, 5)
    assert store.person("ids") == E1 + E2
    assert store.person("who") == NOBODY * 2
    member = b"%d<%b><%b>" % (SEQ, E1, E2)
    assert store.run(take(edge(E2, PLOT)))[3] == [member]
    assert store.run(calls.settle_interactions(7, SEQ, [(MINA, [(E1, b""), (E2, JOEL)])])) == 1
    assert store.run(calls.settle_interactions(7, SEQ, [(MINA, [(E1, ADA)])])) == 0
    assert store.person("who") == NOBODY + JOEL
    assert store.run(calls.learn_author(MINA, BED, ADA)) == 1
    assert store.run(calls.learn_author(MINA, BED, JOEL)) == 0
    assert store.person("who") == ADA + JOEL


def test_an_interaction_that_its_post_refused_counts_nowhere(store: Store) -> None:
    """Its edge is flagged, and its id is forgotten: sent again it is judged again."""
    store.run(take(edge(E1), edge(E2)))
    store.run(calls.settle_interactions(7, SEQ, [(MINA, [(E1, b"-"), (E2, JOEL)])]))
    assert store.person("row") == BED + stamp(NOW_MS, 5 | RETRACTED) + BED + stamp(NOW_MS, 5)
    assert store.run(take(edge(E1), edge(E2)))[0] == [0, 1]


def test_rows_lose_what_retention_lets_go(store: Store) -> None:
    """The oldest edges leave all three lists, which keep their lifetime also where nothing new is taken."""
    store.run(take(edge(E1, at_ms=OLDEST_MS), edge(E2, PLOT)))
    store.run(take(edge(E2, PLOT), now_ms=NOW_MS + 1))
    assert store.person("row") == PLOT + stamp(NOW_MS, 5)
    assert store.person("ids") == E2
    assert store.person("who") == NOBODY
    for name in ("row", "ids", "who"):
        assert 0 < store.life_ms(name) <= LIMITS.ttl_ms


def test_a_retract_after_its_interaction(store: Store) -> None:
    """The edge is flagged in the row, and goes to the outbox as it was, after all that is outstanding."""
    store.run(take(edge(E1), edge(E2, PLOT)))
    answer = store.run(calls.take_retract(event(E3), NOW_MS, LIMITS, E2))
    plain = PLOT + stamp(NOW_MS, 5)
    assert answer == [0, 0, SEQ - 1, [b"%d<%b><%b>" % (SEQ, E1, E2), b"%d<%b>%b" % (SEQ + 1, E3, plain)]]
    assert store.person("row") == BED + stamp(NOW_MS, 5) + PLOT + stamp(NOW_MS, 5 | RETRACTED)
    assert store.run(calls.take_retract(event(b"again   "), NOW_MS, LIMITS, E2)) == [0, 0, 0, []]


def test_a_retract_before_its_interaction(store: Store) -> None:
    """The word is kept under its latest time; the interaction is then taken (5) and goes nowhere else."""
    store.run(calls.take_retract(event(E1, NOW_MS - 5), NOW_MS, LIMITS, E3))
    store.run(calls.take_retract(event(E2, NOW_MS - 9), NOW_MS, LIMITS, E3))
    assert store.person("undo") == E3 + stamp(NOW_MS - 5, 0)
    assert store.run(take(edge(E3))) == [[5], 0, 0, []]
    assert store.person("row") == BED + stamp(NOW_MS, 5 | RETRACTED)
    assert store.outbox() == []


def test_a_retract_by_somebody_else_does_nothing(store: Store) -> None:
    """Another person's word is kept on that person's side only."""
    store.run(take(edge(E1)))
    assert store.run(calls.take_retract(event(E2, person=JOEL, name="joel"), NOW_MS, LIMITS, E1)) == [0, 0, 0, []]
    assert store.person("row") == BED + stamp(NOW_MS, 5)


@pytest.mark.parametrize("order", list(permutations(range(4))))
def test_seen_posts_are_bounded_and_in_order(store: Store, order: tuple[int, ...]) -> None:
    """Whatever the order of arrival, the newest posts stay, by time and on equal times by the bytes of their hashes."""
    events = [(E1, 0, [BED, SHED]), (E2, 0, [PLOT]), (E3, -9, [MINA, BED]), (b"fourth..", -5, [ADA, SHED])]
    for place in order:
        id_hash, ago_ms, posts = events[place]
        assert store.run(calls.take_seen(event(id_hash, NOW_MS + ago_ms), NOW_MS, LIMITS, posts)) == 0
    assert store.person("seen") == b"".join(post + stamp(NOW_MS, 0) for post in (BED, PLOT, SHED))
    assert store.run(calls.take_seen(event(E1), NOW_MS, LIMITS, [ADA])) == 1


def test_an_erasure_closes_the_door(store: Store) -> None:
    """It answers with all that is outstanding, itself last; one that covers less has nothing to do."""
    store.run(calls.take_event(event(E1), NOW_MS, LIMITS))
    mine = b"%d<%b>" % (SEQ + 1, E2)
    answer = store.run(calls.take_erase(event(E2, NOW_MS - 5), NOW_MS, LIMITS))
    assert answer == [0, 0, SEQ - 1, [b"%d<%b>" % (SEQ, E1), mine]]
    assert store.person("erased") == b"%d" % (NOW_MS - 5)
    assert store.run(calls.take_erase(event(E2, NOW_MS - 5), NOW_MS, LIMITS)) == [1, 0, SEQ - 1, [mine]]
    assert store.run(calls.take_erase(event(E3, NOW_MS - 6), NOW_MS, LIMITS)) == [1, 0, SEQ - 1, []]
    assert store.person("erased") == b"%d" % (NOW_MS - 5)


@pytest.mark.parametrize(("lesser", "greater"), [("B", "a"), ("z", "é"), ("e1", "e10"), ("é", "🌱"), ("Z", "_")])
@pytest.mark.parametrize("turned", [False, True])
def test_on_equal_times_the_greater_id_stands(store: Store, lesser: str, greater: str, *, turned: bool) -> None:
    """Event ids are compared byte by byte, however a language would order them, on both sides of a tie."""
    ties = [tie(lesser, 4), tie(greater, 1)]
    for seq, one in enumerate(reversed(ties) if turned else ties, 1):
        store.client.zadd(keys.outbox(7), {f"{seq:016}": seq})
        assert store.run(calls.put_incoming(effect(seq), one, OLDEST_MS, marked=one.relation == 4)) == 0
        assert store.run(calls.put_outgoing(seq, one, OLDEST_MS)) == 1
    stands = stamp(NOW_MS, 1) + greater.encode()
    assert store.relations("in", JOEL) == {MINA: stands}
    assert store.relations("tie", MINA) == {JOEL: stands}
    assert store.person("out", MINA) == JOEL + stamp(NOW_MS, 1)
    assert store.person("mark", JOEL) == b""


def test_none_stands_against_what_came_before_it(store: Store) -> None:
    """A later `none` empties the lists, and its trace keeps an earlier relation out that arrives after it."""
    for seq, one in enumerate([tie("e1", 2, NOW_MS - 9), tie("e2", 0), tie("e3", 2, NOW_MS - 1)], 1):
        store.client.zadd(keys.outbox(7), {f"{seq:016}": seq})
        store.run(calls.put_incoming(effect(seq), one, OLDEST_MS, marked=one.relation == 2))
        store.run(calls.put_outgoing(seq, one, OLDEST_MS))
    assert store.relations("in", JOEL) == {MINA: stamp(NOW_MS, 0) + b"e2"}
    assert store.relations("tie", MINA) == {JOEL: stamp(NOW_MS, 0) + b"e2"}
    assert store.client.exists(keys.key("out", MINA), keys.key("mark", JOEL)) == 0


def test_traces_of_none_leave_after_retention(store: Store) -> None:
    """Among many traces those older than retention leave, newer ones and relations that stand do not."""
    old, new, standing = ({bytes([kind, number]) * 4: stamp(at_ms, code) + b"e" for number in range(40)}
        for kind, at_ms, code in ((1, OLDEST_MS - 1, 0), (2, OLDEST_MS, 0), (3, OLDEST_MS - 1, 1)))  # fmt: skip
    store.client.hset(keys.key("tie", MINA), mapping=old | new | standing)
    store.client.zadd(keys.outbox(7), {f"{1:016}": 1})
    store.run(calls.put_outgoing(1, tie("e1", 1), OLDEST_MS))
    assert store.relations("tie", MINA) == new | standing | {JOEL: stamp(NOW_MS, 1) + b"e1"}


def test_traces_of_none_leave_the_other_side_too(store: Store) -> None:
    """Writes by and by remove traces older than retention, and nothing else, from the target's side."""
    old, new, standing = ({bytes([kind, number]) * 4: stamp(at_ms, code) + b"e" for number in range(20)}
        for kind, at_ms, code in ((1, OLDEST_MS - 1, 0), (2, OLDEST_MS, 0), (3, OLDEST_MS - 1, 1)))  # fmt: skip
    store.client.hset(keys.key("in", JOEL), mapping=old | new | standing)
    for seq in range(1, 200):
        store.run(calls.put_incoming(effect(seq), tie(f"e{seq:03}", 1, NOW_MS + seq), OLDEST_MS, marked=False))
    assert store.relations("in", JOEL) == new | standing | {MINA: stamp(NOW_MS + 199, 1) + b"e199"}


def test_a_far_effect_is_let_through_once(store: Store) -> None:
    """A number that was applied, or lies below what is settled, changes nothing; numbers may come in any order."""
    for seq, relation in ((3, 1), (2, 4), (3, 2)):
        one = tie(f"e{seq}{relation}", relation, NOW_MS + relation)
        assert store.run(calls.put_incoming(effect(seq, 1), one, OLDEST_MS, marked=False)) == 0
    assert store.relations("in", JOEL) == {MINA: stamp(NOW_MS + 4, 4) + b"e24"}
    assert sorted(store.client.hget(keys.applied(7), b"7t").split(b",")) == [b"1", b"2", b"3"]
    store.run(calls.put_incoming(effect(9, 5), tie("e9", 3, NOW_MS + 9), OLDEST_MS, marked=False))
    assert store.client.hget(keys.applied(7), b"7t") == b"5,9"
    store.run(calls.put_incoming(effect(4, 5), tie("e99", 2, NOW_MS + 99), OLDEST_MS, marked=False))
    assert store.relations("in", JOEL) == {MINA: stamp(NOW_MS + 9, 3) + b"e9"}


def test_a_tie_to_somebody_who_cannot_take_it(store: Store) -> None:
    """A tie up to the target's erasure is refused with 2, one to another id with the target's hash with 3."""
    store.run(calls.take_erase(event(E1, NOW_MS, JOEL, "joel"), NOW_MS, LIMITS))
    assert store.run(calls.put_incoming(effect(1), tie("e1", 1), OLDEST_MS, marked=False)) == 2
    assert store.run(calls.put_incoming(effect(1), tie("e1", 1, NOW_MS + 1), OLDEST_MS, marked=False)) == 0
    other = TieWrite(MINA, JOEL, "Joel", NOW_MS + 2, 1, "e2")
    assert store.run(calls.put_incoming(effect(2), other, OLDEST_MS, marked=False)) == 3
    assert store.life_ms("name", JOEL) == -1


def test_an_erased_person_leaves_the_relations_of_others(store: Store) -> None:
    """What was declared up to the erasure goes from hash and list, once; what is newer stays."""
    for seq, (one, source) in enumerate([(2, MINA), (4, ADA)], 1):
        store.run(calls.put_incoming(effect(seq), tie("e", one, NOW_MS + seq, source), OLDEST_MS, marked=True))
    drop = calls.drop_relation(Effect(7, "i", 1, 0), 7, ("in", "mark"), [JOEL, ADA], MINA, NOW_MS + 1)
    assert store.run(drop) == 1
    assert store.run(drop) == 0
    assert store.relations("in", JOEL) == {ADA: stamp(NOW_MS + 2, 4) + b"e"}
    assert store.person("mark", JOEL) == ADA + stamp(NOW_MS + 2, 4)
    assert store.run(calls.drop_relation(Effect(7, "i", 2, 0), 7, ("in", "mark"), [JOEL], ADA, NOW_MS + 1)) == 0
    assert store.run(calls.drop_relation(Effect(7, "i", 3, 0), 7, ("in", "mark"), [JOEL], ADA, NOW_MS + 2)) == 1
    assert store.client.exists(keys.key("in", JOEL), keys.key("mark", JOEL)) == 0


def test_a_refused_event_is_forgotten(store: Store) -> None:
    """Closing its entry takes it out of what was heard, which keeps its lifetime; it may be sent again."""
    store.run(calls.take_event(event(E1), NOW_MS, LIMITS))
    store.run(calls.take_event(event(E2), NOW_MS, LIMITS))
    assert store.run(calls.settle_event(MINA, SEQ, E1)) == 1
    assert store.person("heard") == E2 + stamp(NOW_MS, 0)
    assert store.life_ms("heard") > 0
    assert store.run(calls.take_event(event(E1), NOW_MS, LIMITS))[0] == 0


def test_a_creation_edge_is_written_and_moved(store: Store) -> None:
    """While its entry is open it goes into the author's row, later to its earliest time in the same place."""
    code = 3 | 1 << 14

    def store_edge(person: bytes, seq: int, edge: bytes, now_ms: int, limits: StoreLimits) -> Call:
        return calls.put_creations(7, now_ms, limits, [Creation(person, seq, edge)])

    assert store.run(store_edge(MINA, SEQ, BED + stamp(NOW_MS, code), NOW_MS, LIMITS)) == [0]
    store.run(calls.take_event(event(E1), NOW_MS, LIMITS))
    store.run(take(edge(E2)))
    assert store.run(store_edge(MINA, SEQ, BED + stamp(NOW_MS, code), NOW_MS, LIMITS)) == [1]
    assert store.run(store_edge(MINA, SEQ, BED + stamp(NOW_MS - 7, code), NOW_MS, LIMITS)) == [1]
    assert store.person("row") == BED + stamp(NOW_MS, 5) + BED + stamp(NOW_MS - 7, code)
    assert store.person("ids") == E2 + NOBODY
    assert store.person("who") == NOBODY + MINA
    assert store.run(store_edge(MINA, SEQ, PLOT + stamp(OLDEST_MS - 1, code), NOW_MS, LIMITS)) == [0]
    assert store.person("posts") == BED + stamp(NOW_MS - 7, code) + PLOT + stamp(OLDEST_MS - 1, code)
    assert LIMITS.ttl_ms < store.life_ms("posts") <= 13 * LIMITS.ttl_ms


def test_kinds_keep_their_codes(store: Store) -> None:
    """Codes are given in order, a known kind keeps its own, and past the limit there are none."""
    assert store.run(calls.register_kinds(["like", "share"], 3)) == 2
    assert store.run(calls.register_kinds(["share", "hide", "comment"], 3)) == 1
    assert store.client.hgetall(keys.KINDS) == {b"like": b"0", b"share": b"1", b"hide": b"2"}


def test_a_board_keeps_its_greatest_posts(store: Store) -> None:
    """What leaves lies at or below the floor, and the floor never sinks."""
    store.client.zadd(keys.board(2), {b"%d" % mark: mark + 0.125 for mark in range(6)})
    assert store.run(calls.trim_board(2, 6)) == 0
    assert store.client.get(keys.floor(2)) is None
    assert store.run(calls.trim_board(2, 2)) == 4
    assert store.client.zrange(keys.board(2), 0, -1, withscores=True) == [(b"4", 4.125), (b"5", 5.125)]
    assert store.client.get(keys.floor(2)) == b"3.125"
    store.client.zadd(keys.board(2), {b"0": 0.5})
    assert store.run(calls.trim_board(2, 2)) == 1
    assert store.client.get(keys.floor(2)) == b"3.125"


def test_changes_are_numbered_without_gaps(store: Store) -> None:
    """Each entry of the change log stands under the next number, hashes in order of their bytes."""
    assert [store.run(calls.log_changes([MINA], [])), store.run(calls.log_changes([], [SHED, BED]))] == [1, 2]
    assert store.client.get(keys.CHANGED) == b"2"
    assert store.client.xrange(keys.CHANGES) == [
        (b"1-0", {b"people": MINA, b"posts": b""}),
        (b"2-0", {b"people": b"", b"posts": BED + SHED}),
    ]


def test_numbers_have_the_digits_that_entries_are_read_with(store: Store) -> None:
    """An outbox entry starts with a number of 16 digits, which pieces.py cuts off."""
    store.run(calls.take_event(event(), NOW_MS, LIMITS))
    assert len(str(SEQ)) == pieces.SEQ_DIGITS
