"""GET /v1/exposures: what feeds have shown, and with what chance."""

from typing import Annotated

import orjson
from fastapi import APIRouter, Query, Request
from starlette.responses import Response

from service.events.bodies import NDJSON
from service.web import documents
from service.web.parameters import ExposuresQuery, known_only
from service.web.state import state_of

router = APIRouter()


@router.get("/v1/exposures", summary="Read what was shown", responses=documents.EXPOSURES_ANSWERS)
async def read_exposures(request: Request, query: Annotated[ExposuresQuery, Query()]) -> Response:
    """List logged pages of feeds, oldest first, one a line; none where the setting `exposure` is off."""
    known_only(request, ExposuresQuery.model_fields)
    found = await state_of(request).engine.exposures(query.after, query.count)
    return Response(b"".join(orjson.dumps(one) + b"\n" for one in found), media_type=NDJSON)
