"""What each process that answers requests runs: the application, with its settings from the environment."""

import contextlib
import multiprocessing
import os
from collections.abc import Iterator

import structlog
from starlette.types import ASGIApp
from uvicorn.config import STARTUP_FAILURE

from service import log
from service.settings import Settings
from service.tether import end_with_parent

logger = structlog.get_logger(__name__)


def create_app() -> ASGIApp:
    """Set up this process and build the application."""
    with startup():
        from service.web.app import create_app as create_web_app  # noqa: PLC0415  logging is set up before it loads

        return create_web_app()


@contextlib.contextmanager
def startup() -> Iterator[None]:
    """Set up logging, tie a worker to the process that started it, and run the block that builds the application.

    Raises:
        SystemExit: the block failed; the status tells the supervisor not to try again for ever.

    """
    settings = Settings.load()
    log.configure(settings.log_level, settings.log_format)
    if multiprocessing.parent_process() is not None:
        end_with_parent(os.getppid())
    try:
        yield
    except Exception:
        logger.exception("the application cannot start")
        raise SystemExit(STARTUP_FAILURE) from None
