"""What operators ask: metrics, whether the process lives, whether it takes calls."""

import orjson
from fastapi import APIRouter, Request
from starlette.responses import Response

from service.errors import NotReady
from service.web import documents, metrics, schemas
from service.web.state import state_of

router = APIRouter()


@router.get("/metrics", summary="Prometheus metrics", responses=documents.METRICS_ANSWER)
async def read_metrics(request: Request) -> Response:
    """Write the metrics page."""
    return Response(state_of(request).metrics.page(), headers={"Content-Type": metrics.CONTENT_TYPE})


@router.get("/livez", summary="Whether the process lives", responses=documents.answers(schemas.Health))
async def read_liveness() -> Response:
    """Say that the process answers; the store is not asked."""
    return _ok()


@router.get("/readyz", summary="Whether calls are taken", responses=documents.answers(schemas.Health, 503))
async def read_readiness(request: Request) -> Response:
    """Say whether calls are taken: the store answers and the process is not going away."""
    state = state_of(request)
    if state.draining:
        raise NotReady("the service is going away and takes no new calls")
    await state.engine.ping()
    return _ok()


def _ok() -> Response:
    return Response(orjson.dumps({"status": "ok"}), media_type="application/json")
