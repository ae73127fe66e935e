"""Lines are taken apart in a process of their own, with the same result as here; where it is gone, here."""

import io
from typing import Any

import numpy as np
import orjson
import pytest

from service.importing import parsing
from service.importing.columns import Columns, Reader
from service.importing.parsing import Parser
from service.importing.windows import Window, windows
from service.store.ids import IdHasher

LIKE = {"type": "interaction", "at": 1_777_885_200_000, "kind": "like"}


def window() -> Window:
    """Lines of which some are no interactions, one is blank and one is too long."""
    lines = [orjson.dumps(LIKE | {"id": f"e{n}", "actor": f"a{n % 7}", "post": f"p{n % 5}"}) for n in range(3_000)]
    lines[5:5] = [b"", b"compost", b"x" * ((1 << 20) + 1), b'{"type": "post"}']
    return next(windows(io.BytesIO(b"\n".join(lines))))


def fields(columns: Columns) -> dict[str, Any]:
    """Give all that was read, comparable."""
    found = {name: getattr(columns, name) for name in columns.__slots__}
    return {name: one.tolist() if isinstance(one, np.ndarray) else one for name, one in found.items()}


def expected() -> dict[str, Any]:
    """Read the same lines one block after the other, without a process."""
    return fields(Reader(IdHasher(b"key").hash_many).read([line for b in window().blocks for line in b.lines()]))


def test_a_process_reads_the_same(monkeypatch: pytest.MonkeyPatch) -> None:
    """What comes back from the process is what is read here, window after window."""
    monkeypatch.setattr(parsing, "WORTH_A_PROCESS", 0)
    with Parser(b"key") as parser:
        assert fields(parser.read(window())) == fields(parser.read(window())) == expected()
        assert expected()["others"] == [6, 7, 8]


def test_a_process_that_is_gone_is_done_without(monkeypatch: pytest.MonkeyPatch) -> None:
    """Where the process was killed, its work is done here, at once and from then on."""
    monkeypatch.setattr(parsing, "WORTH_A_PROCESS", 0)
    with Parser(b"key") as parser:
        parser.read(window())
        assert parser.process is not None
        parser.process.kill()
        parser.process.join()
        assert fields(parser.read(window())) == fields(parser.read(window())) == expected()
