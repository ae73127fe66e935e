"""Every kind of address reaches the same store: a unix socket, plain TCP, and TLS with a checked certificate."""

import asyncio
import ssl
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager, suppress
from pathlib import Path

import pytest
import trustme

from service.errors import StoreUnavailable
from service.settings import BUILT_IN_POLICY
from tests.engines import make_engine, ranked, running, send

NOW_MS = 1_777_885_200_000
EVENTS = [
    {"id": "f", "type": "tie", "at": NOW_MS, "actor": "joel", "target": "mina", "relation": "follow"},
    {"id": "p", "type": "post", "at": NOW_MS, "actor": "mina", "post": "bed", "form": "note"},
]


async def _copy(source: asyncio.StreamReader, target: asyncio.StreamWriter) -> None:
    try:
        while data := await source.read(65_536):
            target.write(data)
            await target.drain()
    finally:
        target.close()


@asynccontextmanager
async def door_to(socket: str, tls: ssl.SSLContext | None = None) -> AsyncIterator[int]:
    """Open a TCP port, with TLS where a context is given, that leads to a unix socket."""
    open_ones: list[asyncio.Task[None] | None] = []

    async def serve(reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        open_ones.append(asyncio.current_task())
        inner_reader, inner_writer = await asyncio.open_unix_connection(socket)
        await asyncio.gather(_copy(reader, inner_writer), _copy(inner_reader, writer), return_exceptions=True)
        for one in (writer, inner_writer):
            with suppress(OSError):
                await one.wait_closed()

    server = await asyncio.start_server(serve, "127.0.0.1", 0, ssl=tls)
    try:
        yield server.sockets[0].getsockname()[1]
    finally:
        server.close()
        await asyncio.gather(*filter(None, open_ones))


async def _same_feed(url: str) -> None:
    async with running(url, BUILT_IN_POLICY.read_text()) as engine:
        await send(engine, EVENTS, NOW_MS)
        assert await ranked(engine, "joel", NOW_MS) == [("bed", 1.5)]


async def test_plain_tcp(redis_db: str) -> None:
    """A redis:// address works."""
    async with door_to(redis_db.removeprefix("unix://")) as port:
        await _same_feed(f"redis://127.0.0.1:{port}/0")


async def test_tls_with_a_checked_certificate(redis_db: str, tmp_path: Path) -> None:
    """A rediss:// address works with the authority that signed the server's certificate, and only with it."""
    authority, stranger = trustme.CA(), trustme.CA()
    tls = ssl.SSLContext(ssl.PROTOCOL_TLS_SERVER)
    authority.issue_cert("localhost").configure_cert(tls)
    for name, one in (("ours", authority), ("other", stranger)):
        one.cert_pem.write_to_path(str(tmp_path / f"{name}.pem"))
    async with door_to(redis_db.removeprefix("unix://"), tls) as port:
        await _same_feed(f"rediss://localhost:{port}/0?ssl_ca_certs={tmp_path}/ours.pem")
        engine = make_engine(
            f"rediss://localhost:{port}/0?ssl_ca_certs={tmp_path}/other.pem", BUILT_IN_POLICY.read_text()
        )
        with pytest.raises(StoreUnavailable):
            await engine.start(background=False)
        await engine.close()


async def test_a_server_that_is_not_there(tmp_path: Path) -> None:
    """Where no server answers, starting says so within a second or two, without the address."""
    engine = make_engine(f"unix://{tmp_path}/nobody.sock", BUILT_IN_POLICY.read_text())
    with pytest.raises(StoreUnavailable, match="the store failed") as refusal:
        await engine.start(background=False)
    assert str(tmp_path) not in str(refusal.value)
    await engine.close()


async def test_a_server_that_hangs_is_not_waited_for(tmp_path: Path) -> None:
    """A server that takes the connection and never answers costs a read its timeout, no more."""
    answering: list[asyncio.Task[None] | None] = []

    async def silent(reader: asyncio.StreamReader, writer: asyncio.StreamWriter) -> None:
        answering.append(asyncio.current_task())
        with suppress(OSError):
            await reader.read()
        writer.close()
        with suppress(OSError):
            await writer.wait_closed()

    server = await asyncio.start_unix_server(silent, str(tmp_path / "hangs.sock"))
    engine = make_engine(f"unix://{tmp_path}/hangs.sock", BUILT_IN_POLICY.read_text(), timeout_s=0.05)
    begun_s = asyncio.get_running_loop().time()
    with pytest.raises(StoreUnavailable):
        await engine.start(background=False)
    with pytest.raises(StoreUnavailable):
        await engine.ping()
    assert asyncio.get_running_loop().time() - begun_s < 5
    await engine.close()
    server.close()
    await asyncio.gather(*filter(None, answering))
