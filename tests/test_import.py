"""`waxwane import`: what is read of files, what becomes of it, and how an import goes on after it stopped."""

import bz2
import contextlib
import gzip
import io
import json
import lzma
import os
import pty
import shlex
import signal
import subprocess
import sys
import time
import tracemalloc
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import redis
from typer.testing import CliRunner

from service.cli.main import build
from service.embedded import EmbeddedServer
from service.errors import StoreUnavailable
from service.importing import bulk
from service.importing import windows as reading
from service.importing.archives import opened
from service.importing.bulk import PAUSES_S, BulkImporter
from service.importing.lines import LINE_BYTES
from service.importing.parsing import Parser
from service.importing.run import import_files
from service.importing.summary import Stop, Summary
from service.importing.windows import Window, windows
from service.store.bulk import BulkIngest, Outcomes
from service.store.bulk_columns import Edges
from service.store.verdict import APPLIED, Verdict
from tests.polling import until

ROOT = Path(__file__).parent.parent
COMMAND = [sys.executable, "-c", "from service.cli.main import main; main()", "import"]
DAY_MS = 86_400_000
COMPRESSIONS: dict[str, Callable[[bytes], bytes]] = {
    "plain": bytes,
    "gzip": gzip.compress,
    "bzip2": bz2.compress,
    "xz": lzma.compress,
}
Event = dict[str, Any]


def now_ms() -> int:
    return time.time_ns() // 1_000_000


def like(number: int, **fields: Any) -> Event:
    """An interaction that is applied."""
    event = {"id": f"like-{number}", "type": "interaction", "at": now_ms() - 1_000, "actor": "joel", "post": "p1"}
    return event | {"kind": "like"} | fields


def lines(events: Sequence[Event | bytes]) -> bytes:
    """Write events as lines; bytes stand as they are."""
    return b"".join((e if isinstance(e, bytes) else json.dumps(e).encode()) + b"\n" for e in events)


def run(*arguments: str | Path, status: int = 0, **more: Any) -> Any:
    """Import in this process, and give the summary that --json prints."""
    result = CliRunner().invoke(build(), ["import", "--json", *map(str, arguments)], **more)
    assert result.exit_code == status, result.output + repr(result.exception)
    return json.loads(result.stdout)


def counts(summary: Any) -> list[int]:
    """Applied, duplicate, expired and rejected."""
    found = [summary[name] for name in ("applied", "duplicate", "expired", "rejected")]
    assert summary["read"] == sum(found)
    return found


