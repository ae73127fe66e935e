"""/v1/policies: the policies that feeds are ranked with."""

from typing import Any, Final

import orjson
from fastapi import APIRouter, Request
from starlette.responses import Response

from service.errors import Fault, MalformedBody, UnsupportedMedia
from service.feed.types import PolicyInfo
from service.web import documents, schemas
from service.web.parameters import PathId, known_only
from service.web.reading import read_body
from service.web.state import state_of

POLICY_BYTES: Final = 64 * 1024
_MEDIA_TYPES: Final = ("application/toml", "text/plain")

router = APIRouter()


@router.get(
    "/v1/policies",
    summary="List the policies",
    responses=documents.answers(schemas.PoliciesAnswer, 422, 429, 503),
)
async def list_policies(request: Request) -> Response:
    """List the loaded policies."""
    known_only(request)
    policies = await state_of(request).engine.policies()
    return Response(orjson.dumps({"policies": [_info(policy) for policy in policies]}), media_type="application/json")


@router.put(
    "/v1/policies/{name:id}",
    summary="Load a policy",
    responses=documents.answers(schemas.PolicyAnswer, 400, 409, 413, 415, 422, 429, 503),
    openapi_extra={"requestBody": documents.policy_body(_MEDIA_TYPES)},
)
async def put_policy(request: Request, name: PathId) -> Response:
    """Load a policy from TOML; one with an error is refused whole and the one in force stays."""
    known_only(request)
    _check_media_type(request.headers.get("content-type"))
    text = _text(await read_body(request, POLICY_BYTES))
    policy = await state_of(request).engine.put_policy(name, text)
    return Response(orjson.dumps(_info(policy)), media_type="application/json")


def _check_media_type(content_type: str | None) -> None:
    if content_type is not None and content_type.partition(";")[0].strip().lower() not in _MEDIA_TYPES:
        raise UnsupportedMedia("Content-Type", content_type, ", ".join(_MEDIA_TYPES))


def _text(body: bytes) -> str:
    try:
        return body.decode("utf-8")
    except UnicodeDecodeError as error:
        fault = Fault("body", f"byte {body[error.start]:#04x} at {error.start}", "TOML in UTF-8")
        raise MalformedBody(fault.sentence(), [fault]) from error


def _info(policy: PolicyInfo) -> dict[str, Any]:
    return {
        "name": policy.name,
        "default": policy.default,
        "exact": policy.exact,
        "error": policy.error,
        "settings": policy.settings,
        "toml": policy.toml,
    }
