"""Apply events: judge them, take them in their actor's bucket, carry out what they change elsewhere."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Any

import orjson

from service.events.model import (
    AnyEvent,
    InteractionEvent,
    PostEvent,
    RetractEvent,
    SeenEvent,
    TieEvent,
    WithdrawEvent,
)
from service.store import calls, pieces
from service.store.calls import Call, NewEdge, NewEvent, StoreLimits
from service.store.drive import Driver, Run
from service.store.ids import IdHasher, bucket
from service.store.kinds import CREATION, KindRegistry
from service.store.pieces import Entry
from service.store.verdict import APPLIED, DUPLICATE, EXPIRED, Verdict
from service.times import format_ms

EDGE_BYTES = 16

AHEAD_MS = 5 * 60 * 1000
"""How far ahead of the server's clock an event may lie, milliseconds."""

_REFUSED = {
    "hash": "an id of this event can't be stored: another id has the same 64-bit hash",
    "author": "post: another person has published a post with this id; only its author may edit it",
}


@dataclass(slots=True)
class _Take:
    """One call that takes events, and which events of the batch they are; `apart`, it has an answer for each."""

    bucket: int
    call: Call
    places: list[int]
    pieces: list[bytes]
    apart: bool = False


@dataclass(slots=True)
class _Taken:
    """What the takes led to."""

    verdicts: dict[int, Verdict] = field(default_factory=dict)
    together: list[Entry] = field(default_factory=list)
    in_order: list[Entry] = field(default_factory=list)


