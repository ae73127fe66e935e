"""`waxwane serve`: run the service until it is told to stop."""

import contextlib
import os
import shutil
import signal
import socket
import tempfile
from collections.abc import Iterator
from typing import Annotated

import structlog
import typer
import uvicorn
from uvicorn.config import STARTUP_FAILURE
from uvicorn.supervisors import Multiprocess

from service import log
from service.addresses import mask_secrets
from service.cli.options import Json, with_settings
from service.cli.output import print_json, print_table
from service.embedded import EmbeddedServer
from service.settings import Settings, describe, to_environment, unknown_variables
from service.web.arrival import ArrivalProtocol

APPLICATION = "service.worker:create_app"
METRICS_VARIABLE = "PROMETHEUS_MULTIPROC_DIR"
# Longer than the idle time of the usual load balancers, so that it is they who close idle connections.
KEEP_ALIVE_S = 75
# A worker busy with a long call is not taken for dead.
HEALTHCHECK_S = 30
FAILURE = 1

logger = structlog.get_logger(__name__)


def register(app: typer.Typer) -> None:
    """Add the command."""
    app.command("serve")(with_settings(serve))


def serve(
    overrides: dict[str, str | None],
    *,
    print_settings: Annotated[
        bool, typer.Option("--print-settings", help="Print the settings in force and where each came from, and end.")
    ] = False,
    json: Json = False,
) -> None:
    """Run the service until it is told to stop (Ctrl-C or SIGTERM).

    The default store is a Redis server of its own in the data folder, which needs nothing else installed.
    """
    settings = Settings.load(overrides)
    if print_settings:
        show_settings(settings, as_json=json)
        return
    raise typer.Exit(run_service(settings))


def show_settings(settings: Settings, *, as_json: bool) -> None:
    """Print the settings in force, passwords masked, with where each came from."""
    rows = describe(settings)
    if as_json:
        print_json([row._asdict() for row in rows])
    else:
        print_table(("setting", "value", "from"), rows)


def run_service(settings: Settings, application: str = APPLICATION) -> int:
    """Run the store if it is embedded, and the HTTP server, until a signal; then end them in the other order.

    Args:
        settings: what is in force.
        application: import string of a function that builds the ASGI application.

    Returns:
        The exit status: 0 after a signal, 1 after a failure.

    """
    log.configure(settings.log_level, settings.log_format)
    for name, similar in unknown_variables(os.environ).items():
        logger.warning("unknown environment variable", variable=name, did_you_mean=similar)
    deaths: list[int] = []
    try:
        failed = _run(settings, application, deaths)
    except KeyboardInterrupt:
        failed = False
    except SystemExit:  # The HTTP server's way to end a start that failed; it has logged the reason.
        failed = True
    return FAILURE if failed or deaths else 0


def _run(settings: Settings, application: str, deaths: list[int]) -> bool:
    """Run everything; `deaths` receives the embedded server's status where it ended by itself."""
    with contextlib.ExitStack() as stack:
        stack.enter_context(_stop_on_sigterm())
        config = _configuration(settings, application)
        listening = stack.enter_context(config.bind_socket())
        url = stack.enter_context(_store(settings, deaths))
        stack.enter_context(_environment(settings, url))
        typer.echo(_greeting(settings, listening))
        return _answer(config, listening)


class _Supervisor(Multiprocess):
    """Notices at once that a worker has ended, and refuses connections while the workers end."""

    def keep_subprocess_alive(self) -> None:
        # While this process holds the worker's end too, a dead worker's pipe stays open for the whole health check.
        for process in self.processes:
            process.child_conn.close()
        super().keep_subprocess_alive()

    def terminate_all(self) -> None:
        for listening in self.sockets:
            listening.close()
        super().terminate_all()


def _configuration(settings: Settings, application: str) -> uvicorn.Config:
    return uvicorn.Config(
        application,
        factory=True,
        host=settings.host,
        port=settings.port,
        workers=settings.workers,
        loop="uvloop",
        http=ArrivalProtocol,
        log_config=None,
        access_log=False,
        server_header=False,
        timeout_keep_alive=KEEP_ALIVE_S,
        timeout_graceful_shutdown=settings.shutdown_grace_s,
        timeout_worker_healthcheck=HEALTHCHECK_S,
    )


def _answer(config: uvicorn.Config, listening: socket.socket) -> bool:
    """Answer requests until a signal; tell whether that failed at the start."""
    if config.workers == 1:
        server = uvicorn.Server(config)
        server.run([listening])
        return not server.started
    supervisor = _Supervisor(config, [listening])
    supervisor.run()
    return any(process.exitcode == STARTUP_FAILURE for process in supervisor.processes)


@contextlib.contextmanager
def _store(settings: Settings, deaths: list[int]) -> Iterator[str]:
    if settings.store_kind != "embedded":
        yield settings.store
        return

    def end(status: int) -> None:
        logger.error("the embedded server ended by itself; stopping the service", status=status)
        deaths.append(status)
        os.kill(os.getpid(), signal.SIGTERM)

    with EmbeddedServer(settings.data, settings.redis_binary, appendfsync=settings.appendfsync) as server:
        server.watch(end)
        yield server.url


@contextlib.contextmanager
def _environment(settings: Settings, url: str) -> Iterator[None]:
    """Hand the settings to the processes that answer, with the store's address in place of `embedded`."""
    os.environ.update(to_environment(settings.model_copy(update={"store": url})))
    if settings.workers == 1:
        yield
        return
    folder = tempfile.mkdtemp(prefix="waxwane-metrics-")
    os.environ[METRICS_VARIABLE] = folder
    try:
        yield
    finally:
        shutil.rmtree(folder, ignore_errors=True)


@contextlib.contextmanager
def _stop_on_sigterm() -> Iterator[None]:
    """Let SIGTERM end the block in order; the HTTP server passes the signal on when it has finished."""

    def stop(_signal: int, _frame: object) -> None:
        # A second one must not cut the orderly end short.
        signal.signal(signal.SIGTERM, signal.SIG_IGN)
        raise KeyboardInterrupt

    before = signal.signal(signal.SIGTERM, stop)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)


def _greeting(settings: Settings, listening: socket.socket) -> str:
    host = f"[{settings.host}]" if ":" in settings.host else settings.host
    store = mask_secrets(settings.store)
    where = f"{store}, in {settings.data}" if settings.store_kind == "embedded" else store
    return f"waxwane answers at http://{host}:{listening.getsockname()[1]} (store: {where}); Ctrl-C stops it."
