"""Open the store and an engine on it, for commands that work on it directly."""

import asyncio
import contextlib
from collections.abc import Callable, Coroutine, Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final, Protocol, TypeVar

from service import log
from service.addresses import mask_secrets
from service.embedded import attach_or_start
from service.errors import StoreUnavailable, WaxwaneError
from service.settings import Settings

if TYPE_CHECKING:
    from service.engine import Engine

T = TypeVar("T")

STORE_SETTINGS: Final = (
    "store",
    "data",
    "redis_binary",
    "appendfsync",
    "policies",
    "default_policy",
    "retention",
    "bank",
    "store_timeout_ms",
    "write_timeout_ms",
    "log_level",
    "log_format",
)
"""The settings that such commands have options for."""


class Run(Protocol):
    """Runs a coroutine to its end."""

    def __call__(self, coroutine: Coroutine[Any, Any, T], /) -> T:
        """Give what it returns."""


@dataclass(frozen=True, slots=True)
class Opened:
    """An engine that has started, and what runs its coroutines."""

    engine: "Engine"
    run: Run


@contextlib.contextmanager
def opened(settings: Settings, *, background: bool) -> Iterator[Opened]:
    """Open the store for as long as the `with` block lasts.

    The embedded store is the running service's, where one runs; else one is started, and ended with the block.

    Args:
        settings: what is in force.
        background: also sweep the store now and then, as long writing needs.

    Raises:
        WaxwaneError: the store does not answer, or can't be used with these settings.

    """
    _configure_log(settings)
    with _store(settings) as url, asyncio.Runner() as runner:
        engine = _engine(settings.model_copy(update={"store": url}))
        try:
            _start(runner.run, engine, url, background=background)
            yield Opened(engine, runner.run)
        finally:
            runner.run(engine.close())


def _configure_log(settings: Settings) -> None:
    """Keep the log from coming between the lines of a table, where nobody has asked for it."""
    quiet = settings.origin("log_level") == "default"
    form = "text" if settings.origin("log_format") == "default" else settings.log_format
    log.configure("warning" if quiet else settings.log_level, form)


@contextlib.contextmanager
def _store(settings: Settings) -> Iterator[str]:
    if settings.store_kind != "embedded":
        yield settings.store
        return
    with attach_or_start(settings.data, settings.redis_binary, appendfsync=settings.appendfsync) as url:
        yield url


def _engine(settings: Settings) -> "Engine":
    from service.engine import Engine  # noqa: PLC0415  it loads numpy and more, which most commands do without

    return Engine.from_settings(settings)


def _start(run: Callable[[Coroutine[Any, Any, None]], None], engine: "Engine", url: str, *, background: bool) -> None:
    try:
        run(engine.start(background=background))
    except StoreUnavailable as error:
        raise WaxwaneError(f"store {mask_secrets(url)} does not answer; start it, or correct the setting") from error
