"""When a request arrived: put back by as long as the loop was busy."""

import json
import socket
import threading
import time
from collections.abc import Callable
from typing import Any

import pytest
import uvicorn

from service.web import arrival
from service.web.arrival import ARRIVED, ArrivalProtocol, Pulse
from tests import polling


class Clockwork:
    """A loop and its clock, moved by hand."""

    def __init__(self) -> None:
        self.now_s = 100.0
        self.due: list[tuple[float, Callable[[], None]]] = []

    def call_later(self, after_s: float, run: Callable[[], None]) -> None:
        """Keep what is to be run."""
        self.due.append((self.now_s + after_s, run))

    def beat(self) -> None:
        """Run what is due, however late."""
        [(_, run)], self.due = self.due, []
        run()


@pytest.fixture
def clockwork() -> Clockwork:
    return Clockwork()


@pytest.fixture
def pulse(clockwork: Clockwork) -> Pulse:
    return Pulse(clockwork, lambda: clockwork.now_s)  # type: ignore[arg-type]


def test_a_loop_on_time_is_not_late(clockwork: Clockwork, pulse: Pulse) -> None:
    """Between beats that come when they are due, nothing is added."""
    for _ in range(5):
        assert pulse.late_s(clockwork.now_s) == 0.0
        clockwork.now_s += 0.005
        assert pulse.late_s(clockwork.now_s) == pytest.approx(0.0, abs=1e-12)
        clockwork.beat()


def test_a_beat_that_is_overdue_tells_how_late_the_loop_is(clockwork: Clockwork, pulse: Pulse) -> None:
    """A loop that did something else for 50 ms is 45 ms late: before its beat, and just after it, but not for long."""
    clockwork.now_s += 0.050
    assert pulse.late_s(clockwork.now_s) == pytest.approx(0.045)
    clockwork.beat()
    assert pulse.late_s(clockwork.now_s + 0.0005) == pytest.approx(0.045)
    assert pulse.late_s(clockwork.now_s + 0.002) == 0.0
    clockwork.now_s += 0.005
    clockwork.beat()
    assert pulse.late_s(clockwork.now_s) == pytest.approx(0.0, abs=1e-12)


class Blocking:
    """An application that holds up its whole loop in a request to /wait, and tells each request's arrival."""

    def __init__(self) -> None:
        self.outside, self.inside = socket.socketpair()

    async def __call__(self, scope: Any, _receive: Any, send: Any) -> None:
        """Answer one request."""
        if scope["path"] == "/wait":
            self.inside.send(b"!")
            self.inside.recv(1)
        body = json.dumps(scope["state"][ARRIVED]).encode()
        headers = [(b"content-length", str(len(body)).encode())]
        await send({"type": "http.response.start", "status": 200, "headers": headers})
        await send({"type": "http.response.body", "body": body})

    def close(self) -> None:
        """Hang up both ends."""
        self.outside.close()
        self.inside.close()


def ask(port: int, path: str) -> socket.socket:
    client = socket.create_connection(("127.0.0.1", port))
    client.sendall(f"GET {path} HTTP/1.1\r\nHost: localhost\r\nConnection: close\r\n\r\n".encode())
    return client


def arrived(client: socket.socket) -> float:
    answer = b"".join(iter(lambda: client.recv(65_536), b""))
    client.close()
    return float(answer.rpartition(b"\r\n\r\n")[2])


def test_a_request_that_lay_in_its_socket_arrived_then(monkeypatch: pytest.MonkeyPatch) -> None:
    """What is sent while the loop is held up counts as arrived before the loop came back to it."""
    monkeypatch.setattr(arrival, "_EVERY_S", 0.0)
    application = Blocking()
    config = uvicorn.Config(application, port=0, http=ArrivalProtocol, lifespan="off", log_config=None)
    server = uvicorn.Server(config)
    thread = threading.Thread(target=server.run)
    thread.start()
    try:
        polling.until(lambda: server.started)
        port = server.servers[0].sockets[0].getsockname()[1]
        sent_s = time.perf_counter()
        first = ask(port, "/wait")
        application.outside.recv(1)
        second = ask(port, "/")
        released_s = time.perf_counter()
        application.outside.send(b"!")
        assert arrived(second) < released_s
        assert sent_s - 1.0 < arrived(first) < released_s
    finally:
        server.should_exit = True
        thread.join()
        application.close()
