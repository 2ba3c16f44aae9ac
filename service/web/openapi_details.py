"""What the document says beyond what FastAPI finds: headers of answers, limits of this installation, pairs as arrays.

Each step changes one operation or schema in place.
"""

from typing import Any

from service.settings import Settings

Json = dict[str, Any]
NOT_MODIFIED: dict[int | str, Json] = {304: {"description": "Not changed since the ETag given in If-None-Match."}}
IF_NONE_MATCH = {
    "name": "If-None-Match",
    "in": "header",
    "required": False,
    "schema": {"type": "string"},
    "description": "ETag of an answer that you have: 304 without a body if it still holds (RFC 9110).",
}


def _header(description: str, kind: str = "string", **more: Any) -> Json:
    return {"description": description, "schema": {"type": kind, **more}}


REQUEST_ID = _header("Id of this request, also in the log. Yours, if you sent one.")
ETAG = _header("Names this state of the answer.")
LOCATION = _header("Path of what was made or found.")
RETRY_AFTER = _header("Seconds to wait before asking again.", "integer", minimum=0)
APPLIED = _header("What was followed of `Prefer`, with the wait that was granted.")
AUTHENTICATE = _header("The scheme of the key: Bearer.")


def add_headers(operation: Json) -> None:
    """The headers of every answer of an operation."""
    answers = operation["responses"]
    made = [status for status in ("201", "202") if status in answers]
    waits = any(one["name"].lower() == "prefer" for one in operation.get("parameters", ()))
    for status, answer in answers.items():
        headers = answer.setdefault("headers", {})
        headers["X-Request-Id"] = REQUEST_ID
        for content in answer.get("content", {}).values():
            content.pop("itemSchema", None)  # of OpenAPI 3.2; FastAPI writes it into 3.1
        if status in made or (made and status == "200"):
            headers["Location"] = LOCATION
            if waits:
                headers["Preference-Applied"] = APPLIED
        if status in ("202", "429", "503"):
            headers["Retry-After"] = RETRY_AFTER
        if status == "401":
            headers["WWW-Authenticate"] = AUTHENTICATE
        if "304" in answers and status in ("200", "304"):
            headers["ETag"] = ETAG
    if "304" in answers:
        operation.setdefault("parameters", []).append(IF_NONE_MATCH)


def pairs_as_arrays(schema: Any) -> None:
    """`prefixItems` of one kind as `items`, which says the same together with minItems and maxItems, to more tools."""
    if isinstance(schema, dict):
        kinds = schema.get("prefixItems")
        if isinstance(kinds, list) and all(one == kinds[0] for one in kinds):
            del schema["prefixItems"]
            schema["items"] = kinds[0]
        for one in schema.values():
            pairs_as_arrays(one)
    elif isinstance(schema, list):
        for one in schema:
            pairs_as_arrays(one)


def parameters_are_text(operation: Json) -> None:
    """A query or header cannot be null: it is there or not. FastAPI writes null for what may be absent."""
    for parameter in operation.get("parameters", ()):
        schema = parameter["schema"]
        kinds = [one for one in schema.get("anyOf", ()) if one != {"type": "null"}]
        if len(kinds) == 1:
            del schema["anyOf"]
            schema |= kinds[0]


def state_limits(document: Json, settings: Settings) -> None:
    """The limits of this installation, in words and where a schema can hold them."""
    document["info"]["description"] += "\n\n" + limits_in_words(settings)
    schemas = document["components"]["schemas"]
    for name in ("x", "y", "u_x", "u_y", "series"):
        column = schemas["DatasetBody"]["properties"][name]
        for one in (column, *column.get("anyOf", ())):
            if one.get("type") == "array":
                one["maxItems"] = settings.points
    schemas["BatchBody"]["properties"]["datasets"]["maxItems"] = settings.batch_size
    for item in document["paths"].values():
        for operation in item.values():
            for parameter in operation.get("parameters", ()):
                if (parameter["in"], parameter["name"]) == ("query", "limit"):
                    parameter["schema"] |= {
                        "maximum": settings.page_limit,
                        "default": min(50, settings.page_limit),
                    }


def limits_in_words(settings: Settings) -> str:
    """Every limit that a caller can meet."""
    rate = f"{settings.requests_per_minute:,}" if settings.requests_per_minute else "any number of"
    return f"""Limits of this installation: a body of {settings.body_bytes:,} bytes (413); {settings.points:,} points \
of a dataset as JSON or CSV and {settings.parquet_points:,} as Parquet (413); degree 12 (422); {settings.batch_size:,} \
datasets in a batch (413); {settings.queue_depth:,} waiting jobs (503 `queue_full`); {rate} requests of one key in a \
minute (429); {settings.page_limit:,} items on a page (422); {settings.wait_seconds:g} s of `Prefer: wait` (a longer \
wait is cut to that, and `Preference-Applied` says so); {settings.job_seconds:g} s of running for one job, which fails \
then. Unknown query parameters and unknown keys of a body are refused (422)."""
