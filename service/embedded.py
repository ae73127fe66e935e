"""The embedded store: a real Redis or Valkey server as a child process, on a unix socket, with an append-only file."""

import contextlib
import os
import subprocess
import threading
import time
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Literal, Self

import redis
from redis.backoff import NoBackoff
from redis.retry import Retry

from service.data_folder import DataFolder, DataFolderInUseError, hold, take_lock
from service.errors import WaxwaneError
from service.server_binary import ServerBinary, find_binary
from service.tether import tethered

# Loading a file of several gigabytes takes minutes.
START_TIMEOUT_S = 300.0
STOP_GRACE_S = 10.0
PREDECESSOR_TIMEOUT_S = 30.0
_POLL_S = 0.01
_TAIL_LINES = 12

Fsync = Literal["everysec", "always"]


class EmbeddedServerError(WaxwaneError):
    """The embedded server could not be started; the message ends with the end of its log."""


class EmbeddedServer:
    """A server of one's own for as long as the `with` block lasts.

    Start it from a thread that outlives it (the main thread): on Linux the server ends with the thread that started it.

    Args:
        data_dir: folder of its append-only file, made where it is missing.
        binary: the server program; None searches one.
        appendfsync: when the file is forced to disk.
        start_timeout_s: time that loading the file may take.
        stop_grace_s: time that a clean stop may take.

    """

    def __init__(
        self,
        data_dir: Path,
        binary: Path | None = None,
        *,
        appendfsync: Fsync = "everysec",
        start_timeout_s: float = START_TIMEOUT_S,
        stop_grace_s: float = STOP_GRACE_S,
    ) -> None:
        self.folder = DataFolder(Path(data_dir).absolute())
        self._configured = binary
        self._appendfsync: Fsync = appendfsync
        self._start_timeout_s = start_timeout_s
        self._stop_grace_s = stop_grace_s
        self._lock: int | None = None
        self._process: subprocess.Popen[bytes] | None = None
        self._socket: Path | None = None
        self._log_start = 0
        self._stopping = False

    def __enter__(self) -> Self:
        self.start()
        return self

    def __exit__(self, *_exception: object) -> None:
        self.stop()

    @property
    def url(self) -> str:
        """Where clients connect: `unix:///…`."""
        if self._socket is None:
            raise EmbeddedServerError(f"the embedded server in {self.folder.path} is not running")
        return socket_url(self._socket)

    @property
    def pid(self) -> int | None:
        """The server's process id; None while it is not running."""
        return self._process.pid if self._process else None

    def start(self) -> None:
        """Take the folder, start the server and wait until it has loaded its file.

        Raises:
            DataFolderError: the folder cannot be used, or another service holds it.
            ServerBinaryError: no server program was found.
            EmbeddedServerError: the server ended, or was not ready in time.

        """
        self.folder.prepare()
        self._lock = hold(self.folder)
        try:
            binary = find_binary(self._configured)
            server_lock = _outlast_predecessor(self.folder)
            try:
                self._spawn(binary, server_lock)
            finally:
                os.close(server_lock)
            self._await_ready(binary)
        except BaseException:
            self.stop()
            raise

    def stop(self) -> None:
        """End the server: it writes its file out; after the grace it is killed."""
        self._stopping = True
        if self._process is not None:
            self._process.terminate()
            try:
                self._process.wait(self._stop_grace_s)
            except subprocess.TimeoutExpired:
                self._process.kill()
                self._process.wait()
            self.folder.forget_socket()
        self._process = self._socket = None
        if self._lock is not None:
            os.close(self._lock)
            self._lock = None

    def watch(self, on_end: Callable[[int], None]) -> None:
        """Call `on_end` with the exit status, from another thread, if the server ends without being stopped."""
        process = self._process

        def wait() -> None:
            status = process.wait() if process else 0
            if not self._stopping:
                on_end(status)

        threading.Thread(target=wait, name="embedded-server", daemon=True).start()

    def _spawn(self, binary: ServerBinary, server_lock: int) -> None:
        self._stopping = False
        self._socket = self.folder.new_socket()
        configuration = server_configuration(self.folder.path, self._socket, self._appendfsync)
        with self.folder.open_log() as log:
            self._log_start = log.tell()
            self._process = subprocess.Popen(  # noqa: S603  the program is the operator's choice
                tethered([str(binary.path), "-"]),
                stdin=subprocess.PIPE,
                stdout=log,
                stderr=subprocess.STDOUT,
                cwd=self.folder.path,
                umask=0o077,
                # Ctrl-C in the terminal must not reach the server before the service has finished with it.
                start_new_session=True,
                # The server's own hold on this lock tells a later start when it has truly ended.
                pass_fds=(server_lock,),
            )
        with contextlib.suppress(BrokenPipeError), self._process.stdin or contextlib.nullcontext() as stdin:
            if stdin is not None:
                stdin.write(configuration.encode())

    def _await_ready(self, binary: ServerBinary) -> None:
        deadline_s = time.monotonic() + self._start_timeout_s
        while not answers(self.url):
            status = self._process.poll() if self._process else None
            if status is not None:
                raise EmbeddedServerError(f"{binary} ended with status {status} at its start:\n{self._log_tail()}")
            if time.monotonic() > deadline_s:
                late = f"{binary} was not ready within {self._start_timeout_s:g} s"
                raise EmbeddedServerError(f"{late}:\n{self._log_tail()}")
            time.sleep(_POLL_S)

    def _log_tail(self) -> str:
        with self.folder.log.open("rb") as log:
            log.seek(self._log_start)
            lines = log.read().decode(errors="replace").splitlines()
        return "\n".join([*lines[-_TAIL_LINES:], f"(from {self.folder.log})"])


