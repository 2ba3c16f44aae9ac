"""Reads request bodies: bounded in size, JSON as RFC 8259 has it, no key twice, and exactly what the schema says.

NaN and Infinity are let through to the schema, which refuses them by name and place.
"""

import json
from collections.abc import Awaitable, Callable, Sequence
from typing import Any, TypeVar

from fastapi import Request
from pydantic import ValidationError
from starlette.concurrency import run_in_threadpool

from service.errors import FieldError, InvalidInput, MalformedInput, TooLarge
from service.web.schemas.common import WORDS_OF_PATTERNS, Body

B = TypeVar("B", bound=Body)

LARGE = 64 * 1024  # parsed in a thread, so that the event loop goes on
MOST_ERRORS = 20
LONGEST_KEY = 200  # shown in a pointer
KEY = "[key]"  # pydantic's word for the key itself, which RFC 6901 cannot point at


class UnsupportedType(InvalidInput):
    """The body is of a type that this call does not take."""

    code = "unsupported_media_type"


def json_body(model: type[B]) -> Callable[[Request], Awaitable[B]]:
    """A dependency that answers the body as `model`. Raises MalformedInput, UnsupportedType, TooLarge, InvalidInput."""

    async def read(request: Request) -> B:
        demand_type(request, "application/json")
        body = await read_body(request)
        if len(body) > LARGE:
            return await run_in_threadpool(read_as, model, body)
        return read_as(model, body)

    return read


def read_as(model: type[B], body: bytes) -> B:
    """Parse and validate."""
    return read_value(model, parse_json(body))


def read_value(model: type[B], value: Any) -> B:
    """Validate. Raises InvalidInput."""
    try:
        return model.model_validate(value)
    except ValidationError as error:
        raise InvalidInput(field_errors(error.errors(include_url=False, include_input=False))) from error


def parse_json(body: bytes) -> Any:
    """The value that `body` is the JSON text of. Raises MalformedInput."""
    if not body.strip():
        raise MalformedInput.at("", "the body is empty; JSON is expected")
    try:
        return json.loads(body.decode("utf-8"), object_pairs_hook=_object)
    except UnicodeDecodeError as error:
        raise MalformedInput.at("", f"the body is not UTF-8: byte {error.start}") from error
    except json.JSONDecodeError as error:
        message = f"the body is not JSON: {error.msg.lower()} at line {error.lineno}, column {error.colno}"
        raise MalformedInput.at("", message) from error
    except RecursionError as error:
        raise MalformedInput.at("", "the body is nested too deeply") from error
    except ValueError as error:  # an integer of thousands of digits
        raise MalformedInput.at("", "the body holds a number too long to read") from error


def _object(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(pairs)
    if len(found) < len(pairs):
        raise MalformedInput.at("", f"the key {_twice(pairs)[:80]!r} stands twice in one object")
    return found


def _twice(pairs: list[tuple[str, Any]]) -> str:
    """The first key that was there before, in one pass: an object may hold millions."""
    seen: set[str] = set()
    for name, _ in pairs:
        if name in seen:
            break
        seen.add(name)
    return name


def media_type(request: Request) -> str:
    """The body's type without parameters, lower case."""
    return request.headers.get("content-type", "").split(";")[0].strip().lower()


def demand_type(request: Request, *types: str) -> str:
    """The body's type, one of `types`. Raises UnsupportedType."""
    found = media_type(request)
    if found not in types:
        raise UnsupportedType.at("/header/content-type", f"must be {' or '.join(types)}")
    return found


async def read_body(request: Request) -> bytes:
    """The whole body, of which no more than the limit is ever read. Raises TooLarge, UnsupportedType."""
    limit = request.app.state.context.settings.body_bytes
    coding = request.headers.get("content-encoding", "identity").strip().lower()
    if coding != "identity":  # a small body that unpacks to a large one is not taken at all
        raise UnsupportedType.at("/header/content-encoding", "must be absent: bodies are taken uncompressed only")
    stated = request.headers.get("content-length", "")
    if stated.isdecimal() and len(stated) < 20 and int(stated) > limit:
        raise TooLarge(f"the body is larger than {limit} bytes, the most that is taken")
    chunks, size = [], 0
    async for chunk in request.stream():
        size += len(chunk)
        if size > limit:
            raise TooLarge(f"the body is larger than {limit} bytes, the most that is taken")
        chunks.append(chunk)
    return b"".join(chunks)


def field_errors(found: Sequence[Any], *, strip: int = 0) -> list[FieldError]:
    """Pydantic's errors by RFC 6901 pointer; the first of them, where there are very many."""
    return [FieldError(pointer(one["loc"][strip:]), _words(one)) for one in found[:MOST_ERRORS]]


def pointer(location: Sequence[Any]) -> str:
    """RFC 6901; a key that nobody could mean is cut short."""
    return "".join(
        "/" + str(part)[:LONGEST_KEY].replace("~", "~0").replace("/", "~1") for part in location if part != KEY
    )


def _words(error: Any) -> str:
    known = {
        "extra_forbidden": "is not a known key",
        "missing": "is missing",
        "finite_number": "must be a finite number",
        "float_type": "must be a number",
        "int_type": "must be a whole number",
        "bool_type": "must be true or false",
        "list_type": "must be a list",
        "dict_type": "must be an object",
        "model_type": "must be an object",
        "model_attributes_type": "must be an object",
        "string_type": "must be text",
        "string_unicode": "must be valid Unicode",
    }
    kind = error["type"]
    if kind in known:
        return known[kind]
    if kind == "string_pattern_mismatch":
        pattern = error["ctx"]["pattern"]
        return WORDS_OF_PATTERNS.get(pattern, f"must match {pattern}")
    if kind == "too_short":
        return f"needs at least {error['ctx']['min_length']} items, has {error['ctx']['actual_length']}"
    message = str(error["msg"]).removeprefix("Value error, ")
    return message[:1].lower() + message[1:]
