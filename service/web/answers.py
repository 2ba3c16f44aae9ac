"""Responses made of JSON that is already at hand: documents from the store go out as they were stored."""

import json
from typing import Any

from starlette.responses import Response


def json_response(value: Any, *, status: int = 200, headers: dict[str, str] | None = None) -> Response:
    """A value as JSON; refuses NaN."""
    return document_response(json.dumps(value, allow_nan=False, ensure_ascii=False).encode(), status, headers)


def document_response(document: bytes, status: int = 200, headers: dict[str, str] | None = None) -> Response:
    """JSON text as it is."""
    return Response(document, status_code=status, media_type="application/json", headers=headers)
