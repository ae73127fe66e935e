"""Packed edges against the struct module, one at a time."""

import random
import struct

import numpy as np
import pytest

from scoring.edges import CREATION, EDGE, MARKER, RETRACTED, codes, erasures, join_rows, live, times_ms
from service.store import kinds
from tests.rankings import NOW_MS, PlainEdge, as_rows, hashes, random_edges

LAST_MS = 2**48 - 1
POSTS = [0, 1, 2**32, 2**63, 2**64 - 1]
FLAGS = [0, CREATION, RETRACTED, CREATION | RETRACTED]


def random_rows(seed: int) -> list[list[PlainEdge]]:
    """Draw rows of edges of every flag, some of them empty, one in eight edges a marker."""
    rng = random.Random(seed)
    rows = []
    for _ in range(rng.randrange(1, 7)):
        edges = random_edges(rng, rng.choice([0, 1, 2, 9]), POSTS)
        flagged = [PlainEdge(edge.post, edge.code, edge.at_ms, rng.choice(FLAGS)) for edge in edges]
        rows.append([PlainEdge(0, MARKER, one.at_ms) if rng.random() < 0.125 else one for one in flagged])
    return rows


def read_plainly(packed: bytes) -> list[tuple[int, int, int, int]]:
    """Read post, time, flags and code of each entry."""
    return [(post, stamp >> 16, stamp & 0xC000, stamp & 0x3FFF) for post, stamp in struct.iter_unpack("<QQ", packed)]


@pytest.mark.parametrize("seed", range(40))
def test_rows_are_read_as_the_struct_module_reads_them(seed: int) -> None:
    """Every entry keeps its post, time, code and row, whatever its flags."""
    rows = random_rows(seed)
    packed = [b"".join(edge.packed() for edge in row) for row in rows]
    expected = [
        (number, post, at_ms, code) for number, row in enumerate(packed) for post, at_ms, _, code in read_plainly(row)
    ]
    joined = join_rows(packed)
    found = zip(
        joined.row.tolist(), joined.post.tolist(), joined.time_ms().tolist(), joined.code().tolist(), strict=True
    )
    assert list(found) == expected


@pytest.mark.parametrize("seed", range(40))
def test_what_counts_is_neither_retracted_nor_a_marker(seed: int) -> None:
    """The live edges are those a plain filter leaves, in their order and with their rows."""
    rows = random_rows(seed)
    expected = [
        (number, edge.post, edge.stamp)
        for number, row in enumerate(rows)
        for edge in row
        if not edge.flags & RETRACTED and edge.code != MARKER
    ]
    left = live(as_rows(rows))
    assert list(zip(left.row.tolist(), left.post.tolist(), left.stamp.tolist(), strict=True)) == expected


def test_creation_edges_count_under_their_kind() -> None:
    """The flag of a creation edge is no part of its code, and does not take it out."""
    left = live(as_rows([[PlainEdge(7, 4, NOW_MS, CREATION)]]))
    assert (left.code().tolist(), left.time_ms().tolist()) == ([4], [float(NOW_MS)])


def test_a_flagged_marker_is_a_marker() -> None:
    """No flag makes an edge of a marker, and its time is the time of the erasure."""
    rows = as_rows([[], [PlainEdge(0, MARKER, 5, CREATION), PlainEdge(9, 1, 6)], [PlainEdge(0, MARKER, 0)]])
    assert live(rows).post.tolist() == [9]
    assert erasures(rows) == {1: 5, 2: 0}


def test_rows_without_markers_have_no_erasures() -> None:
    """An empty row and a row of edges name no erasure."""
    assert erasures(as_rows([[], [PlainEdge(1, 0, NOW_MS)]])) == {}


@pytest.mark.parametrize("rows", [[], [b""], [b"", b"", b""]], ids=["no rows", "one empty row", "three empty rows"])
def test_nothing_stored_is_no_edges(rows: list[bytes]) -> None:
    """Rows never written give empty arrays of the right types."""
    joined = live(join_rows(rows))
    assert (joined.post.dtype, joined.stamp.dtype) == (np.dtype("<u8"), np.dtype("<u8"))
    assert (len(joined.post), len(joined.row), len(joined.time_ms()), len(joined.code())) == (0, 0, 0, 0)


@pytest.mark.parametrize("at_ms", [0, 1, NOW_MS, LAST_MS])
@pytest.mark.parametrize("flags", FLAGS)
@pytest.mark.parametrize("code", [0, 1, 4_095, MARKER - 1])
def test_a_stamp_holds_every_time_and_code(at_ms: int, flags: int, code: int) -> None:
    """Times from 0 to 2^48 - 1 ms and all codes come back exactly, past any flags."""
    stamp = hashes([PlainEdge(0, code, at_ms, flags).stamp])
    assert (times_ms(stamp).tolist(), codes(stamp).tolist()) == ([float(at_ms)], [code])


def test_layout_and_flags_are_those_the_store_writes() -> None:
    """An entry is two little-endian numbers of 8 bytes, and the store's flags and marker are these."""
    assert (EDGE.itemsize, struct.calcsize("<QQ"), EDGE["post"].str, EDGE["stamp"].str) == (16, 16, "<u8", "<u8")
    assert (kinds.CREATION, kinds.RETRACTED, kinds.MARKER) == (CREATION, RETRACTED, MARKER)
    assert kinds.MAX_KINDS <= MARKER


def test_selecting_keeps_columns_together() -> None:
    """A selection takes the same entries out of each column."""
    rows = as_rows([[PlainEdge(1, 0, 10), PlainEdge(2, 1, 20)], [PlainEdge(3, 2, 30)]])
    chosen = rows.select(np.array([True, False, True]))
    assert (chosen.post.tolist(), chosen.time_ms().tolist(), chosen.row.tolist()) == ([1, 3], [10.0, 30.0], [0, 1])