class Ingest:
    """Applies events.

    Args:
        run: runs calls in order and gives their answers.
        driver: carries out what lies elsewhere.
        hasher: of ids.
        kinds: the store's kinds.
        limits: of the store.
        known: says whether some loaded policy knows a kind.
        known_kinds: lists the kinds that loaded policies know.

    """

    def __init__(
        self,
        run: Run,
        driver: Driver,
        hasher: IdHasher,
        kinds: KindRegistry,
        limits: StoreLimits,
        *,
        known: Callable[[str], bool],
        known_kinds: Callable[[], Sequence[str]],
    ) -> None:
        self._run = run
        self._driver = driver
        self._hasher = hasher
        self._kinds = kinds
        self._limits = limits
        self._known = known
        self._known_kinds = known_kinds

    async def apply(self, events: Sequence[AnyEvent], now_ms: int) -> list[Verdict]:
        """Apply events.

        Args:
            events: in any order.
            now_ms: now, Unix milliseconds.

        Returns:
            What became of each, in the same order. What is applied shows in every read that starts afterwards.

        Raises:
            StoreUnavailable: the store does not answer; nothing is acknowledged, and the same events sent again
                end in the same state.

        """
        verdicts = await self._judge(events, now_ms)
        takes = self._takes(events, verdicts, now_ms)
        answers = await self._run([take.call for take in takes])
        taken = _Taken(verdicts)
        for take, answer in zip(takes, answers, strict=True):
            self._read_answer(take, answer, taken)
        refused = await self._settle(taken, now_ms)
        return [self._final(event, taken.verdicts[place], refused) for place, event in enumerate(events)]

    async def _judge(self, events: Sequence[AnyEvent], now_ms: int) -> dict[int, Verdict]:
        """Judge what needs no store: times and kinds."""
        verdicts: dict[int, Verdict] = {}
        kinds: dict[int, str] = {}
        for place, event in enumerate(events):
            verdict = self._judge_time(event, now_ms)
            if verdict is not None:
                verdicts[place] = verdict
                continue
            kind = event.kind if isinstance(event, InteractionEvent) else _creation_kind(event)
            if kind is None:
                continue
            if self._known(kind):
                kinds[place] = kind
            else:
                allowed = ", ".join(self._known_kinds())
                verdicts[place] = Verdict("rejected", f"kind: no loaded policy knows {kind!r}; known kinds: {allowed}")
        full = await self._kinds.register(kinds.values())
        for place, kind in kinds.items():
            if kind in full:
                verdicts[place] = Verdict(
                    "rejected", f"kind: {kind!r} is new and the store holds its 4096 kinds already"
                )
        return verdicts

    def _judge_time(self, event: AnyEvent, now_ms: int) -> Verdict | None:
        if event.at > now_ms + AHEAD_MS:
            return Verdict(
                "rejected",
                f"at: {format_ms(event.at)} lies more than 5 minutes ahead of the server's clock, "
                f"which is at {format_ms(now_ms)}",
            )
        return EXPIRED if now_ms - event.at > self._limits.retention_ms else None

    def _takes(self, events: Sequence[AnyEvent], verdicts: dict[int, Verdict], now_ms: int) -> list[_Take]:
        edges: dict[int, dict[bytes, list[int]]] = {}
        posts: dict[int, list[int]] = {}
        takes = []
        for place, event in enumerate(events):
            if place in verdicts:
                continue
            person = self._hasher.hash(event.actor)
            if isinstance(event, InteractionEvent):
                edges.setdefault(bucket(person), {}).setdefault(person, []).append(place)
            elif isinstance(event, PostEvent):
                posts.setdefault(bucket(person), []).append(place)
            else:
                piece = self._piece(event, person)
                call = self._take(event, NewEvent(person, event.actor, piece[5:13], event.at, piece), now_ms)
                takes.append(_Take(bucket(person), call, [place], [piece]))
        takes += [self._take_posts(number, events, places, now_ms) for number, places in posts.items()]
        for number, people in edges.items():
            groups = [
                (person, events[places[0]].actor, [self._new_edge(events[place], person) for place in places])
                for person, places in people.items()
            ]
            order = [place for places in people.values() for place in places]
            packed = [edge.piece for _, _, edges_of_one in groups for edge in edges_of_one]
            takes.append(_Take(number, calls.take_interactions(number, now_ms, self._limits, groups), order, packed))
        # Erasures last, so that an answer counts what they cover as applied.
        return sorted(takes, key=lambda take: take.pieces[0][:1] == pieces.ERASE)

    def _take_posts(self, number: int, events: Sequence[AnyEvent], places: list[int], now_ms: int) -> _Take:
        taken = []
        for place in places:
            event = events[place]
            person = self._hasher.hash(event.actor)
            piece = self._piece(event, person)
            taken.append((NewEvent(person, event.actor, piece[5:13], event.at, piece), piece[13:21]))
        call = calls.take_posts(number, now_ms, self._limits, taken)
        return _Take(number, call, places, [new.piece for new, _ in taken], apart=True)

    def _new_edge(self, event: AnyEvent, person: bytes) -> NewEdge:
        assert isinstance(event, InteractionEvent)  # noqa: S101  grouped by type just before
        id_hash, post = self._hasher.hash(event.id), self._hasher.hash(event.post)
        stamp = pieces.stamp(event.at, self._code(event.kind))
        body = id_hash + person + stamp + event.post.encode()
        return NewEdge(id_hash, post + stamp, pieces.pack(pieces.INTERACTION, body))

    def _code(self, kind: str) -> int:
        code = self._kinds.code(kind)
        assert code is not None  # noqa: S101  registered when the event was judged
        return code

    def _piece(self, event: AnyEvent, person: bytes) -> bytes:
        """Pack what the outbox keeps of an event that is no interaction."""
        id_hash = self._hasher.hash(event.id)
        match event:
            case PostEvent():
                code = self._code(f"post.{event.form}") | CREATION
                return pieces.pack(pieces.POST, id_hash + self._hasher.hash(event.post) + _json(event, code=code))
            case TieEvent():
                return pieces.pack(pieces.TIE, id_hash + _json(event))
            case WithdrawEvent():
                return pieces.pack(pieces.WITHDRAW, id_hash + _json(event))
            case RetractEvent():
                return pieces.open_ended(pieces.RETRACT, id_hash + person, EDGE_BYTES)
            case _:
                return pieces.pack(pieces.ERASE, id_hash + person + pieces.stamp(event.at, 0))

    def _take(self, event: AnyEvent, new: NewEvent, now_ms: int) -> Call:
        limits, hash_of = self._limits, self._hasher.hash
        match event:
            case TieEvent():
                return calls.take_event(new, now_ms, limits, tie_target=hash_of(event.target))
            case WithdrawEvent():
                return calls.take_event(new, now_ms, limits, lasting=True)
            case RetractEvent():
                return calls.take_retract(new, now_ms, limits, hash_of(event.event))
            case SeenEvent():
                posts = [hash_of(post) for post in dict.fromkeys(event.posts)]
                return calls.take_seen(new, now_ms, limits, posts)
            case _:
                return calls.take_erase(new, now_ms, limits)

    def _read_answer(self, take: _Take, answer: Any, taken: _Taken) -> None:  # noqa: ANN401  a script's answer
        if take.apart:
            for place, piece, one in zip(take.places, take.pieces, answer, strict=True):
                self._read_answer(_Take(take.bucket, take.call, [place], [piece]), one, taken)
            return
        if isinstance(answer, int):
            answer = [answer, 0, 0, []]
        outcomes, seq, low, unsettled = answer
        outcomes = outcomes if isinstance(outcomes, list) else [outcomes]
        for place, outcome in zip(take.places, outcomes, strict=True):
            taken.verdicts[place] = verdict_of(outcome, self._limits)
        taken.in_order += [Entry.read(take.bucket, low, member) for member in unsettled]
        if seq:
            packed = b"".join(piece for piece, outcome in zip(take.pieces, outcomes, strict=True) if outcome == 0)
            entry = Entry(take.bucket, seq, low, tuple(pieces.split(packed)))
            (taken.in_order if unsettled else taken.together).append(entry)

    async def _settle(self, taken: _Taken, now_ms: int) -> dict[bytes, str]:
        """Carry out all entries; those that others must precede come after the rest, one by one."""
        refused: dict[bytes, str] = {}
        await self._driver.drive(taken.together, now_ms, refused)
        done = {(entry.bucket, entry.seq) for entry in taken.together}
        for entry in sorted(taken.in_order, key=lambda entry: (entry.bucket, entry.seq)):
            if (entry.bucket, entry.seq) not in done:
                await self._driver.drive([entry], now_ms, refused)
                done.add((entry.bucket, entry.seq))
        return refused

    def _final(self, event: AnyEvent, verdict: Verdict, refused: dict[bytes, str]) -> Verdict:
        if verdict is not APPLIED or not refused:
            return verdict
        reason = refused.get(self._hasher.hash(event.id))
        if reason is None:
            return verdict
        return EXPIRED if reason == "erased" else Verdict("rejected", _REFUSED[reason])


def _creation_kind(event: AnyEvent) -> str | None:
    return f"post.{event.form}" if isinstance(event, PostEvent) else None


def _json(event: AnyEvent, **more: int) -> bytes:
    return orjson.dumps(event.model_dump() | more)


def verdict_of(outcome: int, limits: StoreLimits) -> Verdict:
    """Put an outcome of the scripts that take interactions into words."""
    if outcome == 4:  # noqa: PLR2004  the scripts' code
        most = (
            f"{limits.ties} ties and, within retention, {limits.row_edges} edges and {limits.other_events} other events"
        )
        return Verdict("rejected", f"actor: this person has reached what is kept for one person: {most}")
    table = {0: APPLIED, 1: DUPLICATE, 2: EXPIRED, 3: Verdict("rejected", _REFUSED["hash"]), 5: APPLIED}
    return table[outcome]
