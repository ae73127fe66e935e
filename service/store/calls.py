"""A typed stub for each script: what it is handed, named, in the order the script's header gives."""

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from service.store import keys
from service.store.ids import bucket
from service.store.scripts import Script, load

Argument = bytes | str | int

LOGGED_EXPOSURES = 10_000
"""How many pages of feeds are kept in the log of exposures, about."""

LOGGED_CHANGES = 10_000
"""How many entries of the change log are kept; a worker further behind begins anew."""


@dataclass(frozen=True, slots=True)
class Call:
    """One command to run: a script with its keys and arguments, or a plain command where `script` is None."""

    script: Script | None
    keys: Sequence[bytes]
    args: Sequence[Argument]


@dataclass(frozen=True, slots=True)
class Effect:
    """The number under which an effect is applied once in each bucket.

    Args:
        source: bucket that the event was taken in.
        letter: which effect of the event; two effects of one event in one bucket have different letters.
        seq: number of the outbox entry.
        low: number up to which everything of the source bucket is settled.

    """

    source: int
    letter: str
    seq: int
    low: int

    def head(self) -> list[Argument]:
        """Give the arguments that every far script starts with."""
        return [f"{self.source}{self.letter}", self.seq, self.low]


@dataclass(frozen=True, slots=True)
class StoreLimits:
    """What the scripts need to know of the settings.

    Args:
        ttl_ms: lifetime of what retention bounds, milliseconds: retention and a day.
        retention_ms: age at which edges may be forgotten, milliseconds.
        half_lives: the bank, milliseconds, packed as doubles.
        bank_size: number of half-lives.
        row_edges: most edges a person may have within retention.
        ties: most ties a person may declare.
        seen_posts: most seen posts kept for a reader.
        other_events: most events that are no edges a person may have within retention.

    """

    ttl_ms: int
    retention_ms: int
    half_lives: bytes
    bank_size: int
    row_edges: int = 200_000
    ties: int = 20_000
    seen_posts: int = 2_000
    other_events: int = 100_000

    def oldest_ms(self, now_ms: int) -> int:
        """Give the time of the oldest event still kept."""
        return now_ms - self.retention_ms


@dataclass(frozen=True, slots=True)
class NewEdge:
    """An interaction on its way into its actor's row: id hash, packed edge and outbox piece."""

    id_hash: bytes
    edge: bytes
    piece: bytes


@dataclass(frozen=True, slots=True)
class NewEvent:
    """An event that is no edge: who did it, its id hash, time and outbox piece."""

    person: bytes
    person_id: str
    id_hash: bytes
    event_ms: int
    piece: bytes


@dataclass(frozen=True, slots=True)
class EdgeWork:
    """What one outbox entry changes in the sums of the posts of one bucket.

    Args:
        effect: lets it through once.
        posts: for each post its hash, its id ('' unknown) and the changes: 17 bytes each, `+` or `-` for an edge to add
            or to take away, its stamp, its actor's hash.

    """

    effect: Effect
    posts: Sequence[tuple[bytes, str, bytes]]


def take_interactions(
    number: int, now_ms: int, limits: StoreLimits, people: Iterable[tuple[bytes, str, Sequence[NewEdge]]]
) -> Call:
    """Append the new interactions of one bucket: for each person the hash, the id and the edges."""
    script_keys = [keys.seq(number), keys.outbox(number)]
    args: list[Argument] = [now_ms * 1000, limits.oldest_ms(now_ms), limits.ttl_ms, limits.row_edges]
    for person, person_id, edges in people:
        script_keys += [keys.key(name, person) for name in ("row", "ids", "who", "name", "erased", "undo", "heard")]
        args += [person_id, len(edges)]
        for edge in edges:
            args += [edge.id_hash, edge.edge, edge.piece]
    return Call(load("take_interactions"), script_keys, args)


