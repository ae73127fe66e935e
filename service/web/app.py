"""Puts the HTTP application together."""

from collections.abc import AsyncIterator
from contextlib import asynccontextmanager

from fastapi import FastAPI

from service.web import (
    openapi,
    problems,
    routes_events,
    routes_exposures,
    routes_feeds,
    routes_health,
    routes_people,
    routes_policies,
    routes_popular,
)
from service.web.middleware import Observe, RawPath
from service.web.port import FeedEngine, Limits, WebSettings
from service.web.state import WebState, put_state


def create_app(engine: FeedEngine | None = None, settings: WebSettings | None = None) -> FastAPI:
    """Make the application; the engine is started and closed with it.

    Args:
        engine: what takes events and ranks feeds; None makes one from the environment's settings.
        settings: the limits of calls; None takes those of the environment, or defaults beside a given engine.

    Returns:
        An ASGI application.

    """
    if engine is None:
        engine, settings = _from_environment(settings)
    state = WebState(engine, settings or Limits())
    app = FastAPI(lifespan=_lifespan, docs_url=None, redoc_url=None, openapi_url=None, redirect_slashes=False)
    put_state(app, state)
    for routes in (
        routes_feeds,
        routes_events,
        routes_popular,
        routes_exposures,
        routes_people,
        routes_policies,
        routes_health,
    ):
        app.include_router(routes.router)
    problems.install(app)
    openapi.install(app)
    app.add_middleware(RawPath)
    app.add_middleware(Observe, metrics=state.metrics)
    return app


def _from_environment(given: WebSettings | None) -> tuple[FeedEngine, WebSettings]:
    from service.engine import Engine  # noqa: PLC0415  tests of the edge need no store
    from service.settings import Settings  # noqa: PLC0415  as above

    settings = given if isinstance(given, Settings) else Settings.load()
    return Engine.from_settings(settings), given or settings


@asynccontextmanager
async def _lifespan(app: FastAPI) -> AsyncIterator[None]:
    engine: FeedEngine = app.state.waxwane.engine
    await engine.start()
    try:
        yield
    finally:
        await engine.close()
