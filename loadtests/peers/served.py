"""waxwane over HTTP: a served process, a bare client on one connection, and the process's CPU."""

import http.client
import json
import os
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import closing, contextmanager
from dataclasses import dataclass
from pathlib import Path

_TICKS = os.sysconf("SC_CLK_TCK")


@dataclass(frozen=True)
class Served:
    """A running service: where it listens, and its process's number."""

    port: int
    pid: int

    def cpu_s(self) -> float:
        """Return the CPU that the process has used, seconds."""
        fields = Path(f"/proc/{self.pid}/stat").read_text(encoding="ascii").rpartition(") ")[2].split()
        return (int(fields[11]) + int(fields[12])) / _TICKS


@contextmanager
def serve(store: str, *options: str) -> Iterator[Served]:
    """Run `waxwane serve` with one worker on a store."""
    with socket.socket() as free:
        free.bind(("127.0.0.1", 0))
        port = free.getsockname()[1]
    program = [sys.executable, "-c", "from service.cli.main import main; main()"]
    command = [*program, "serve", "--store", store, "--port", str(port), *options]
    environment = {name: value for name, value in os.environ.items() if not name.startswith("WAXWANE_")}
    child = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL, env=environment)
    try:
        _wait_until_ready(port, child)
        yield Served(port, child.pid)
    finally:
        child.terminate()
        child.wait()


def _wait_until_ready(port: int, child: subprocess.Popen[bytes]) -> None:
    until_s = time.monotonic() + 30.0
    while time.monotonic() < until_s and child.poll() is None:
        try:
            connection = http.client.HTTPConnection("127.0.0.1", port, timeout=5)
            with closing(connection):
                connection.request("GET", "/readyz")
                status = connection.getresponse().status
            if status == 200:
                return
        except OSError:
            time.sleep(0.05)
    raise SystemExit("the service did not get ready")


class Client:
    """Sends requests on one connection and waits for each answer, with as little work as may be."""

    def __init__(self, port: int) -> None:
        self._socket = socket.create_connection(("127.0.0.1", port))
        self._socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)

    def get(self, path: str) -> bytes:
        """Send a GET and return the body of its answer, which must be 200."""
        return _good(*self.ask("GET", path))

    def post(self, path: str, body: bytes, media_type: str = "application/json", *, check: bool = True) -> bytes:
        """Send a POST and return the body of its answer, which must be 200 where it is checked."""
        status, answer = self.ask("POST", path, body, media_type)
        return _good(status, answer) if check else answer

    def close(self) -> None:
        """Hang up."""
        self._socket.close()

    def ask(self, method: str, path: str, body: bytes = b"", media_type: str = "") -> tuple[int, bytes]:
        """Send a request and return its answer: status and body."""
        fields = f"Content-Type: {media_type}\r\nContent-Length: {len(body)}\r\n" if body else ""
        self._socket.sendall(f"{method} {path} HTTP/1.1\r\nHost: localhost\r\n{fields}\r\n".encode() + body)
        answer = b""
        while b"\r\n\r\n" not in answer:
            answer += self._received()
        head, _, found = answer.partition(b"\r\n\r\n")
        status, *lines = head.lower().split(b"\r\n")
        length = next(int(line[16:]) for line in lines if line.startswith(b"content-length:"))
        while len(found) < length:
            found += self._received()
        return int(status.split(b" ")[1]), found

    def _received(self) -> bytes:
        data = self._socket.recv(1 << 16)
        if not data:
            raise SystemExit("the service hung up")
        return data


def _good(status: int, body: bytes) -> bytes:
    if status != 200:
        raise SystemExit(f"{status}: {body[:300].decode(errors='replace')}")
    return body


def read_feeds(served: Served, reader: str, expected: list[tuple[str, float]], reads: int) -> dict[str, float]:
    """Read a feed of 20 posts again and again; returns times in microseconds.

    The time moves on meanwhile, so of the first answer the posts are compared, not the scores.
    """
    client, path = Client(served.port), f"/v1/feeds/{reader}?k=20&budget_ms=1000"
    for _ in range(reads // 5):
        page = json.loads(client.get(path))
        if not page["complete"] or [item["post"] for item in page["items"]] != [post for post, _ in expected[:20]]:
            raise SystemExit("a feed over HTTP is not complete, or not what the other ways gave")
    cpu_s, times = served.cpu_s(), []
    for _ in range(reads):
        begun_s = time.perf_counter()
        client.get(path)
        times.append(time.perf_counter() - begun_s)
    cpu_s = served.cpu_s() - cpu_s
    client.close()
    times.sort()
    return {
        "p50_us": times[reads // 2] * 1e6,
        "p99_us": times[int(reads * 0.99)] * 1e6,
        "cpu_us": cpu_s / reads * 1e6,
    }


__all__ = ["Client", "Served", "read_feeds", "serve"]