def take_posts(number: int, now_ms: int, limits: StoreLimits, events: Sequence[tuple[NewEvent, bytes]]) -> Call:
    """Take the post events of one bucket, each with the hash of its post."""
    script_keys = [keys.seq(number), keys.outbox(number)]
    args: list[Argument] = [now_ms * 1000, limits.oldest_ms(now_ms), limits.ttl_ms, limits.row_edges]
    args.append(limits.other_events)
    for event, post in events:
        script_keys += [keys.key(name, event.person) for name in ("name", "erased", "ids", "heard", "row", "who")]
        args += [event.person_id, event.id_hash, event.event_ms, event.piece, post]
    return Call(load("take_posts"), script_keys, args)


def take_event(
    event: NewEvent, now_ms: int, limits: StoreLimits, *, tie_target: bytes = b"", lasting: bool = False
) -> Call:
    """Take a tie or a withdrawal.

    Args:
        event: the event.
        now_ms: now, Unix milliseconds.
        limits: the store's limits.
        tie_target: hash of the person whom a tie is about.
        lasting: an erasure of the person does not undo the event.

    """
    number, person = bucket(event.person), event.person
    script_keys = [keys.seq(number), keys.outbox(number)]
    script_keys += [keys.key(name, person) for name in ("name", "erased", "ids", "heard", "tie", "out")]
    args: list[Argument] = [now_ms * 1000, limits.oldest_ms(now_ms), limits.ttl_ms, event.person_id, event.id_hash]
    args += [event.event_ms, event.piece, limits.ties if tie_target else 0, tie_target]
    return Call(load("take_event"), script_keys, [*args, int(lasting), limits.other_events])


def take_retract(event: NewEvent, now_ms: int, limits: StoreLimits, target: bytes) -> Call:
    """Take back the interaction whose id hashes to `target`."""
    number, person = bucket(event.person), event.person
    script_keys = [keys.seq(number), keys.outbox(number)]
    script_keys += [keys.key(name, person) for name in ("name", "erased", "ids", "heard", "row", "undo")]
    args: list[Argument] = [now_ms * 1000, limits.oldest_ms(now_ms), limits.ttl_ms, event.person_id, event.id_hash]
    return Call(load("take_retract"), script_keys, [*args, event.event_ms, target, event.piece, limits.other_events])


def take_seen(event: NewEvent, now_ms: int, limits: StoreLimits, posts: Sequence[bytes]) -> Call:
    """Note seen posts."""
    script_keys = [keys.key(name, event.person) for name in ("name", "erased", "ids", "heard", "seen")]
    args: list[Argument] = [limits.oldest_ms(now_ms), limits.ttl_ms, event.person_id, event.id_hash, event.event_ms]
    return Call(load("take_seen"), script_keys, [*args, limits.seen_posts, limits.other_events, *posts])


def take_erase(event: NewEvent, now_ms: int, limits: StoreLimits) -> Call:
    """Close the door on a person's past."""
    number, person = bucket(event.person), event.person
    script_keys = [keys.seq(number), keys.outbox(number)]
    script_keys += [keys.key(name, person) for name in ("name", "erased", "heard")]
    args: list[Argument] = [now_ms * 1000, limits.ttl_ms, event.person_id, event.id_hash, event.event_ms, event.piece]
    return Call(load("take_erase"), script_keys, args)


def sweep_person(person: bytes, id_hash: bytes, until_ms: int, seq: int, now_ms: int, limits: StoreLimits) -> Call:
    """Take out a person's own state up to a time."""
    number = bucket(person)
    script_keys = [keys.seq(number), keys.outbox(number)]
    script_keys += [
        keys.key(name, person)
        for name in ("row", "ids", "who", "tie", "out", "in", "mark", "seen", "heard", "undo", "posts", "name")
    ]
    args: list[Argument] = [now_ms * 1000, until_ms, limits.ttl_ms, id_hash, person, seq]
    return Call(load("sweep_person"), script_keys, args)


