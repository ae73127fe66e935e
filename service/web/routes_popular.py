"""GET /v1/popular: what counts most for everybody."""

from typing import Annotated

import orjson
from fastapi import APIRouter, Query, Request
from starlette.responses import Response

from service.feed.answers import popular_document
from service.feed.types import PopularRequest
from service.web import clock, documents, schemas
from service.web.middleware import arrived_s
from service.web.parameters import PopularQuery, as_of_within, known_only
from service.web.state import state_of

router = APIRouter()


@router.get(
    "/v1/popular",
    summary="Read what is popular",
    responses=documents.answers(schemas.PopularPage, 422, 429, 503),
)
async def read_popular(request: Request, query: Annotated[PopularQuery, Query()]) -> Response:
    """Rank the posts that count most for everybody, for a screen that would be empty; only what everyone may see."""
    known_only(request, PopularQuery.model_fields)
    now_ms = clock.now_ms()
    asked = PopularRequest(
        k=query.k,
        reader=query.reader,
        policy=query.policy,
        as_of_ms=as_of_within(query.as_of, now_ms),
        forms=query.form,
        topics=query.topics,
    )
    answer = await state_of(request).engine.popular(asked, now_ms, arrived_s(request.scope))
    return Response(orjson.dumps(popular_document(answer)), media_type="application/json")
