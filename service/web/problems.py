"""Errors as problem details (Nottingham, Wilde and Dalal, RFC 9457, 2023): one table, one shape."""

from collections.abc import Mapping, Sequence
from http import HTTPStatus
from typing import Any, Final

import orjson
from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from starlette.exceptions import HTTPException
from starlette.requests import ClientDisconnect
from starlette.responses import Response

from service import errors
from service.errors import MISSING, Fault, WaxwaneError, shown
from service.events.faults import describe_faults, fault_of

MEDIA_TYPE: Final = "application/problem+json"
_SHOWN_ERRORS: Final = 20

STATUS: Final[Mapping[type[WaxwaneError], tuple[int, str]]] = {
    errors.MalformedBody: (400, "The body can't be read"),
    errors.CursorInvalid: (400, "The cursor is not valid"),
    errors.NotFound: (404, "Not found"),
    errors.Conflict: (409, "The call contradicts what is stored"),
    errors.CursorExpired: (410, "The cursor has expired"),
    errors.BodyTooLarge: (413, "The body is too large"),
    errors.UnsupportedMedia: (415, "The media type is not supported"),
    errors.AllRejected: (422, "Every event was rejected"),
    errors.InvalidField: (422, "A value is not allowed"),
    errors.PolicyRefused: (422, "The policy was refused"),
    errors.UnknownPolicy: (422, "The policy is not loaded"),
    errors.Overloaded: (429, "Too many calls"),
    errors.NotReady: (503, "Not ready"),
    errors.StoreUnavailable: (503, "The store is unavailable"),
    WaxwaneError: (500, "The call failed"),
}
"""The status and title of each error."""


def problem(
    status: int,
    title: str,
    detail: str,
    *,
    errors: Sequence[Mapping[str, Any]] = (),
    extensions: Mapping[str, Any] | None = None,
    headers: Mapping[str, str] | None = None,
) -> Response:
    r"""Make a problem response.

    Args:
        status: HTTP status.
        title: what sort of problem, the same each time.
        detail: what happened this time.
        errors: `{field, value, allowed}` of each thing that was wrong.
        extensions: more members.
        headers: more headers.

    >>> problem(404, "Not found", "no post 'p9'").body
    b'{"type":"about:blank","title":"Not found","status":404,"detail":"no post \'p9\'"}'

    """
    document: dict[str, Any] = {"type": "about:blank", "title": title, "status": status, "detail": detail}
    if errors:
        document["errors"] = list(errors)
    document.update(extensions or {})
    return Response(orjson.dumps(document), status, headers, MEDIA_TYPE)


def fault_entry(fault: Fault) -> dict[str, Any]:
    """Write a fault as an entry of `errors`; a value that was not sent is left out."""
    value = {} if fault.value is MISSING else {"value": shown(fault.value)}
    return {"field": fault.field or "body", **value, "allowed": fault.allowed}


def of_error(error: WaxwaneError) -> Response:
    """Make the problem response of an error."""
    status, title = next(STATUS[kind] for kind in type(error).__mro__ if kind in STATUS)
    entries = [fault_entry(fault) for fault in error.faults[:_SHOWN_ERRORS]]
    extensions: Mapping[str, Any] = {}
    headers: dict[str, str] = {}
    if isinstance(error, errors.AllRejected):
        extensions = error.answer
    elif isinstance(error, errors.PolicyRefused):
        entries = [_policy_entry(one) for one in error.problems[:_SHOWN_ERRORS]]
    elif isinstance(error, errors.Overloaded | errors.StoreUnavailable | errors.NotReady):
        headers["Retry-After"] = str(error.retry_after_s)
    return problem(status, title, error.detail, errors=entries, extensions=extensions, headers=headers)


def _policy_entry(problem: errors.PolicyProblem) -> dict[str, Any]:
    line = {} if problem.line is None else {"line": problem.line}
    return {"field": problem.field or "policy", **line, "reason": problem.reason}


def of_validation(error: RequestValidationError) -> Response:
    """Make the problem response of parameters that are not valid."""
    faults = [fault_of(details, details["loc"][1:]) for details in error.errors()]
    status, title = STATUS[errors.InvalidField]
    entries = [fault_entry(fault) for fault in faults[:_SHOWN_ERRORS]]
    return problem(status, title, describe_faults(faults), errors=entries)


def of_http(error: HTTPException, method: str, path: str) -> Response:
    """Make the problem response of what the router refuses: no such address, or not with this method."""
    title = HTTPStatus(error.status_code).phrase
    headers = error.headers or {}
    if error.status_code == HTTPStatus.METHOD_NOT_ALLOWED:
        entry = {"field": "method", "value": shown(method), "allowed": headers.get("Allow", "")}
        detail = f"method {shown(method)!r} is not allowed here; allowed: {entry['allowed']}"
        return problem(error.status_code, title, detail, errors=[entry], headers=headers)
    if error.status_code == HTTPStatus.NOT_FOUND:
        fault = Fault("path", path, "a path of those that /openapi.json lists")
        return problem(error.status_code, title, fault.sentence(), errors=[fault_entry(fault)])
    return problem(error.status_code, title, str(error.detail), headers=headers)


def internal() -> Response:
    """Make the problem response of an unforeseen error; it tells nothing of the inside."""
    return problem(500, "Internal error", "the call failed for a reason that the log holds")


def install(app: FastAPI) -> None:
    """Answer every error of an application with a problem document."""

    @app.exception_handler(WaxwaneError)
    async def _waxwane(_: Request, error: WaxwaneError) -> Response:
        return of_error(error)

    @app.exception_handler(RequestValidationError)
    async def _validation(_: Request, error: RequestValidationError) -> Response:
        return of_validation(error)

    @app.exception_handler(HTTPException)
    async def _http(request: Request, error: HTTPException) -> Response:
        return of_http(error, request.method, request.scope["path"])

    @app.exception_handler(ClientDisconnect)
    async def _gone(_: Request, __: ClientDisconnect) -> Response:
        return problem(400, "The body can't be read", "the connection ended before the body did")