def add_edges(number: int, now_ms: int, limits: StoreLimits, work: Sequence[EdgeWork]) -> Call:
    """Change the sums of the posts of one bucket, for several outbox entries at once."""
    script_keys = [keys.applied(number)]
    args: list[Argument] = [now_ms, limits.ttl_ms, limits.half_lives, len(work)]
    for entry in work:
        args += [*entry.effect.head(), len(entry.posts)]
    for entry in work:
        for post, post_id, changes in entry.posts:
            script_keys += keys.post_keys(post)
            args += [post_id, changes]
    return Call(load("add_edges"), script_keys, args)


@dataclass(frozen=True, slots=True)
class PostWrite:
    """What a post event says: texts as sent, codes as stored."""

    post: bytes
    post_id: str
    author: bytes
    author_id: str
    event_ms: int
    event_id: str
    audience: int
    form: str
    topics: str
    creation_code: int


def put_posts(number: int, now_ms: int, limits: StoreLimits, writes: Sequence[tuple[Effect, PostWrite]]) -> Call:
    """Write the records of posts of one bucket."""
    script_keys = [keys.applied(number)]
    args: list[Argument] = [now_ms, limits.ttl_ms, limits.half_lives]
    for effect, write in writes:
        script_keys += keys.post_keys(write.post)
        args += [*effect.head(), write.post_id, write.author_id, write.author, write.event_ms, write.event_id]
        args += [write.audience, write.form, write.topics, write.creation_code]
    return Call(load("put_posts"), script_keys, args)


def withdraw_post(effect: Effect, post: bytes, post_id: str, now_ms: int, limits: StoreLimits) -> Call:
    """Withdraw a post for good."""
    script_keys = [keys.applied(bucket(post)), keys.key("post", post)]
    args = [*effect.head(), limits.ttl_ms, limits.bank_size, post_id, now_ms]
    return Call(load("withdraw_post"), script_keys, args)


def purge_posts(
    effect: Effect, number: int, posts: Sequence[bytes], person: bytes, until_ms: int, now_ms: int, limits: StoreLimits
) -> Call:
    """Take an erased person's post events out of the posts of one bucket."""
    script_keys = [keys.applied(number), *keys.keys("post", list(posts))]
    args = [*effect.head(), limits.ttl_ms, limits.half_lives, until_ms, person, now_ms]
    return Call(load("purge_posts"), script_keys, args)


@dataclass(frozen=True, slots=True)
class Creation:
    """A creation edge on its way into its author's row, for the outbox entry with this number."""

    person: bytes
    seq: int
    edge: bytes


def put_creations(number: int, now_ms: int, limits: StoreLimits, creations: Sequence[Creation]) -> Call:
    """Write or move creation edges in the rows of one bucket's people."""
    script_keys = [keys.outbox(number)]
    args: list[Argument] = [limits.oldest_ms(now_ms), limits.ttl_ms]
    for one in creations:
        script_keys += [keys.key(name, one.person) for name in ("row", "ids", "who", "posts")]
        args += [one.seq, one.edge[:8], one.edge[8:], one.person]
    return Call(load("put_creations"), script_keys, args)


def learn_author(person: bytes, post: bytes, author: bytes) -> Call:
    """Fill in the author of a post in a row of one who was early."""
    return Call(load("learn_author"), [keys.key("row", person), keys.key("who", person)], [post, author])


def settle_interactions(number: int, seq: int, people: Iterable[tuple[bytes, Sequence[tuple[bytes, bytes]]]]) -> Call:
    """Close an entry of interactions: for each person the id hashes with the authors found."""
    script_keys = [keys.outbox(number)]
    args: list[Argument] = [seq]
    for person, found in people:
        script_keys += [keys.key(name, person) for name in ("row", "ids", "who")]
        args.append(len(found))
        for id_hash, author in found:
            args += [id_hash, author]
    return Call(load("settle_interactions"), script_keys, args)


