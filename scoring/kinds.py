"""Kinds of edges: their spelling, and how a dotted kind falls back to its stem."""

import re
from collections.abc import Mapping

KIND_PATTERN = r"^[A-Za-z0-9_-]+(\.[A-Za-z0-9_-]+)*$"
"""What a kind looks like: words of letters, digits, ``_`` and ``-``, joined by dots."""

MAX_KIND_BYTES = 64
"""The longest kind, in bytes (every character of a kind is one byte)."""

_KIND = re.compile(KIND_PATTERN)


def is_kind(text: str) -> bool:
    """Say whether a text is the name of a kind.

    >>> is_kind("post.photo"), is_kind("post."), is_kind("")
    (True, False, False)
    """
    return len(text) <= MAX_KIND_BYTES and _KIND.fullmatch(text) is not None


def stem(kind: str) -> str | None:
    """Return the part of a kind before its last dot, or None where it has no dot.

    >>> stem("comment.photo.close-up"), stem("comment.photo"), stem("comment")
    ('comment.photo', 'comment', None)
    """
    head, dot, _ = kind.rpartition(".")
    return head if dot else None


def resolve(kind: str, table: Mapping[str, float]) -> float | None:
    """Look a kind up, falling back to its stem step by step.

    Args:
        kind: A kind, dotted or not.
        table: Values by kind.

    Returns:
        The value of the longest listed stem, the kind itself first; None where none is listed.
        A listed 0.0 is a value: it is returned, and nothing falls back past it.

    >>> table = {"comment": 1.0, "comment.photo": 2.0}
    >>> resolve("comment.photo.close-up", table), resolve("comment.note", table), resolve("share", table)
    (2.0, 1.0, None)
    """
    step: str | None = kind
    while step is not None:
        if step in table:
            return table[step]
        step = stem(step)
    return None
