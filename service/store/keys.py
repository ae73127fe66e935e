"""Every key in the store.

A key ends in the 8 raw bytes of an id's hash, after the hash tag of its bucket: all that one script touches shares a
bucket, and on a cluster a bucket is one slot. `b` is the bucket, 0 to 127.

| key | type | content | lifetime |
| --- | --- | --- | --- |
| `row:{b}:` person | string | 16 bytes an edge in order of arrival: post hash; time and kind code | retention after the last |
| `ids:{b}:` person | string | 8 bytes an edge, beside the row: hash of the event's id | as the row |
| `who:{b}:` person | string | 8 bytes an edge, beside the row: hash of the post's author, zeros where unknown | as the row |
| `name:{b}:` person | string | the person's id | as the row; for good once there is a tie |
| `erased:{b}:` person | string | time up to which the person is erased, ms | retention |
| `tie:{b}:` person | hash | by target's hash: time and relation code (8 bytes), event id | for good |
| `out:{b}:` person | string | 16 bytes a tie: target's hash; time and relation code | for good |
| `in:{b}:` person | hash | by source's hash: as in `tie` | for good |
| `mark:{b}:` person | string | the friends and blocks among `in`, 16 bytes each | for good |
| `seen:{b}:` person | string | 16 bytes a post, in order of time: post hash; time | retention after the last |
| `heard:{b}:` person | string | 16 bytes an event that is no edge: hash of its id; time | retention after the last |
| `undo:{b}:` person | string | 16 bytes a retract: hash of the id taken back; time | retention after the last |
| `posts:{b}:` person | string | 16 bytes a post written: post hash; creation time and code | 13 lifetimes |
| `post:{b}:` post | string | record, newest edges and running sums (`scripts/lib/post.lua`) | retention after the last edge |
| `wait:{b}:` post | string | 8 bytes for each actor who came before the post | retention |
| `seq:{b}` | integer | the last number given in the outbox | for good |
| `outbox:{b}` | sorted set | what taken events must still change in other buckets, by number | until done |
| `applied:{b}` | hash | by source bucket and effect: which numbers have been applied here | for good, bounded |
| `page:{b}:` session | string | 8 bytes for each post served in a feed session | 10 minutes |
| `board:{s}` | sorted set | posts by log2 of their decayed count plus time over half-life, for slot s of the bank | trimmed to the greatest |
| `floor:{s}` | string | the greatest value that was trimmed from the board | for good |
| `changes:{log}` | stream | whose rows and which posts have changed, by number without gaps | the newest 10,000 |
| `changed:{log}` | integer | the last number in the change log | for good |
| `exposures:{log}` | stream | what feeds have shown to whom and with what chance, where the setting asks for it | the newest 10,000 |
| `kinds` | hash | code of each kind | for good |
| `meta` | hash | hash key, format and bank of the store | for good |
| `policies` | hash | TOML of each pushed policy | for good |
"""  # noqa: E501  the rows of a table

from service.store.ids import bucket

_PERSON = ("row", "ids", "who", "name", "erased", "tie", "out", "in", "mark", "seen", "heard", "undo", "posts")
_POST = ("post", "wait")
_PREFIX = {name: [f"{name}:{{{number}}}:".encode() for number in range(128)] for name in (*_PERSON, *_POST, "page")}
_PACKED = {
    name: [b"\r\n$%d\r\n%b" % (len(prefix) + 8, prefix) for prefix in prefixes] for name, prefixes in _PREFIX.items()
}

CHANGES = b"changes:{log}"
CHANGED = b"changed:{log}"
EXPOSURES = b"exposures:{log}"
KINDS = b"kinds"
META = b"meta"
POLICIES = b"policies"


def key(name: str, id_hash: bytes) -> bytes:
    r"""Build the key of a person's, a post's or a session's `name`.

    >>> key("row", bytes([130, 0, 0, 0, 0, 0, 0, 7]))
    b'row:{2}:\x82\x00\x00\x00\x00\x00\x00\x07'

    """
    return _PREFIX[name][bucket(id_hash)] + id_hash


def keys(name: str, hashes: list[bytes]) -> list[bytes]:
    """Build one key for each hash."""
    prefix = _PREFIX[name]
    return [prefix[id_hash[0] & 127] + id_hash for id_hash in hashes]


def post_keys(post: bytes) -> list[bytes]:
    """Build the keys of a post's value and of who waits for its author."""
    number = post[0] & 127
    return [_PREFIX["post"][number] + post, _PREFIX["wait"][number] + post]


def packed_mget(name: str, hashes: list[bytes]) -> bytes:
    r"""Write an MGET of one key for each hash, in the protocol of Redis.

    Hundreds of keys are asked for in one read, so they are not built first and packed afterwards.

    >>> packed_mget("row", [bytes([130, 0, 0, 0, 0, 0, 0, 7])])
    b'*2\r\n$4\r\nMGET\r\n$16\r\nrow:{2}:\x82\x00\x00\x00\x00\x00\x00\x07\r\n'

    """
    prefix = _PACKED[name]
    parts = b"".join([prefix[id_hash[0] & 127] + id_hash for id_hash in hashes])
    return b"*%d\r\n$4\r\nMGET%b\r\n" % (len(hashes) + 1, parts)


def seq(number: int) -> bytes:
    """Build the key of a bucket's counter."""
    return b"seq:{%d}" % number


def outbox(number: int) -> bytes:
    """Build the key of a bucket's outbox."""
    return b"outbox:{%d}" % number


def applied(number: int) -> bytes:
    """Build the key of what a bucket has applied."""
    return b"applied:{%d}" % number


def board(slot: int) -> bytes:
    """Build the key of the board for the half-life at `slot` of the bank."""
    return b"board:{%d}" % slot


def floor(slot: int) -> bytes:
    """Build the key of what was trimmed from the board for the half-life at `slot` of the bank."""
    return b"floor:{%d}" % slot
