"""GET /v1/feeds/…: a reader's feed, and why a post has its score."""

from collections.abc import Callable, Coroutine
from typing import Annotated, Any

import orjson
from fastapi import APIRouter, Query, Request
from fastapi.routing import APIRoute
from starlette.responses import Response

from service.feed.answers import explanation_document, page_document
from service.feed.types import ExplainRequest, FeedRequest
from service.web import clock, documents, schemas
from service.web.middleware import arrived_s
from service.web.parameters import ExplainQuery, FeedQuery, PathId, as_of_within, feed_query, known_only, path_id
from service.web.state import state_of


class FeedRoute(APIRoute):
    """The route of feed reads: described as all others, its parameters read by `parameters.feed_query`."""

    def get_route_handler(self) -> Callable[[Request], Coroutine[Any, Any, Response]]:
        """Give what handles a request."""

        async def handle(request: Request) -> Response:
            return await read_feed(request, path_id(request, "reader"), feed_query(request))

        return handle


router = APIRouter()
_feeds = APIRouter(route_class=FeedRoute)


@_feeds.get(
    "/v1/feeds/{reader:id}",
    summary="Read a feed",
    responses=documents.answers(schemas.FeedPage, 400, 410, 422, 429, 503, headers=documents.SERVER_TIMING),
)
async def read_feed(request: Request, reader: PathId, query: Annotated[FeedQuery, Query()]) -> Response:
    """Rank the reader's next posts; a reader never heard of gets a feed too."""
    now_ms = clock.now_ms()
    feed_request = _feed_request(reader, query, now_ms)
    answer = await state_of(request).engine.feed(feed_request, now_ms, arrived_s(request.scope))
    headers = {"Server-Timing": _server_timing(answer.stages_ms, clock.since_ms(arrived_s(request.scope)))}
    return Response(
        orjson.dumps(page_document(answer, why=feed_request.why)), headers=headers, media_type="application/json"
    )


router.include_router(_feeds)


@router.get(
    "/v1/feeds/{reader:id}/posts/{post:id}",
    summary="Explain a score",
    responses=documents.answers(schemas.ExplanationAnswer, 404, 422, 429, 503),
)
async def explain_score(
    request: Request, reader: PathId, post: PathId, query: Annotated[ExplainQuery, Query()]
) -> Response:
    """Say why a post has its score for a reader; 404 where the reader may not see the post."""
    known_only(request, ExplainQuery.model_fields)
    now_ms = clock.now_ms()
    asked = ExplainRequest(reader, post, query.policy, as_of_within(query.as_of, now_ms))
    explanation = await state_of(request).engine.explain(asked, now_ms)
    return Response(orjson.dumps(explanation_document(explanation)), media_type="application/json")


def _feed_request(reader: str, query: FeedQuery, now_ms: int) -> FeedRequest:
    """Ask for a page; with a cursor `as_of` is that of the first page, which may lie behind by now."""
    return FeedRequest(
        reader=reader,
        k=query.k,
        budget_ms=query.budget_ms,
        order=query.order,
        cursor=query.cursor,
        policy=query.policy,
        as_of_ms=query.as_of if query.cursor else as_of_within(query.as_of, now_ms),
        explore=query.explore == 1,
        forms=query.form,
        topics=query.topics,
        why=query.why == 1,
    )


def _server_timing(stages_ms: dict[str, float], total_ms: float) -> str:
    """Write the stages as the Server Timing specification of the W3C has them, durations in milliseconds."""
    return ", ".join(f"{name};dur={duration:.3f}" for name, duration in {**stages_ms, "total": total_ms}.items())
