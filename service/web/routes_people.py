"""GET /v1/people/…: what is stored about a person."""

import orjson
from fastapi import APIRouter, Request
from starlette.responses import Response

from service.web import clock, documents, schemas
from service.web.parameters import PathId, known_only
from service.web.state import state_of

router = APIRouter()


@router.get(
    "/v1/people/{person:id}",
    summary="Export what is stored about a person",
    responses=documents.answers(schemas.PersonAnswer, 422, 429, 503),
)
async def export_person(request: Request, person: PathId) -> Response:
    """Return all that is stored about a person."""
    known_only(request)
    stored = await state_of(request).engine.export(person, clock.now_ms())
    return Response(orjson.dumps(stored), media_type="application/json")
