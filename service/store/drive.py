"""Carry out what taken events change in other buckets, and close their outbox entries.

Every step may be done again: far effects are let through once by their number, and an entry is closed once. So an
entry that a crash left open is simply driven again, by whoever sends its events again or by the sweeper.
"""

from collections.abc import Callable, Coroutine, Sequence
from dataclasses import dataclass, field
from itertools import groupby
from typing import Any, TypeVar

import orjson

from scoring.bank import Bank
from scoring.marks import marks
from service.store import calls, pieces
from service.store.calls import Call, Creation, EdgeWork, Effect, PostWrite, StoreLimits
from service.store.ids import NOBODY, IdHasher, bucket
from service.store.pieces import Entry, Piece, Swept

AUDIENCES = ("everyone", "followers", "friends", "nobody")
RELATIONS = ("none", "follow", "friend", "mute", "block")
MARKED = frozenset({"friend", "block"})

Run = Callable[[Sequence[Call]], Coroutine[Any, Any, list[Any]]]


@dataclass(slots=True)
class Step:
    """What is to be done for one entry after its far effects: further calls, then the end.

    `people` and `posts` are those whose rows and values the entry has changed, `values` the new values of posts whose
    places on the boards may have risen.
    """

    follow: list[Call] = field(default_factory=list)
    creations: list[Creation] = field(default_factory=list)
    close: list[Call] = field(default_factory=list)
    people: set[bytes] = field(default_factory=set)
    posts: set[bytes] = field(default_factory=set)
    values: dict[bytes, bytes] = field(default_factory=dict)


@dataclass(frozen=True, slots=True)
class Edges:
    """Far effects on posts' sums: they are put together by bucket, whatever entries they come from."""

    bucket: int
    work: EdgeWork


@dataclass(frozen=True, slots=True)
class Record:
    """A far effect on a post's record; put together by bucket likewise."""

    effect: Effect
    write: PostWrite


Far = Sequence[Call | Edges | Record]
Then = Callable[[list[Any]], Step]


