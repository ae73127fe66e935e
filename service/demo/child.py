"""Runs a service of the demo's own, as a child process with an embedded store."""

import contextlib
import os
import re
import shutil
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from service.demo.client import Client
from service.errors import WaxwaneError
from service.settings import PREFIX, variable
from service.tether import tethered

_COMMAND = "from service.cli.main import main; main()"
_START_TIMEOUT_S = 60
_STOP_TIMEOUT_S = 20
_POLL_S = 0.02
_LOG_LINES = 8


class DemoServiceError(WaxwaneError):
    """The demo's service did not start, or ended by itself."""


@dataclass(frozen=True, slots=True)
class Running:
    """A service that runs, and a client of it."""

    client: Client
    process: subprocess.Popen[str]
    log: Path

    def wait(self) -> None:
        """Wait until the service ends.

        Raises:
            DemoServiceError: it ended by itself.

        """
        status = self.process.wait()
        raise DemoServiceError(f"the service ended by itself with status {status}:\n{_tail(self.log)}")


@contextlib.contextmanager
def running(data: Path | None) -> Iterator[Running]:
    """Run a service for as long as the block lasts, on a free port of this machine.

    Args:
        data: folder of the store, new or empty; it stays. None makes a temporary one, which goes.

    Yields:
        The service.

    Raises:
        DemoServiceError: it did not start, with what it logged.

    """
    with contextlib.ExitStack() as stack:
        folder = Path(tempfile.mkdtemp(prefix="waxwane-demo-"))
        stack.callback(shutil.rmtree, folder, ignore_errors=True)
        log = folder / "service.log"
        process = stack.enter_context(_process(data or folder / "data", log))
        client = Client(_address(process, log))
        stack.callback(client.close)
        _await_ready(process, client, log)
        yield Running(client, process, log)


def check_data(data: Path) -> None:
    """Refuse a folder that holds something: a story told twice on the same state would not come true.

    Raises:
        DemoServiceError: it is no new or empty folder.

    """
    if data.exists() and (not data.is_dir() or any(data.iterdir())):
        hint = f"`waxwane serve --data {data}` serves what an earlier demo left there"
        raise DemoServiceError(f"data {str(data)!r} is not allowed; allowed: a new or an empty folder ({hint})")


@contextlib.contextmanager
def _process(data: Path, log: Path) -> Iterator[subprocess.Popen[str]]:
    options = {"store": "embedded", "data": str(data), "host": "127.0.0.1", "port": "0", "workers": "1"}
    # Only what is amiss: the log is shown where the service does not start.
    options |= {"log-level": "warning", "log-format": "text"}
    arguments = [word for name, value in options.items() for word in (f"--{name}", value)]
    with log.open("w") as errors:
        process = subprocess.Popen(  # noqa: S603  this program, by its own name
            tethered([sys.executable, "-P", "-c", _COMMAND, "serve", *arguments]),
            stdin=subprocess.DEVNULL,
            stdout=subprocess.PIPE,
            stderr=errors,
            text=True,
            env=_environment(),
            # Ctrl-C in the terminal is for the demo, which ends the service itself.
            start_new_session=True,
        )
    with process:
        try:
            yield process
        finally:
            _stop(process)


def _environment() -> dict[str, str]:
    """Keep the settings of another service out of this one; the server program is the machine's matter."""
    kept = variable("redis_binary")
    mine = {name: value for name, value in os.environ.items() if not name.upper().startswith(PREFIX) or name == kept}
    # -P keeps the current folder out of the imports, so where this package lies has to be told.
    paths = [str(Path(__file__).parents[2]), *filter(None, [os.environ.get("PYTHONPATH")])]
    return mine | {"PYTHONPATH": os.pathsep.join(paths)}


def _stop(process: subprocess.Popen[str]) -> None:
    process.terminate()
    try:
        process.wait(_STOP_TIMEOUT_S)
    except subprocess.TimeoutExpired:
        process.kill()


def _address(process: subprocess.Popen[str], log: Path) -> str:
    """Read the address from the greeting, which the service prints once its store is up."""
    greeting = process.stdout.readline() if process.stdout else ""
    found = re.search(r"http://\S+", greeting)
    if found is None:
        raise DemoServiceError(f"the service did not start:\n{_tail(log)}")
    return found[0]


def _await_ready(process: subprocess.Popen[str], client: Client, log: Path) -> None:
    deadline_s = time.monotonic() + _START_TIMEOUT_S
    while not client.ready():
        if process.poll() is not None:
            raise DemoServiceError(f"the service ended with status {process.returncode} at its start:\n{_tail(log)}")
        if time.monotonic() > deadline_s:
            raise DemoServiceError(f"the service was not ready within {_START_TIMEOUT_S} s:\n{_tail(log)}")
        time.sleep(_POLL_S)


def _tail(log: Path) -> str:
    return "\n".join(log.read_text(errors="replace").splitlines()[-_LOG_LINES:])
