"""The interactive reference: Swagger UI, whose files come with the package, so that it works with no internet."""

import hashlib
import json
from importlib.resources import files
from pathlib import Path

from fastapi import APIRouter, Request
from starlette.responses import HTMLResponse, Response
from starlette.staticfiles import StaticFiles

from service.web.answers import document_response
from service.web.conditional import conditional
from service.web.headers import POLICY

router = APIRouter(include_in_schema=False)
ASSETS = StaticFiles(directory=Path(str(files("service.web").joinpath("reference"))))
# The library sets style attributes, and draws with images inside its style sheet.
RELAXED = POLICY.replace("style-src 'self'", "style-src 'self' 'unsafe-inline'")
PAGE = """<!doctype html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta name="viewport" content="width=device-width, initial-scale=1">
<title>Leastbend: HTTP reference</title>
<link rel="icon" href="data:,">
<link rel="stylesheet" href="/docs/files/swagger-ui.css">
</head>
<body>
<main id="reference"><noscript>The reference needs JavaScript; the same document is at /openapi.json.</noscript></main>
<script src="/docs/files/swagger-ui-bundle.js"></script>
<script src="/docs/files/start.js"></script>
</body>
</html>
"""


@router.get("/openapi.json")
def get_document(request: Request) -> Response:
    """The OpenAPI document. Making it takes a second, in a thread: the event loop goes on meanwhile."""
    document = json.dumps(request.app.openapi(), ensure_ascii=False).encode()
    return conditional(request, hashlib.sha256(document).hexdigest(), document_response(document))


@router.get("/docs")
def get_reference() -> HTMLResponse:
    """The page."""
    return HTMLResponse(PAGE, headers={"Content-Security-Policy": RELAXED})