class Driver:
    """Drives outbox entries.

    Args:
        run: runs calls in order and gives their answers.
        hasher: of ids.
        limits: of the store.
        bank: of the store.
        board_slots: slots of the bank, from 0, that have a board.

    """

    def __init__(self, run: Run, hasher: IdHasher, limits: StoreLimits, bank: Bank, board_slots: Sequence[int]) -> None:
        self._run = run
        self._hasher = hasher
        self._limits = limits
        self._bank = bank
        self._board_slots = board_slots
        self._plans: dict[bytes, Callable[[Entry, int], tuple[Far, Then]]] = {
            pieces.INTERACTION: self._edges,
            pieces.RETRACT: self._retract,
            pieces.POST: self._post,
            pieces.TIE: self._tie,
            pieces.WITHDRAW: self._withdraw,
            pieces.SWEPT: self._swept,
        }

    async def drive(self, entries: Sequence[Entry], now_ms: int, refused: dict[bytes, str]) -> None:
        """Carry out entries together.

        Args:
            entries: none of them depends on another.
            now_ms: now, Unix milliseconds.
            refused: takes, by id hash, why an event was refused where its effects lie.

        Raises:
            StoreUnavailable: the store does not answer; what was not done stays in the outbox.

        """
        erasures = [entry for entry in entries if entry.pieces[0].type == pieces.ERASE]
        for entry in erasures:
            await self._erase(entry, now_ms, refused)
        plans = [self._plan(entry, now_ms, refused) for entry in entries if entry.pieces[0].type != pieces.ERASE]
        answers = await self._run_far([one for far, _ in plans for one in far], now_ms)
        steps, at = [], 0
        for far, then in plans:
            steps.append(then(answers[at : at + len(far)]))
            at += len(far)
        follow = [call for step in steps for call in step.follow]
        await self._run(follow + self._created(steps, now_ms) + self._raised(steps, now_ms))
        await self._close(steps, refused=bool(refused))

    async def _run_far(self, far: Far, now_ms: int) -> list[Any]:
        """Run far effects and give the answer of each; those on posts are one call for each bucket."""
        answers: list[Any] = [None] * len(far)
        plain = [(place, one) for place, one in enumerate(far) if isinstance(one, Call)]
        edges, records = (
            _grouped(far, Edges, lambda one: one.bucket),
            _grouped(far, Record, lambda one: bucket(one.write.post)),
        )
        to_run = [
            calls.put_posts(number, now_ms, self._limits, [(one.effect, one.write) for _, one in group])
            for number, group in records.items()
        ]
        to_run += [
            calls.add_edges(number, now_ms, self._limits, [one.work for _, one in group])
            for number, group in edges.items()
        ]
        got = iter(await self._run([*to_run, *(call for _, call in plain)]))
        for group in records.values():
            for (place, _), answer in zip(group, next(got), strict=True):
                answers[place] = answer
        for edge_group in edges.values():
            flat, at = next(got), 0
            for place, one in edge_group:
                answers[place] = flat[at : at + len(one.work.posts)]
                at += len(one.work.posts)
        for (place, _), answer in zip(plain, got, strict=True):
            answers[place] = answer
        return answers

    def _created(self, steps: Sequence[Step], now_ms: int) -> list[Call]:
        """Write creation edges, one call for each bucket of authors."""
        by_bucket: dict[int, list[Creation]] = {}
        for step in steps:
            for one in step.creations:
                by_bucket.setdefault(bucket(one.person), []).append(one)
        return [calls.put_creations(number, now_ms, self._limits, creations) for number, creations in by_bucket.items()]

    def _raised(self, steps: Sequence[Step], now_ms: int) -> list[Call]:
        """Raise the places of posts on the boards."""
        values = {post: value for step in steps for post, value in step.values.items() if value}
        if not values:
            return []
        found = marks(list(values.values()), self._bank, self._board_slots, now_ms)
        raised = []
        for slot, column in zip(self._board_slots, found.T.tolist(), strict=True):
            pairs = [(b"%.17g" % mark, post) for mark, post in zip(column, values, strict=True) if mark == mark]  # noqa: PLR0124  not NaN
            if pairs:
                raised.append(calls.raise_marks(slot, pairs))
        return raised

    async def _close(self, steps: Sequence[Step], *, refused: bool) -> None:
        """Log what has changed, then close the entries: a crash in between leaves them open, to be logged again.

        Where an event was refused, closing takes its edge out of a row: that is logged besides.
        """
        people = {person for step in steps for person in step.people}
        posts = {post for step in steps for post in step.posts}
        log = [calls.log_changes(people, posts)] if people or posts else []
        await self._run([*log, *(call for step in steps for call in step.close), *(log if refused else [])])

    def _plan(self, entry: Entry, now_ms: int, refused: dict[bytes, str]) -> tuple[Far, Then]:
        plan = self._plans[entry.pieces[0].type]
        far, then = plan(entry, now_ms)

        def noting(answers: list[Any]) -> Step:
            self._note_refusals(entry, answers, refused)
            return then(answers)

        return far, noting

    def _note_refusals(self, entry: Entry, answers: list[Any], refused: dict[bytes, str]) -> None:
        kind = entry.pieces[0].type
        first: Any = answers[0] if answers else None
        reason = None
        if kind == pieces.POST and first[0] != b"ok":
            reason = "author" if first[0] == b"author" else "hash"
        elif kind == pieces.TIE and first:
            reason = "erased" if first == 2 else "hash"  # noqa: PLR2004  the script's codes
        elif kind == pieces.WITHDRAW and first != b"ok":
            reason = "hash"
        if reason:
            refused[entry.pieces[0].id_hash] = reason
        if kind == pieces.INTERACTION:
            posts = [post for call in _by_bucket(_interactions(entry, self._hasher)) for post in call[1]]
            flat = [answer for call in answers for answer in call]
            for (_, _, items), answer in zip(posts, flat, strict=True):
                if answer[0] == b"":
                    refused.update({item.id_hash: "hash" for item in items})

    def _edges(self, entry: Entry, _: int) -> tuple[Far, Then]:
        groups = _by_bucket(_interactions(entry, self._hasher))
        effect = Effect(entry.bucket, "e", entry.seq, entry.low)
        far = [
            Edges(number, EdgeWork(effect, [(post, name, _added(items)) for post, name, items in posts]))
            for number, posts in groups
        ]

        def then(answers: list[Any]) -> Step:
            step, found = Step(), []
            flat = [answer for call in answers for answer in call]
            for (post, _, items), answer in zip((post for _, posts in groups for post in posts), flat, strict=True):
                author = b"-" if answer[0] == b"" else b"" if answer[0] == NOBODY else answer[0]
                found += [(item.actor, item.id_hash, author) for item in items]
                step.posts.add(post)
                step.people.update(item.actor for item in items)
                if author != b"-":
                    step.values[post] = answer[1]
            found.sort(key=lambda one: one[0])
            people = [
                (person, [(id_hash, author) for _, id_hash, author in group])
                for person, group in groupby(found, key=lambda one: one[0])
            ]
            step.close.append(calls.settle_interactions(entry.bucket, entry.seq, people))
            return step

        return far, then

    def _retract(self, entry: Entry, _: int) -> tuple[Far, Then]:
        body = entry.pieces[0].body
        person, post, stamp = body[8:16], body[16:24], body[24:32]
        effect = Effect(entry.bucket, "e", entry.seq, entry.low)
        far = [Edges(bucket(post), EdgeWork(effect, [(post, "", b"-" + stamp + person)]))]
        close = [calls.close_entry(entry.bucket, entry.seq)]
        return far, lambda _: Step(close=close, people={person}, posts={post})

    def _post(self, entry: Entry, _: int) -> tuple[Far, Then]:
        piece = entry.pieces[0]
        write = read_post_piece(piece, self._hasher)
        far = [Record(Effect(entry.bucket, "p", entry.seq, entry.low), write)]

        def then(answers: list[Any]) -> Step:
            answer = answers[0]
            if answer[0] != b"ok":
                return Step(close=[calls.settle_event(write.author, entry.seq, piece.id_hash)])
            early = {answer[2][i : i + 8] for i in range(0, len(answer[2]), 8)}
            follow = [calls.learn_author(person, write.post, write.author) for person in sorted(early)]
            creation = Creation(write.author, entry.seq, write.post + answer[1])
            close = [calls.close_entry(entry.bucket, entry.seq)]
            step = Step(follow, [creation], close, {write.author}, {write.post})
            step.values[write.post] = answer[3]
            return step

        return far, then

    def _tie(self, entry: Entry, now_ms: int) -> tuple[Far, Then]:
        tie = read_tie_piece(entry.pieces[0], self._hasher)
        marked = RELATIONS[tie.relation] in MARKED
        far = [
            calls.put_incoming(
                Effect(entry.bucket, "t", entry.seq, entry.low), tie, self._limits.oldest_ms(now_ms), marked=marked
            )
        ]

        def then(answers: list[Any]) -> Step:
            if answers[0]:
                return Step(close=[calls.settle_event(tie.source, entry.seq, entry.pieces[0].id_hash)])
            return Step(close=[calls.put_outgoing(entry.seq, tie, self._limits.oldest_ms(now_ms))])

        return far, then

    def _withdraw(self, entry: Entry, now_ms: int) -> tuple[Far, Then]:
        event = orjson.loads(entry.pieces[0].body[8:])
        person, post = self._hasher.hash(event["actor"]), self._hasher.hash(event["post"])
        effect = Effect(entry.bucket, "w", entry.seq, entry.low)
        far = [calls.withdraw_post(effect, post, event["post"], now_ms, self._limits)]

        def then(answers: list[Any]) -> Step:
            if answers[0] == b"ok":
                return Step(close=[calls.close_entry(entry.bucket, entry.seq)], posts={post})
            return Step(close=[calls.settle_event(person, entry.seq, entry.pieces[0].id_hash)], posts={post})

        return far, then

    async def _erase(self, entry: Entry, now_ms: int, refused: dict[bytes, str]) -> None:
        body = entry.pieces[0].body
        person, until_ms = body[8:16], pieces.unstamp(body[16:24])[0]
        sweep = calls.sweep_person(person, body[:8], until_ms, entry.seq, now_ms, self._limits)
        seq, low, member = (await self._run([sweep]))[0]
        if seq:
            await self.drive([Entry.read(entry.bucket, low, member)], now_ms, refused)
        await self._forget_exposures(person, until_ms)
        await self._run([calls.close_entry(entry.bucket, entry.seq)])

    async def _forget_exposures(self, person: bytes, until_ms: int) -> None:
        """Take what was shown to an erased person out of the log of exposures."""
        after = b"0-0"
        while True:
            entries = (await self._run([calls.read_exposures(after, _EXPOSURES_AT_ONCE)]))[0]
            gone = [number for number, fields in entries if fields[1] == person and _entry_ms(number) <= until_ms]
            if gone:
                await self._run([calls.drop_exposures(gone)])
            if len(entries) < _EXPOSURES_AT_ONCE:
                return
            after = entries[-1][0]

    def _swept(self, entry: Entry, now_ms: int) -> tuple[Far, Then]:
        swept = Swept.read(entry.pieces[0].body)
        edges, posts = self._swept_edges(entry, swept)
        far: list[Call | Edges | Record] = list(edges)
        purges = _hashes_by_bucket(swept.posts)
        purge = Effect(entry.bucket, "u", entry.seq, entry.low)
        far += [
            calls.purge_posts(purge, number, group, swept.person, swept.until_ms, now_ms, self._limits)
            for number, group in purges
        ]
        for letter, sides, people in (("i", ("in", "mark"), swept.targets), ("o", ("tie", "out"), swept.sources)):
            effect = Effect(entry.bucket, letter, entry.seq, entry.low)
            far += [
                calls.drop_relation(effect, number, sides, group, swept.person, swept.until_ms)
                for number, group in _hashes_by_bucket(people)
            ]

        def then(answers: list[Any]) -> Step:
            touched = {post for group in posts for post in group} | set(swept.posts)
            step, edges = Step(people={swept.person}, posts=touched), answers[: len(posts)]
            for group, call in zip(posts, edges, strict=True):
                for post, answer in zip(group, call, strict=True):
                    if answer[0] not in (b"", NOBODY):
                        step.follow.append(calls.learn_author(swept.person, post, answer[0]))
            for (_, group), call in zip(purges, answers[len(posts) :], strict=False):
                step.creations += [
                    Creation(swept.person, entry.seq, post + stamp)
                    for post, stamp in zip(group, call, strict=True)
                    if stamp != b""
                ]
            step.close.append(calls.close_entry(entry.bucket, entry.seq))
            return step

        return far, then

    def _swept_edges(self, entry: Entry, swept: Swept) -> tuple[list[Edges], list[list[bytes]]]:
        signed = [(b"-", edge) for edge in swept.taken] + [(b"+", edge) for edge in swept.put]
        by_post: dict[bytes, bytes] = {}
        for sign, edge in signed:
            by_post[edge[:8]] = by_post.get(edge[:8], b"") + sign + edge[8:] + swept.person
        effect, groups = Effect(entry.bucket, "e", entry.seq, entry.low), _hashes_by_bucket(list(by_post))
        far = [
            Edges(number, EdgeWork(effect, [(post, "", by_post[post]) for post in group])) for number, group in groups
        ]
        return far, [group for _, group in groups]


