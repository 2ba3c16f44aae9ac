"""The OpenAPI document: what FastAPI finds, the bodies that routes read themselves, and the examples.

Examples are the files in openapi_examples/: OPERATION/CASE.request.json and OPERATION/CASE.response.json.
"""

import json
from collections import defaultdict
from functools import cache
from typing import Any

from fastapi import FastAPI
from fastapi.openapi.utils import get_openapi
from pydantic import BaseModel
from pydantic.json_schema import JsonSchemaMode, models_json_schema

from service.settings import Settings
from service.store.migrate import resources
from service.web.openapi_details import add_headers, pairs_as_arrays, parameters_are_text, state_limits
from service.web.problems import MEDIA_TYPE
from service.web.schemas.common import Body, Problem

REFERENCE = "#/components/schemas/{model}"
METHODS = ("get", "post", "put", "patch", "delete")
ABOUT = """Chooses the least polynomial degree that calibration data can defend, says how much bend could have gone \
unseen, checks what a statistician would check, and keeps a verdict that can be verified and replayed.

A statistical check does not replace the laboratory's validated procedure or a qualified person's review. Never \
extrapolate beyond the calibrated range. Where people can be hurt (lifting, pressure, dosing, medical use) the \
governing standard, local code and licensed practice decide.

Errors are RFC 9457 problems with a stable `code`; for bad input `errors` names each field by RFC 6901 pointer."""


def takes(model: type[Body], *types: str) -> dict[str, Any]:
    """`openapi_extra` of an operation that reads `model` as JSON, and perhaps other types that say the same."""
    content: dict[str, Any] = {"application/json": {"schema": {"$ref": REFERENCE.format(model=model.__name__)}}}
    for one in types:
        content[one] = {"schema": {"type": "string", "format": "binary", "minLength": 1}}
    return {"requestBody": {"required": True, "content": content}}


def lines_of(model: str) -> dict[str, Any]:
    """Schema of NDJSON: text whose every line is one `model`."""
    content = {"$ref": REFERENCE.format(model=model)}
    return {"type": "string", "contentMediaType": "application/x-ndjson", "contentSchema": content}


def describe(app: FastAPI, settings: Settings, *bodies: type[Body], also: tuple[type[BaseModel], ...] = ()) -> None:
    """Give `app` its document, made when first asked for: `bodies` that routes read, `also` lines that they stream."""

    def document() -> dict[str, Any]:
        if app.openapi_schema is None:
            app.openapi_schema = _document(app, settings, bodies, also)
        return app.openapi_schema

    app.openapi = document  # type: ignore[method-assign]  # FastAPI's documented way


def _document(
    app: FastAPI, settings: Settings, bodies: tuple[type[Body], ...], also: tuple[type[BaseModel], ...]
) -> dict[str, Any]:
    document = get_openapi(
        title=app.title,
        version=app.version,
        openapi_version="3.1.0",
        summary="Chooses and defends the degree of a calibration polynomial",
        description=ABOUT,
        routes=app.routes,
        contact={"name": "The administrator of this installation"},
        license_info={"name": "Apache 2.0", "identifier": "Apache-2.0"},
        tags=[
            {"name": "datasets", "description": "Calibrations as posted."},
            {"name": "jobs", "description": "Fit-and-select of a dataset under a plan."},
            {"name": "verdicts", "description": "The short statements for QA."},
            {"name": "batches", "description": "Many datasets under one plan."},
            {"name": "plans", "description": "Named, versioned plans."},
            {"name": "figures", "description": "What a job found, drawn."},
            {"name": "operations", "description": "Whether the service runs."},
        ],
        servers=[{"url": "/", "description": "This installation"}],
    )
    read: tuple[type[BaseModel], ...] = (*bodies, Problem)
    models: list[tuple[type[BaseModel], JsonSchemaMode]] = [(one, "validation") for one in read]
    models += [(one, "serialization") for one in also]
    _, extra = models_json_schema(models, ref_template=REFERENCE)
    document["components"]["schemas"] = extra["$defs"] | document["components"]["schemas"]
    pairs_as_arrays(document)
    examples = examples_by_operation()
    for item in document["paths"].values():
        for method in METHODS:
            if method in item:
                _complete(item[method], examples.get(item[method]["operationId"], {}))
    state_limits(document, settings)
    return document


def _complete(operation: dict[str, Any], examples: dict[str, dict[str, Any]]) -> None:
    parameters_are_text(operation)
    add_headers(operation)
    for case, example in examples.items():
        request, response = example["request"], example["response"]
        # A body that is refused shows with its answer; as an example of the body it would contradict the schema.
        if "body" in request and "requestBody" in operation and response["status"] < 400:
            content = operation["requestBody"]["content"]
            _add(content[request.get("type", "application/json")], case, request)
        answer = operation["responses"].get(str(response["status"]))
        if answer is not None and "body" in response:
            content = answer["content"]
            kind = MEDIA_TYPE if response["status"] >= 400 else response["type"]
            if kind.endswith("json") and kind in content and "ndjson" not in kind:
                _add(content[kind], case, response)


def _add(content: dict[str, Any], case: str, example: dict[str, Any]) -> None:
    content.setdefault("examples", {})[case] = {"summary": example["summary"], "value": example["body"]}


@cache
def examples_by_operation() -> dict[str, dict[str, dict[str, Any]]]:
    """By operation and case: `request` and `response` as the files hold them."""
    found: dict[str, dict[str, dict[str, Any]]] = defaultdict(dict)
    for path in sorted(resources("openapi_examples").glob("*/*.request.json")):
        answer = path.with_name(path.name.replace(".request.json", ".response.json"))
        case = path.name.removesuffix(".request.json")
        found[path.parent.name][case] = {
            "request": json.loads(path.read_text("utf-8")),
            "response": json.loads(answer.read_text("utf-8")),
        }
    return dict(found)