def close_entry(number: int, seq: int) -> Call:
    """Close an entry of a bucket."""
    return Call(None, [], [b"ZREMRANGEBYSCORE", keys.outbox(number), seq, seq])


def settle_event(person: bytes, seq: int, forget: bytes) -> Call:
    """Close an entry and forget the event with this id hash, which was refused."""
    return Call(load("settle_event"), [keys.outbox(bucket(person)), keys.key("heard", person)], [seq, forget])


@dataclass(frozen=True, slots=True)
class TieWrite:
    """What a tie event says: the code of its relation is 0 for none."""

    source: bytes
    target: bytes
    target_id: str
    event_ms: int
    relation: int
    event_id: str


def put_incoming(effect: Effect, tie: TieWrite, oldest_ms: int, *, marked: bool) -> Call:
    """Write a relation on its target's side."""
    script_keys = [keys.applied(bucket(tie.target))]
    script_keys += [keys.key(name, tie.target) for name in ("name", "erased", "in", "mark")]
    args = [*effect.head(), tie.source, tie.target_id, tie.event_ms, tie.relation, tie.event_id, int(marked)]
    return Call(load("put_incoming"), script_keys, [*args, oldest_ms])


def put_outgoing(seq: int, tie: TieWrite, oldest_ms: int) -> Call:
    """Write a relation on the side of who declared it."""
    script_keys = [keys.outbox(bucket(tie.source)), *(keys.key(name, tie.source) for name in ("name", "tie", "out"))]
    args: list[Argument] = [seq, tie.target, tie.event_ms, tie.relation, tie.event_id, oldest_ms]
    return Call(load("put_outgoing"), script_keys, args)


def drop_relation(
    effect: Effect, number: int, sides: tuple[str, str], people: Sequence[bytes], erased: bytes, until_ms: int
) -> Call:
    """Take out an erased person from the relations of the people of one bucket; `sides` are the two keys' names."""
    script_keys = [keys.applied(number)]
    for person in people:
        script_keys += [keys.key(side, person) for side in sides]
    return Call(load("drop_relation"), script_keys, [*effect.head(), erased, until_ms])


def raise_marks(slot: int, marks: Iterable[tuple[bytes, bytes]]) -> Call:
    """Raise posts on a board, each given with its mark before it, never lower them."""
    return Call(None, [], [b"ZADD", keys.board(slot), b"GT", *(part for pair in marks for part in pair)])


def register_kinds(kinds: Sequence[str], limit: int) -> Call:
    """Give kinds their codes, up to `limit` kinds in all."""
    return Call(load("register_kinds"), [keys.KINDS], [limit, *kinds])


def log_changes(people: Iterable[bytes], posts: Iterable[bytes]) -> Call:
    """Note whose rows and which posts have changed."""
    blobs = [b"".join(sorted(hashes)) for hashes in (people, posts)]
    return Call(load("log_changes"), [keys.CHANGES, keys.CHANGED], [LOGGED_CHANGES, *blobs])


def log_exposure(reader: bytes, exposure: bytes) -> Call:
    """Note what a feed has shown to a reader."""
    fields = (b"reader", reader, b"shown", exposure)
    return Call(None, [], [b"XADD", keys.EXPOSURES, b"MAXLEN", b"~", LOGGED_EXPOSURES, b"*", *fields])


def read_exposures(after: bytes, count: int) -> Call:
    """Read what feeds have shown after an entry."""
    return Call(None, [], [b"XRANGE", keys.EXPOSURES, b"(" + after, b"+", b"COUNT", count])


def drop_exposures(entries: Sequence[bytes]) -> Call:
    """Take entries out of what feeds have shown."""
    return Call(None, [], [b"XDEL", keys.EXPOSURES, *entries])


def trim_board(slot: int, posts: int) -> Call:
    """Keep a board to its greatest posts."""
    return Call(load("trim_board"), [keys.board(slot), keys.floor(slot)], [posts])
