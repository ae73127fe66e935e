"""POST /v1/events: takes events."""

from collections.abc import Sequence
from typing import Any

import orjson
from fastapi import APIRouter, Request
from starlette.responses import Response

from service.errors import AllRejected, Fault, shown
from service.events.bodies import ParsedBatch, Rejection, parse_body
from service.events.cloudevents import shown_id
from service.store.verdict import Verdict
from service.web import clock, documents, schemas
from service.web.metrics import WebMetrics
from service.web.parameters import known_only
from service.web.reading import read_body
from service.web.state import state_of

router = APIRouter()


@router.post(
    "/v1/events",
    summary="Take events",
    description=documents.EVENTS_DESCRIPTION,
    responses=documents.answers(schemas.EventsAnswer, 400, 413, 415, 422, 429, 503),
    openapi_extra={"requestBody": documents.events_body()},
)
async def post_events(request: Request) -> Response:
    """Apply the events of a body and say what became of each."""
    now_ms = clock.now_ms()
    known_only(request)
    state = state_of(request)
    body = await read_body(request, state.limits.max_body_bytes)
    batch = parse_body(body, request.headers.get("content-type"), request.headers, max_batch=state.limits.max_batch)
    events = [event for _, event in batch.events]
    verdicts = await state.engine.apply(events, now_ms) if events else []
    _count(state.metrics, batch, verdicts)
    rejected = sorted([*batch.rejected, *_refused(batch, verdicts)], key=lambda rejection: rejection.index)
    answer = _answer(verdicts, rejected)
    if rejected and len(rejected) == batch.total:
        raise AllRejected(answer, _faults(batch, rejected))
    return Response(orjson.dumps(answer), media_type="application/json")


def _refused(batch: ParsedBatch, verdicts: Sequence[Verdict]) -> list[Rejection]:
    return [
        Rejection(index, shown_id(event.id), verdict.reason or "it is not allowed")
        for (index, event), verdict in zip(batch.events, verdicts, strict=True)
        if verdict.outcome == "rejected"
    ]


def _answer(verdicts: Sequence[Verdict], rejected: Sequence[Rejection]) -> dict[str, Any]:
    outcomes = [verdict.outcome for verdict in verdicts]
    counts: dict[str, Any] = {name: outcomes.count(name) for name in ("applied", "duplicate", "expired")}
    entries = [{"index": one.index, "id": shown(one.id), "reason": one.reason} for one in rejected]
    return {**counts, "rejected": entries}


def _faults(batch: ParsedBatch, rejected: Sequence[Rejection]) -> list[Fault]:
    """List what was wrong, by field; a rejection without fields names the event."""
    faults: list[Fault] = []
    for one in rejected:
        own = one.faults or [Fault("", one.id, one.reason)]
        faults += own if batch.single else [fault.within(f"[{one.index}]") for fault in own]
    return faults


def _count(metrics: WebMetrics, batch: ParsedBatch, verdicts: Sequence[Verdict]) -> None:
    metrics.events((event.type, verdict.outcome) for (_, event), verdict in zip(batch.events, verdicts, strict=True))
    metrics.events(("unknown", "rejected") for _ in batch.rejected)
