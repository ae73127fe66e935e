"""Spelling of kinds, and the fall back to the stem."""

import re

import pytest
from hypothesis import given
from hypothesis import strategies as st

from scoring.kinds import KIND_PATTERN, MAX_KIND_BYTES, is_kind, resolve, stem

TABLE = {"comment": 1.0, "comment.photo": 2.0, "post.photo": 3.0, "hide": 0.0}

words = st.from_regex(r"[A-Za-z0-9_-]{1,6}", fullmatch=True)


@pytest.mark.parametrize("text", ["like", "post.photo", "a.b.c.d", "A-b_9.0", "-", "x" * 64])
def test_kinds_are_words_joined_by_dots(text: str) -> None:
    """Letters, digits, underscore and hyphen, 64 bytes at most."""
    assert is_kind(text)
    assert re.search(KIND_PATTERN, text)


@pytest.mark.parametrize(
    "text", ["", ".", "post.", ".post", "a..b", "a b", "like\n", "gärten", "x" * 65, "a/b", "\u0661"]
)
def test_anything_else_is_no_kind(text: str) -> None:
    """Empty words, spaces, line ends, other letters and digits, and long names are refused."""
    assert not is_kind(text)


@pytest.mark.parametrize(
    ("kind", "expected"),
    [
        ("comment.photo", 2.0),
        ("comment.photo.close-up", 2.0),
        ("comment.photo.close-up.2", 2.0),
        ("comment.note", 1.0),
        ("comment", 1.0),
        ("post.photo", 3.0),
        ("post.video", None),
        ("post", None),
        ("commentary", None),
        ("comment-photo", None),
    ],
)
def test_a_kind_falls_back_step_by_step(kind: str, expected: float | None) -> None:
    """The longest listed stem counts; a kind is never guessed from its first letters."""
    assert resolve(kind, TABLE) == expected


def test_a_listed_zero_is_a_value() -> None:
    """A kind listed with 0 is known, and does not fall back further."""
    assert resolve("hide", TABLE) == 0.0
    assert resolve("hide.topic", TABLE) == 0.0
    assert resolve("comment.photo", {"comment": 1.0, "comment.photo": 0.0}) == 0.0


@given(st.lists(words, min_size=1, max_size=5))
def test_stems_drop_one_word_at_a_time(parts: list[str]) -> None:
    """Applied again and again, stem drops the last word until one is left."""
    kind: str | None = ".".join(parts)
    for length in range(len(parts), 0, -1):
        assert kind == ".".join(parts[:length])
        assert kind is not None
        kind = stem(kind)
    assert kind is None


@given(st.lists(words, min_size=1, max_size=5), st.integers(min_value=1, max_value=5))
def test_any_listed_stem_is_found(parts: list[str], length: int) -> None:
    """A table with one stem of a kind answers with that stem's value."""
    assert resolve(".".join(parts), {".".join(parts[:length]): 7.0}) == 7.0


def test_the_limit_is_in_bytes() -> None:
    """A kind at the limit is as many bytes as characters."""
    assert len(("k" * MAX_KIND_BYTES).encode()) == MAX_KIND_BYTES
    assert is_kind("k" * MAX_KIND_BYTES)
