"""The one map from errors to RFC 9457 problems. Every error response of the service is made here."""

import json
import logging
from http import HTTPStatus
from typing import Any

from fastapi import FastAPI, Request
from fastapi.exceptions import RequestValidationError
from starlette.exceptions import HTTPException
from starlette.responses import Response

from service.errors import (
    Conflict,
    FieldError,
    Forbidden,
    InvalidInput,
    LeastbendError,
    MalformedInput,
    NotFound,
    Overloaded,
    RateLimited,
    TooLarge,
    Unauthenticated,
    Unusable,
)
from service.web.headers import HEADERS, NOT_KEPT
from service.web.methods import allowed
from service.web.strict_json import UnsupportedType, field_errors

STATUS: tuple[tuple[type[LeastbendError], int], ...] = (  # the first that fits
    (UnsupportedType, 415),
    (MalformedInput, 400),
    (InvalidInput, 422),
    (TooLarge, 413),
    (NotFound, 404),
    (Conflict, 409),
    (Unauthenticated, 401),
    (Forbidden, 403),
    (RateLimited, 429),
    (Overloaded, 503),
    (Unusable, 503),
)
MEDIA_TYPE = "application/problem+json"
log = logging.getLogger("leastbend.web")


def install(app: FastAPI) -> None:
    """Make every error of `app` a problem."""
    app.add_exception_handler(LeastbendError, _known)
    app.add_exception_handler(RequestValidationError, _invalid)
    app.add_exception_handler(HTTPException, _http)
    app.add_exception_handler(Exception, _unknown)


Responses = dict[int | str, dict[str, Any]]


def documented(*statuses: int, also: Responses | None = None) -> Responses:
    """`responses` of an operation: problems with these statuses, and `also` as it is."""
    content = {MEDIA_TYPE: {"schema": {"$ref": "#/components/schemas/Problem"}}}
    problems: Responses = {
        status: {"description": HTTPStatus(status).phrase, "content": content} for status in statuses
    }
    return problems | (also or {})


def problem(
    request: Request,
    status: int,
    code: str,
    detail: str,
    *,
    errors: tuple[FieldError, ...] = (),
    headers: dict[str, str] | None = None,
) -> Response:
    """One problem as a response."""
    body: dict[str, Any] = {
        "type": "about:blank",
        "title": HTTPStatus(status).phrase,
        "status": status,
        "code": code,
        "detail": detail,
    }
    if errors:
        body["errors"] = [{"pointer": one.pointer, "message": one.message} for one in errors]
    request_id = getattr(request.state, "request_id", None)
    if request_id is not None:
        body["request_id"] = request_id
    content = json.dumps(body, allow_nan=False).encode()
    return Response(content, status_code=status, media_type=MEDIA_TYPE, headers=headers)


def _known(request: Request, error: Exception) -> Response:
    assert isinstance(error, LeastbendError)
    status = next(status for kind, status in STATUS if isinstance(error, kind))
    headers = {}
    if isinstance(error, Overloaded):
        headers["Retry-After"] = str(error.retry_after)
    if isinstance(error, Unauthenticated):
        headers["WWW-Authenticate"] = 'Bearer realm="leastbend"'
    errors = error.errors if isinstance(error, InvalidInput) else ()
    return problem(request, status, error.code, error.message, errors=errors, headers=headers)


def _invalid(request: Request, error: Exception) -> Response:
    assert isinstance(error, RequestValidationError)
    errors = tuple(field_errors(error.errors()))
    return problem(request, 422, "invalid_input", str(errors[0]), errors=errors)


def _http(request: Request, error: Exception) -> Response:
    assert isinstance(error, HTTPException)
    if error.status_code == 405:
        allow = {"Allow": allowed(request.app.routes, request.scope)}
        if request.method == "OPTIONS":
            return Response(status_code=204, headers=allow)
        detail = f"{request.method} is not allowed here; allowed: {allow['Allow']}"
        return problem(request, 405, "method_not_allowed", detail, headers=allow)
    codes = {404: "not_found"}
    code = codes.get(error.status_code, HTTPStatus(error.status_code).phrase.lower().replace(" ", "_"))
    details = {404: f"there is nothing at {request.url.path}"}
    detail = details.get(error.status_code, str(error.detail))
    return problem(request, error.status_code, code, detail, headers=dict(error.headers or {}))


def _unknown(request: Request, error: Exception) -> Response:
    log.error("unexpected error", exc_info=error, extra={"request_id": getattr(request.state, "request_id", None)})
    # Made outside every middleware, so the headers are set here.
    headers = {name.decode(): value.decode() for name, value in (*HEADERS, NOT_KEPT)}
    headers["X-Request-Id"] = str(getattr(request.state, "request_id", ""))
    detail = "an unexpected error; it is in the log under this request_id"
    return problem(request, 500, "internal_error", detail, headers=headers)