_EXPOSURES_AT_ONCE = 500


def _entry_ms(number: bytes) -> int:
    """Read the time out of a stream entry's number."""
    return int(number.partition(b"-")[0])


Kind = TypeVar("Kind")


def _grouped(far: Far, kind: type[Kind], bucket_of: Callable[[Kind], int]) -> dict[int, list[tuple[int, Kind]]]:
    """Group far effects of a kind by their bucket, with their places."""
    groups: dict[int, list[tuple[int, Kind]]] = {}
    for place, one in enumerate(far):
        if isinstance(one, kind):
            groups.setdefault(bucket_of(one), []).append((place, one))
    return groups


@dataclass(frozen=True, slots=True)
class _Item:
    id_hash: bytes
    actor: bytes
    stamp: bytes
    post: bytes
    post_id: str


def _interactions(entry: Entry, hasher: IdHasher) -> list[_Item]:
    items = []
    for piece in entry.pieces:
        body = piece.body
        post_id = body[24:].decode()
        items.append(_Item(body[:8], body[8:16], body[16:24], hasher.hash(post_id), post_id))
    return items


def _by_bucket(items: list[_Item]) -> list[tuple[int, list[tuple[bytes, str, list[_Item]]]]]:
    """Group interactions by the post's bucket and the post; two ids with one hash stay apart."""
    posts: dict[tuple[bytes, str], list[_Item]] = {}
    for item in items:
        posts.setdefault((item.post, item.post_id), []).append(item)
    groups: dict[int, list[tuple[bytes, str, list[_Item]]]] = {}
    for (post, post_id), group in posts.items():
        groups.setdefault(bucket(post), []).append((post, post_id, group))
    return list(groups.items())


