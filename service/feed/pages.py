"""Cursors: which posts a feed session has served, and at what time and with what chance it is ranked.

A cursor is opaque, bound to its reader and signed with a key of the store. That of a short first page holds the hashes
of what was served, so that a first page, which is mostly the only one, writes nothing; of later pages the store keeps
them.
"""

import os
import struct
from base64 import urlsafe_b64decode, urlsafe_b64encode
from binascii import Error as Base64Error
from collections.abc import Sequence
from dataclasses import dataclass
from hashlib import blake2b
from hmac import compare_digest

from service.errors import CursorExpired, CursorInvalid
from service.feed.types import FeedRequest, Order
from service.store import keys
from service.store.connection import Connection

KEPT_MS = 600_000
"""How long a session's pages are kept after the last, milliseconds."""

CARRIED = 48
"""The most posts that a first page's cursor holds itself."""

_BODY = struct.Struct("<B8sIQQBBB")
_VERSION = 2
_SIGNATURE_BYTES = 12
_ORDERS: tuple[Order, ...] = ("ranked", "newest")


@dataclass(frozen=True, slots=True)
class Session:
    """One reading of a feed, over all its pages.

    Attributes:
        key: 8 random bytes; also the seed of the randomness.
        offset: how many posts the pages before have served.
        as_of_ms: the time all pages are ranked at, Unix milliseconds.
        order: of all pages.
        explore: whether randomness is on.
        policy: name of the policy.
        asked_by: who reads, and what forms and topics; its cursors are good for nothing else.
        carried: hashes of what the first page served, as far as its cursor holds them.

    """

    key: bytes
    offset: int
    as_of_ms: int
    order: Order
    explore: bool
    policy: str
    asked_by: bytes = b""
    carried: tuple[bytes, ...] = ()

    @property
    def seed(self) -> int:
        """The seed of the randomness."""
        return int.from_bytes(self.key, "little")


def new_session(request: FeedRequest, as_of_ms: int, policy: str) -> Session:
    """Begin a session."""
    return Session(os.urandom(8), 0, as_of_ms, request.order, request.explore, policy, _asked_by(request))


def _asked_by(request: FeedRequest) -> bytes:
    """Write who reads and what is asked for, so that no two differ in one only by where a part ends."""
    lists = ([request.reader], sorted(request.forms), sorted(request.topics))
    return b"".join(len(text).to_bytes(4, "little") + text for text in ["\n".join(names).encode() for names in lists])


class CursorBook:
    """Writes and reads cursors, and keeps what their sessions served.

    Args:
        connection: to the store.
        secret: signs cursors, the same for all workers.

    """

    def __init__(self, connection: Connection, secret: bytes) -> None:
        self._connection = connection
        self._secret = secret

    def write(self, session: Session, offset: int, carried: Sequence[bytes], now_ms: int) -> str:
        """Write the cursor of the page that starts at `offset`; `carried` are the posts it holds itself."""
        order, explore = _ORDERS.index(session.order), int(session.explore)
        body = _BODY.pack(_VERSION, session.key, offset, session.as_of_ms, now_ms, order, explore, len(carried))
        body += b"".join(carried) + session.policy.encode()
        return urlsafe_b64encode(self._sign(body, session.asked_by) + body).rstrip(b"=").decode()

    def read(self, request: FeedRequest, now_ms: int) -> Session:
        """Read the cursor of a request. The time of its first page holds for all pages, whatever `as_of` says.

        Raises:
            CursorInvalid: it is not one of ours, or the request asks for something else than its feed.
            CursorExpired: it is too old.

        """
        cursor = request.cursor or ""
        try:
            data = urlsafe_b64decode(cursor.encode("ascii") + b"=" * (-len(cursor) % 4))
        except (Base64Error, ValueError) as error:
            raise CursorInvalid(cursor) from error
        signature, body = data[:_SIGNATURE_BYTES], data[_SIGNATURE_BYTES:]
        asked_by = _asked_by(request)
        if len(body) < _BODY.size or not compare_digest(signature, self._sign(body, asked_by)):
            raise CursorInvalid(cursor, "it was changed, or it belongs to another reader, or to other forms or topics")
        version, key, offset, as_of_ms, issued_ms, order, explore, count = _BODY.unpack_from(body)
        if version != _VERSION:
            raise CursorInvalid(cursor)
        policy_at = _BODY.size + 8 * count
        carried = tuple(body[at : at + 8] for at in range(_BODY.size, policy_at, 8))
        policy = body[policy_at:].decode()
        session = Session(key, offset, as_of_ms, _ORDERS[order], bool(explore), policy, asked_by, carried)
        if request.order != session.order or request.policy not in (None, session.policy):
            raise CursorInvalid(cursor, "order and policy must be those of its first page")
        if now_ms - issued_ms > KEPT_MS:
            raise CursorExpired(cursor)
        return session

    async def served(self, session: Session, cursor: str) -> list[bytes]:
        """Give the hashes of the posts that a session's pages have served, later pages included.

        Raises:
            CursorExpired: the pages are no longer kept.
            StoreUnavailable: the store does not answer.

        """
        data = await self._connection.read("GET", keys.key("page", session.key))
        if data is None and len(session.carried) == session.offset:
            return list(session.carried)
        if data is None or len(data) < 8 * session.offset:
            raise CursorExpired(cursor)
        return [data[at : at + 8] for at in range(0, len(data), 8)]

    async def keep(self, session: Session, served: list[bytes]) -> None:
        """Keep what a session has served."""
        await self._connection.read("SET", keys.key("page", session.key), b"".join(served), "PX", KEPT_MS)

    def _sign(self, body: bytes, asked_by: bytes) -> bytes:
        return blake2b(asked_by + body, digest_size=_SIGNATURE_BYTES, key=self._secret, person=b"cursor").digest()