def state(url: str) -> int:
    """How many edges are stored in people's rows."""
    with redis.Redis.from_url(url) as client:
        return sum(client.strlen(key) // 16 for key in client.keys("row:*"))


MIXED: list[Event | bytes] = [
    {"id": "e1", "type": "post", "at": now_ms() - 2_000, "actor": "mina", "post": "p1", "form": "photo"},  # 1
    like(1),  # 2
    b"",  # 3
    like(2),  # 4
    like(1),  # 5: a repeat
    b"compost",  # 6
    like(3, kind="sneeze"),  # 7
    like(4, at=now_ms() - 31 * DAY_MS),  # 8: expired
    b'{"id": "\xff"}',  # 9
    b'"' + b"x" * LINE_BYTES + b'"',  # 10
    like(5, post=7),  # 11
    like(6, at=now_ms() + 3_600_000),  # 12
    b"   ",  # 13
    {"id": "e2", "type": "tie", "at": now_ms() - 2_000, "actor": "joel", "target": "mina", "relation": "follow"},  # 14
    like(7),  # 15
]


@pytest.fixture
def mixed(tmp_path: Path) -> Path:
    """A file with good, repeated, expired and rejected lines."""
    timed = [
        event | {"at": now_ms() - 2_000} if isinstance(event, dict) and not event["at"] else event for event in MIXED
    ]
    path = tmp_path / "mixed.ndjson"
    path.write_bytes(lines(timed))
    return path


def test_mixed_file(redis_db: str, mixed: Path, tmp_path: Path) -> None:
    """Each line that is not blank is counted once, and what is rejected has its line number and reason."""
    rejects = tmp_path / "rejects.ndjson"
    summary = run("--store", redis_db, "--rejects", rejects, mixed, status=1)
    assert counts(summary) == [5, 1, 1, 6]
    reasons = {one["line"]: one["reason"] for one in summary["first_rejected"]}
    assert list(reasons) == [6, 7, 9, 10, 11, 12]
    assert reasons[6] == reasons[9] == "the line is not JSON in UTF-8"
    assert reasons[7].startswith("kind: no loaded policy knows 'sneeze'; known kinds: ")
    assert reasons[10] == "the line is longer than 1048576 bytes"
    assert reasons[11] == "post 7 is not allowed; allowed: text"
    assert "lies more than 5 minutes ahead" in reasons[12]
    written = [json.loads(line) for line in rejects.read_bytes().splitlines()]
    assert {one["line"]: one["reason"] for one in written} == reasons
    assert {one["file"] for one in written} == {str(mixed)}
    assert [one["event"] for one in written[:2]] == ["compost", MIXED[6]]
    assert written[2]["event"] == '{"id": "\N{REPLACEMENT CHARACTER}"}'
    assert written[3]["event"] is None
    assert summary["stopped"] is None


def test_second_run_changes_nothing(redis_db: str, mixed: Path) -> None:
    """All that was applied is counted as duplicate when the file is imported again."""
    run("--store", redis_db, mixed, status=1)
    assert counts(run("--store", redis_db, mixed, status=1)) == [0, 6, 1, 6]
    assert state(redis_db) == 4


@pytest.mark.parametrize("compression", COMPRESSIONS)
def test_compressions(redis_db: str, tmp_path: Path, compression: str) -> None:
    """A compressed file is recognised by its content, under any name, and gives the same result."""
    path = tmp_path / "events.txt"
    path.write_bytes(COMPRESSIONS[compression](lines([like(number) for number in range(2_500)])))
    assert counts(run("--store", redis_db, path)) == [2_500, 0, 0, 0]
    assert state(redis_db) == 2_500


@pytest.mark.parametrize("compression", ["gzip", "bzip2", "xz"])
def test_joined_archives(tmp_path: Path, compression: str) -> None:
    """Archives one after the other in a file are read as one."""
    path = tmp_path / "events"
    path.write_bytes(b"".join(COMPRESSIONS[compression](part) for part in (b'"a"\n"b', b'c"\n')))
    assert seen(path) == [(1, b'"a"'), (2, b'"bc"')]


def test_standard_input(redis_db: str) -> None:
    """A dash reads standard input, compressed or not."""
    content = gzip.compress(lines([like(1), like(2)]))
    assert counts(run("--store", redis_db, "-", input=content)) == [2, 0, 0, 0]


def test_several_files(redis_db: str, tmp_path: Path) -> None:
    """Files are taken one after the other, each with lines numbered from 1; --from-line is about the first."""
    first, second = tmp_path / "a", tmp_path / "b"
    first.write_bytes(lines([b"lost", like(1)]))
    second.write_bytes(lines([b"found", like(2)]))
    summary = run("--store", redis_db, "--from-line", "2", first, second, status=1)
    assert counts(summary) == [2, 0, 0, 1]
    assert [(one["file"], one["line"]) for one in summary["first_rejected"]] == [(str(second), 1)]


@pytest.mark.parametrize("compression", ["gzip", "bzip2", "xz"])
def test_truncated_archive(redis_db: str, tmp_path: Path, compression: str) -> None:
    """What can be read of an archive that was cut off is applied; the import ends there with status 1."""
    whole = [like(number, post=f"{number * 7919:x}") for number in range(20_000)]
    packed = COMPRESSIONS[compression](lines(whole))
    path = tmp_path / "cut"
    path.write_bytes(packed[: len(packed) * 2 // 3])
    summary = run("--store", redis_db, path, status=1)
    applied = summary["applied"]
    assert 1_000 < applied < 20_000
    stopped = summary["stopped"]
    assert (stopped["cause"], stopped["file"], stopped["line"]) == ("damaged", str(path), applied + 1)
    assert stopped["reason"].startswith(f"the file is cut off or damaged after line {applied}: ")


def test_damaged_archive(redis_db: str, tmp_path: Path) -> None:
    """An archive whose check sum is wrong is told, though all its lines could be read."""
    packed = bytearray(gzip.compress(lines([like(1), like(2)])))
    packed[-8] ^= 1
    path = tmp_path / "damaged"
    path.write_bytes(packed)
    summary = run("--store", redis_db, path, status=1)
    assert (summary["applied"], summary["stopped"]["line"]) == (2, 3)
    assert "CRC check failed" in summary["stopped"]["reason"]


@pytest.mark.parametrize(("magic", "name"), [(b"\x28\xb5\x2f\xfd", "zstd"), (b"PK\x03\x04", "zip")])
def test_unsupported_archive(tmp_path: Path, magic: bytes, name: str) -> None:
    """A file compressed in another way is refused before anything is read or started; the message says what works."""
    good, other = tmp_path / "good", tmp_path / "other"
    good.write_bytes(lines([like(1)]))
    other.write_bytes(magic + bytes(40))
    result = spawn("--data", str(tmp_path / "data"), str(good), str(other))
    assert result.returncode == 2
    assert result.stderr.startswith(f"waxwane: {other} is compressed with {name}, which can't be read here; ")
    assert "supported: plain text, gzip, bzip2 and xz" in result.stderr
    assert not (tmp_path / "data").exists()


def spawn(*arguments: str, **environment: str) -> subprocess.CompletedProcess[str]:
    """Import in a process of its own."""
    return subprocess.run(
        [*COMMAND, *arguments], capture_output=True, text=True, cwd=ROOT, env=os.environ | environment, check=False
    )


def test_usage_errors(redis_db: str, tmp_path: Path) -> None:
    """A file that is not there, and rejects that would overwrite an input, end with status 2 and one sentence."""
    result = spawn("--store", redis_db, str(tmp_path / "none"))
    assert (result.returncode, result.stdout) == (2, "")
    assert result.stderr == f"waxwane: {tmp_path}/none can't be opened: No such file or directory\n"
    (tmp_path / "events").write_bytes(lines([like(1)]))
    result = spawn("--store", redis_db, "--rejects", str(tmp_path / "events"), str(tmp_path / "events"))
    assert result.returncode == 2
    assert result.stderr.startswith("waxwane: --rejects ")
    assert (tmp_path / "events").stat().st_size > 0


def test_report_for_people(redis_db: str, tmp_path: Path) -> None:
    """Without --json the counts and the first 20 rejected lines are shown, and where the others can be had."""
    path = tmp_path / "events"
    path.write_bytes(lines([like(1), *[b"compost"] * 25]))
    result = spawn("--store", redis_db, str(path))
    assert result.returncode == 1
    report = result.stdout.splitlines()
    assert report[0].startswith("read       26 events in ")
    assert report[1:5] == ["applied    1", "duplicate  0", "expired    0", "rejected   25"]
    assert report[7].split(maxsplit=1) == ["2", "the line is not JSON in UTF-8"]
    assert report[-2].split()[0] == "21"
    assert report[-1] == "5 more were rejected than the 20 shown; --rejects FILE writes all of them."
    assert result.stderr == ""


def test_embedded_store(tmp_path: Path) -> None:
    """The embedded store is started for the import and keeps what was applied; a running one is used as it is."""
    path, data = tmp_path / "events", tmp_path / "data"
    path.write_bytes(lines([like(1), like(2)]))
    assert counts(run("--data", data, path)) == [2, 0, 0, 0]
    with EmbeddedServer(data) as server:
        assert counts(run("--data", data, path)) == [0, 2, 0, 0]
        assert state(server.url) == 2


def split(window: Window) -> list[bytes | None]:
    return [line for block in window.blocks for line in block.lines()]


def seen(path: Path, from_line: int = 1) -> list[tuple[int, bytes | None]]:
    """Numbers and content of all lines that are not blank."""
    with opened(str(path)) as source:
        read = [some.line(place) for some in windows(source.stream, from_line) for place in range(some.count)]
        return [(line.number, line.content) for line in read if line.content != b""]


@pytest.mark.parametrize("compression", COMPRESSIONS)
def test_longest_line(tmp_path: Path, compression: str) -> None:
    """A line of 1 MiB is taken, one byte more is skipped, and the lines after it keep their numbers."""
    longest, longer = b"x" * LINE_BYTES, b"y" * (LINE_BYTES + 1)
    path = tmp_path / "events"
    path.write_bytes(COMPRESSIONS[compression](b"\n".join([longest, longer, b"z" * (3 * LINE_BYTES), b"last", longer])))
    assert seen(path) == [(1, longest), (2, None), (3, None), (4, b"last"), (5, None)]


def test_endless_line_takes_no_memory() -> None:
    """A line of 64 MiB is skipped piece by piece."""
    tracemalloc.start()
    try:
        read = list(windows(io.BufferedReader(Endless(64 << 20))))
        peak_bytes = tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()
    assert [(window.first, split(window)) for window in read] == [(1, [None])]
    assert peak_bytes < 8 << 20


class Endless(io.RawIOBase):
    """So many bytes without the end of a line."""

    def __init__(self, left: int) -> None:
        self.left = left

    def readable(self) -> bool:
        """Say yes."""
        return True

    def readinto(self, buffer: Any) -> int:
        """Fill the buffer as far as bytes are left."""
        count = min(self.left, len(buffer))
        buffer[:count] = b"x" * count
        self.left -= count
        return count


def test_ends_of_lines(tmp_path: Path) -> None:
    """A byte order mark, carriage returns, blank lines and a missing last end count for nothing."""
    path = tmp_path / "events"
    path.write_bytes(b"\xef\xbb\xbfone\r\n\r\n\n  two \nthree")
    assert seen(path) == [(1, b"one"), (4, b"two"), (5, b"three")]
    assert seen(path, from_line=2) == [(4, b"two"), (5, b"three")]
    path.write_bytes(b"")
    assert seen(path) == []


def test_windows_are_bounded() -> None:
    """A window holds so many lines, and fewer where they are long."""
    short = io.BytesIO(b"1\n" * 2_501)
    assert [some.count for some in windows(short, most_lines=1_000)] == [1_000, 1_000, 501]
    long = io.BytesIO((b"x" * 1_000 + b"\n") * 1_000)
    found = [some.count for some in windows(long, most_bytes=300_000)]
    assert sum(found) == 1_000
    assert max(found[:-1]) <= (300_000 + (1 << 18)) // 1_000


def test_a_window_ends_where_a_pipe_pauses() -> None:
    """Where nothing comes through a pipe, what there is makes a window; lines keep their numbers."""
    idle = iter([False, True, False, False, False]).__next__
    found = [(some.first, split(some)) for some in windows(Pieces([b"a\nb\nc", b"d\n", b"e"]), idle=idle)]
    assert found == [(1, [b"a", b"b"]), (3, [b"cd", b"e"])]


class Pieces(io.BytesIO):
    """A pipe that hands over one piece after the other."""

    def __init__(self, pieces: Sequence[bytes]) -> None:
        super().__init__()
        self.pieces = list(pieces)

    def read1(self, _size: int | None = -1, /) -> bytes:
        """Give the next piece."""
        return self.pieces.pop(0) if self.pieces else b""


class Away:
    """A store that fails as often as it is told to, from a call on."""

    def __init__(self, failures: int, first: int = 0) -> None:
        self.failures, self.first = failures, first
        self.calls: list[int] = []
        self.pauses: list[float] = []

    retention_ms = 30 * DAY_MS

    def apply(self, events: Sequence[object] | Edges, _now_ms: int) -> list[Verdict]:
        """Fail, or take the events."""
        self.calls.append(len(events))
        if self.first < len(self.calls) <= self.first + self.failures:
            raise StoreUnavailable
        return [APPLIED] * len(events)

    def apply_edges(self, edges: Edges, now_ms: int) -> tuple[Outcomes, dict[int, Verdict]]:
        """Fail, or apply all."""
        return np.zeros(len(edges), np.uint8), {0: self.apply([APPLIED] * len(edges), now_ms)[0]}

    def kind_codes(self, kinds: Sequence[str]) -> list[int]:
        """Know all kinds."""
        return [0] * len(kinds)

    def run(self, path: Path) -> Summary:
        """Import a file."""
        summary = Summary()
        importer = BulkImporter(self, now_ms, self.pauses.append, summary)
        import_files([str(path)], 1, importer, Parser(b"").read)
        return summary


def test_store_comes_back(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A window that failed is sent again after a pause, and counted once."""
    monkeypatch.setattr(reading, "WINDOW_LINES", 1_000)
    path = tmp_path / "events"
    path.write_bytes(lines([like(number) for number in range(1_500)]))
    away = Away(failures=2, first=1)
    summary = away.run(path)
    assert away.calls == [1_000, 500, 500, 500]
    assert away.pauses == [0.5, 1.0]
    assert (summary.applied, summary.stop) == (1_500, None)


def test_store_stays_away(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """After a bounded number of tries the import stops at the first line of the window that failed."""
    monkeypatch.setattr(reading, "WINDOW_LINES", 1_000)
    path = tmp_path / "events"
    path.write_bytes(lines([*[like(number) for number in range(1_000)], b"", b"", like(1_001)]))
    away = Away(failures=99, first=1)
    summary = away.run(path)
    assert away.pauses == list(PAUSES_S) == [0.5, 1.0, 2.0, 4.0]
    assert summary.applied == 1_000
    reason = "the store did not answer, 5 times in a row"
    assert summary.stop == Stop("store", str(path), 1_001, reason)


@pytest.mark.parametrize(("error", "status"), [(StoreUnavailable, 2), (KeyboardInterrupt, 130)])
def test_go_on(
    redis_db: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, error: type[BaseException], status: int
) -> None:
    """The message names the command that goes on where the import stopped, and that command takes the rest."""
    first, second = tmp_path / "all we have", tmp_path / "more"
    first.write_bytes(lines([like(number) for number in range(1_500)]))
    second.write_bytes(lines([like(2_000)]))
    with monkeypatch.context() as patch:
        patch.setattr(bulk, "PAUSES_S", ())
        patch.setattr(reading, "WINDOW_LINES", 1_000)
        patch.setattr(BulkIngest, "apply", fails_after_one_window(BulkIngest.apply, error))
        result = CliRunner().invoke(build(), ["import", "--store", redis_db, str(first), str(second)])
    assert result.exit_code == status
    assert "applied    1,000\n" in result.stdout
    told = result.stderr.strip().partition("; all before line 1001 was applied; go on with: waxwane import ")[2]
    assert shlex.split(told) == ["--from-line", "1001", str(first), str(second)]
    assert counts(run("--store", redis_db, *shlex.split(told))) == [501, 0, 0, 0]
    assert state(redis_db) == 1_501


def fails_after_one_window(apply: Callable[..., Any], error: type[BaseException]) -> Callable[..., Any]:
    calls: list[int] = []

    async def run_once(ingest: BulkIngest, edges: Edges, at_ms: int) -> Any:
        calls.append(len(edges))
        if len(calls) > 1:
            raise error
        return await apply(ingest, edges, at_ms)

    return run_once


def test_interrupted(redis_db: str) -> None:
    """Ctrl-C ends the import after what is under way, with the counts so far and the line to go on from."""
    with subprocess.Popen(
        [*COMMAND, "--store", redis_db, "-"],
        stdin=subprocess.PIPE,
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        cwd=ROOT,
    ) as process:
        assert process.stdin is not None
        process.stdin.write(lines([like(number) for number in range(1_200)]))
        process.stdin.flush()
        until(lambda: state(redis_db) == 1_200)
        process.send_signal(signal.SIGINT)
        assert process.stdout is not None
        assert process.stderr is not None
        report, message = process.stdout.read().decode(), process.stderr.read().decode()
        assert process.wait(20) == 130
    assert "applied    1,200\n" in report
    assert message.endswith("go on with: waxwane import --from-line 1201 -\n")


def test_progress_on_a_terminal(redis_db: str, tmp_path: Path) -> None:
    """On a terminal a bar shows how much was read and how fast; elsewhere there is none."""
    path = tmp_path / "events"
    path.write_bytes(lines([like(number) for number in range(1_500)]))
    main_side, terminal = pty.openpty()
    status = subprocess.run(
        [*COMMAND, "--store", redis_db, str(path)], stdout=terminal, stderr=terminal, cwd=ROOT, check=False
    )
    os.close(terminal)
    shown = b""
    with contextlib.suppress(OSError):  # Linux says so at the end of a terminal.
        while part := os.read(main_side, 65_536):
            shown += part
    os.close(main_side)
    assert status.returncode == 0
    assert b"100%" in shown
    assert b"1,500 events, " in shown
