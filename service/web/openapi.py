"""The OpenAPI document: what the framework makes, completed with events and problems."""

from functools import lru_cache, partial
from typing import Any, Final

import orjson
from fastapi import APIRouter, FastAPI, Request
from fastapi.openapi.utils import get_openapi
from starlette.responses import Response

from service.web import examples
from service.web.documents import REFERENCE, event_schemas, problem_answer
from service.web.schemas import Problem

TITLE: Final = "waxwane"
VERSION: Final = "1"
DESCRIPTION: Final = """\
Takes post and interaction events and ranks each reader's feed.

Ids are 1 to 128 bytes of UTF-8 without control characters; in a path they are percent-encoded, a slash as
`%2F`. Times are RFC 3339 with an offset, or Unix milliseconds. Every error is a problem document (RFC 9457).

Ranking steers what people see. Weights on engagement favour whatever engages, harm among it; minors and people in a
crisis need care that no formula gives. All events are personal data: who did what, when and to whom. What is allowed,
and what must be told, offered or switched off, the law and the codes of the place decide.
"""


router = APIRouter()


@router.get("/openapi.json", include_in_schema=False)
async def read_openapi(request: Request) -> Response:
    """Serve the document."""
    return Response(orjson.dumps(request.app.openapi()), media_type="application/json")


def install(app: FastAPI) -> None:
    """Let an application serve the completed document."""
    app.include_router(router)
    app.openapi = lru_cache(maxsize=1)(partial(_document, app))  # type: ignore[method-assign]


def _document(app: FastAPI) -> dict[str, Any]:
    document = get_openapi(title=TITLE, version=VERSION, description=DESCRIPTION, routes=app.routes)
    problem = Problem.model_json_schema(ref_template=REFERENCE)
    components = document.setdefault("components", {}).setdefault("schemas", {})
    components.update(problem.pop("$defs"))
    components.update({"Problem": {**problem, "examples": [examples.PROBLEM]}, **event_schemas()})
    for operations in document["paths"].values():
        for operation in operations.values():
            _only_problems(operation["responses"])
            _without_null(operation.get("parameters", []))
    for unused in ("HTTPValidationError", "ValidationError"):
        components.pop(unused, None)
    return document


def _only_problems(responses: dict[str, Any]) -> None:
    """Put a problem document wherever the framework put its own error, and for what is not listed."""
    if "application/json" in responses.get("422", {}).get("content", {}):
        del responses["422"]
    responses["default"] = problem_answer("Any other error")


def _without_null(parameters: list[dict[str, Any]]) -> None:
    """Describe parameters that may be left out without a null, which a query can't hold."""
    for parameter in parameters:
        schema = parameter["schema"]
        options = [option for option in schema.get("anyOf", []) if option != {"type": "null"}]
        if len(options) == 1:
            del schema["anyOf"]
            schema.update(options[0])