@contextlib.contextmanager
def attach_or_start(
    data_dir: Path, binary: Path | None = None, *, appendfsync: Fsync = "everysec", timeout_s: float = START_TIMEOUT_S
) -> Iterator[str]:
    """Use the running service's server, or start one for as long as the `with` block lasts.

    A server that is attached to stays its holder's: it goes when the holder stops.

    Args:
        data_dir: the data folder.
        binary: the server program, where one has to be started; None searches one.
        appendfsync: when the file is forced to disk, where a server has to be started.
        timeout_s: time to wait for the server to answer.

    Yields:
        The server's URL.

    Raises:
        DataFolderError: the folder cannot be used, or its holder's server did not answer in time.
        ServerBinaryError: no server program was found.
        EmbeddedServerError: the server could not be started.

    """
    with contextlib.ExitStack() as stack:
        try:
            server = EmbeddedServer(data_dir, binary, appendfsync=appendfsync, start_timeout_s=timeout_s)
            url = stack.enter_context(server).url
        except DataFolderInUseError as held:
            holders = _await_holder(DataFolder(held.folder), timeout_s)
            if holders is None:
                raise
            url = holders
        yield url


def server_configuration(data: Path, socket: Path, appendfsync: Fsync) -> str:
    r"""Write the server's configuration file.

    >>> print(server_configuration(Path("/shed/data"), Path("/shed/data/server.sock"), "everysec").splitlines()[0])
    port 0

    """
    return "\n".join(
        [
            "port 0",
            f"unixsocket {_quoted(socket)}",
            "unixsocketperm 600",
            f"dir {_quoted(data)}",
            "daemonize no",
            'save ""',
            "appendonly yes",
            f"appendfsync {appendfsync}",
            "maxmemory-policy noeviction",
            "",
        ]
    )


def socket_url(socket: Path) -> str:
    """Write a socket's path as the URL that clients take."""
    return f"unix://{socket}"


def answers(url: str) -> bool:
    """Tell whether a server answers PING there; one that is still loading does not."""
    try:
        with _client(url) as client:
            return bool(client.ping())
    except redis.RedisError:
        return False


def _client(url: str) -> redis.Redis:
    return redis.Redis.from_url(url, socket_timeout=1, socket_connect_timeout=1, retry=Retry(NoBackoff(), 0))


def _outlast_predecessor(folder: DataFolder) -> int:
    """Wait for a server that a killed service left behind, asking it to end; return the server lock."""
    deadline_s = time.monotonic() + PREDECESSOR_TIMEOUT_S
    asked = False
    while (descriptor := take_lock(folder.server_lock)) is None:
        if not asked:
            _ask_to_end(folder.socket())
            asked = True
        if time.monotonic() > deadline_s:
            raise EmbeddedServerError(
                f"data: the server of an earlier service still runs in {str(folder.path)!r} "
                f"and did not end within {PREDECESSOR_TIMEOUT_S:g} s; end it and start again"
            )
        time.sleep(_POLL_S)
    return descriptor


def _ask_to_end(socket: Path | None) -> None:
    if socket is None:
        return
    with contextlib.suppress(redis.RedisError), _client(socket_url(socket)) as client:
        client.execute_command("SHUTDOWN")


def _await_holder(folder: DataFolder, timeout_s: float) -> str | None:
    deadline_s = time.monotonic() + timeout_s
    while time.monotonic() < deadline_s:
        socket = folder.socket()
        if socket is not None and answers(socket_url(socket)):
            return socket_url(socket)
        time.sleep(_POLL_S)
    return None


def _quoted(path: Path) -> str:
    escaped = str(path).replace("\\", "\\\\").replace('"', '\\"')
    return f'"{escaped}"'
