"""The embedded store's folder: its files, who holds it, and where its socket is."""

import contextlib
import fcntl
import os
import shutil
import tempfile
import time
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

from service.errors import WaxwaneError

# A unix socket's path may have 108 bytes on Linux and 104 on macOS, the closing zero among them.
SOCKET_PATH_LIMIT_BYTES = 100
SOCKET_FOLDER_PREFIX = "waxwane-"
# `is_held` holds the lock for a moment.
_LOCK_PATIENCE_S = 0.1
_SOCKET_NAME = "server.sock"
_PRIVATE_FOLDER = 0o700
_PRIVATE_FILE = 0o600


class DataFolderError(WaxwaneError):
    """The data folder cannot be used."""


class DataFolderInUseError(DataFolderError):
    """Another service holds the data folder.

    Args:
        folder: the folder.
        pid: the holder's process id, as it wrote it; None where it cannot be read.

    """

    def __init__(self, folder: Path, pid: int | None) -> None:
        holder = f"process {pid}" if pid else "another process"
        super().__init__(f"data: {str(folder)!r} is in use by {holder}; stop that service, or name another folder")
        self.folder = folder
        self.pid = pid


@dataclass(frozen=True, slots=True)
class DataFolder:
    """Paths inside a data folder.

    Args:
        path: the folder, absolute.

    """

    path: Path

    @property
    def lock(self) -> Path:
        """File whose lock the service holds; it contains the service's process id."""
        return self.path / "lock"

    @property
    def server_lock(self) -> Path:
        """File whose lock the server process holds for as long as it lives."""
        return self.path / "server.lock"

    @property
    def log(self) -> Path:
        """File that the server logs to."""
        return self.path / "server.log"

    @property
    def socket_note(self) -> Path:
        """File that contains the path of the server's socket."""
        return self.path / "socket"

    def prepare(self) -> None:
        """Make the folder where it is missing, for this user alone.

        Raises:
            DataFolderError: it cannot be made or written to.

        """
        fault = self.fault()
        if fault:
            raise DataFolderError(fault)
        try:
            fresh = not self.path.exists() or not any(self.path.iterdir())
            self.path.mkdir(mode=_PRIVATE_FOLDER, parents=True, exist_ok=True)
        except OSError as error:
            raise DataFolderError(f"data: {str(self.path)!r} cannot be made ({error.strerror})") from error
        # A folder with other things in it may be shared on purpose; what is written there is private anyway.
        if fresh:
            with contextlib.suppress(PermissionError):
                self.path.chmod(_PRIVATE_FOLDER)

    def fault(self) -> str | None:
        """Say why the folder cannot be used, without making it; None where it can."""
        nearest = next(path for path in (self.path, *self.path.parents) if path.exists())
        if not nearest.is_dir():
            return f"data: {str(nearest)!r} is not a folder"
        if not os.access(nearest, os.R_OK | os.W_OK | os.X_OK):
            return f"data: {str(nearest)!r} is not writable by this user"
        return None

    def open_log(self) -> BinaryIO:
        """Open the server's log for adding to it, readable by this user alone."""
        return os.fdopen(os.open(self.log, os.O_WRONLY | os.O_APPEND | os.O_CREAT, _PRIVATE_FILE), "ab")

    def holder_pid(self) -> int | None:
        """Read the process id that the holder wrote; None where there is none."""
        text = _read(self.lock)
        return int(text) if text and text.isdigit() else None

    def socket(self) -> Path | None:
        """Read where the socket is, or was when the last service ended abruptly; None where nothing is noted."""
        text = _read(self.socket_note)
        return Path(text) if text else None

    def new_socket(self) -> Path:
        """Choose and note the path of a new socket: in the folder, or in a short temporary one."""
        self.forget_socket()
        socket = self.path / _SOCKET_NAME
        if len(os.fsencode(socket)) > SOCKET_PATH_LIMIT_BYTES:
            socket = _short_folder() / _SOCKET_NAME
        self.socket_note.touch(mode=_PRIVATE_FILE)
        self.socket_note.write_text(str(socket))
        return socket

    def forget_socket(self) -> None:
        """Remove the noted socket, its temporary folder if it has one, and the note."""
        socket = self.socket()
        if socket is None:
            return
        socket.unlink(missing_ok=True)
        if socket.parent.name.startswith(SOCKET_FOLDER_PREFIX) and socket.parent != self.path:
            shutil.rmtree(socket.parent, ignore_errors=True)
        self.socket_note.unlink(missing_ok=True)


def take_lock(file: Path) -> int | None:
    """Lock a file for this process and for children that are handed the descriptor.

    Returns:
        The open descriptor, whose closing gives the lock up; None where another process holds it.

    """
    descriptor = os.open(file, os.O_RDWR | os.O_CREAT, _PRIVATE_FILE)
    try:
        fcntl.flock(descriptor, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        os.close(descriptor)
        return None
    return descriptor


def hold(folder: DataFolder) -> int:
    """Take the folder for this service and write its process id into the lock.

    Returns:
        The lock's open descriptor.

    Raises:
        DataFolderInUseError: another service holds it.

    """
    deadline_s = time.monotonic() + _LOCK_PATIENCE_S
    while (descriptor := take_lock(folder.lock)) is None:
        if time.monotonic() > deadline_s:
            raise DataFolderInUseError(folder.path, folder.holder_pid())
        time.sleep(_LOCK_PATIENCE_S / 10)
    os.ftruncate(descriptor, 0)
    os.write(descriptor, str(os.getpid()).encode())
    return descriptor


def is_held(folder: DataFolder) -> bool:
    """Tell whether a service holds the folder."""
    if not folder.lock.exists():
        return False
    descriptor = take_lock(folder.lock)
    if descriptor is None:
        return True
    os.close(descriptor)
    return False


def _short_folder() -> Path:
    longest = len(os.fsencode(Path(tempfile.gettempdir()) / f"{SOCKET_FOLDER_PREFIX}12345678" / _SOCKET_NAME))
    # The system's own temporary folder, where the one in force is itself too long.
    parent = "/tmp" if longest > SOCKET_PATH_LIMIT_BYTES else None  # noqa: S108  mkdtemp makes a private folder
    return Path(tempfile.mkdtemp(prefix=SOCKET_FOLDER_PREFIX, dir=parent))


def _read(file: Path) -> str | None:
    try:
        return file.read_text().strip()
    except FileNotFoundError:
        return None
