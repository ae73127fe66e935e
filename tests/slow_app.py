"""A small application for tests of the process around it: it speaks to the store, and waits when asked to."""

import os

import redis.asyncio
from starlette.applications import Starlette
from starlette.requests import Request
from starlette.responses import JSONResponse
from starlette.routing import Route

from service import worker
from service.settings import Settings


def create_app() -> Starlette:
    """Build it as the service's own application is built."""
    with worker.startup():
        settings = Settings.load()
        if settings.retention == "1h":
            raise RuntimeError("asked to fail at the start")
    store = redis.asyncio.Redis.from_url(settings.store, socket_timeout=30, decode_responses=True)

    async def who(_request: Request) -> JSONResponse:
        await store.ping()
        return JSONResponse({"pid": os.getpid(), "metrics": os.environ.get("PROMETHEUS_MULTIPROC_DIR")})

    async def slow(_request: Request) -> JSONResponse:
        await store.set("slow", "started")
        _, word = await store.blpop(["release"], timeout=20)  # type: ignore[misc]  # the client's types are a union
        return JSONResponse({"word": word, "answers": await store.ping()})

    return Starlette(routes=[Route("/who", who), Route("/slow", slow)])