def _added(items: Sequence[_Item]) -> bytes:
    return b"".join([b"+" + item.stamp + item.actor for item in items])


def _hashes_by_bucket(hashes: Sequence[bytes]) -> list[tuple[int, list[bytes]]]:
    groups: dict[int, list[bytes]] = {}
    for one in hashes:
        groups.setdefault(bucket(one), []).append(one)
    return list(groups.items())


def read_post_piece(piece: Piece, hasher: IdHasher) -> PostWrite:
    """Read what a post event's piece says."""
    event = orjson.loads(piece.body[16:])
    return PostWrite(
        post=piece.body[8:16],
        post_id=event["post"],
        author=hasher.hash(event["actor"]),
        author_id=event["actor"],
        event_ms=event["at"],
        event_id=event["id"],
        audience=AUDIENCES.index(event["audience"]),
        form=event["form"],
        topics="\n".join(event["topics"]),
        creation_code=event["code"],
    )


def read_tie_piece(piece: Piece, hasher: IdHasher) -> calls.TieWrite:
    """Read what a tie event's piece says."""
    event = orjson.loads(piece.body[8:])
    return calls.TieWrite(
        source=hasher.hash(event["actor"]),
        target=hasher.hash(event["target"]),
        target_id=event["target"],
        event_ms=event["at"],
        relation=RELATIONS.index(event["relation"]),
        event_id=event["id"],
    )
