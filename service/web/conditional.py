"""Conditional requests (RFC 9110 §13): an answer that the caller has already is not sent again."""

from fastapi import Request
from starlette.responses import Response


def conditional(request: Request, tag: str, response: Response) -> Response:
    """`response` with its ETag, or 304 where If-None-Match holds it."""
    quoted = f'"{tag}"'
    response.headers["ETag"] = quoted
    asked = request.headers.get("if-none-match", "")
    known = [one.strip().removeprefix("W/") for one in asked.split(",")]
    if quoted not in known and "*" not in known:
        return response
    kept = {name: value for name, value in response.headers.items() if name in ("etag", "location", "cache-control")}
    return Response(status_code=304, headers=kept)
