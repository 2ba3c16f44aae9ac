"""JSON of what is kept: canonical form (RFC 8785), digests, and core's dataclasses to and fro."""

import hashlib
from functools import lru_cache
from typing import Any

import rfc8785
from pydantic import TypeAdapter

from service.core.plan import Plan
from service.core.result import Result

PLAN = TypeAdapter(Plan)
RESULT = TypeAdapter(Result)


def canonical(value: Any) -> bytes:
    """Canonical JSON (RFC 8785) of plain Python values. Raises ValueError for NaN and infinities."""
    return rfc8785.dumps(value)


def digest(document: bytes) -> str:
    """SHA-256 of a canonical document, 64 lower-case hexadecimal digits."""
    return hashlib.sha256(document).hexdigest()


@lru_cache(maxsize=256)  # a laboratory uses a few plans over and over
def plan_document(plan: Plan) -> bytes:
    """The whole plan, defaults included, in canonical form."""
    return canonical(PLAN.dump_python(plan, mode="json"))


def read_plan(document: str | bytes) -> Plan:
    """Inverse of `plan_document`."""
    return PLAN.validate_json(document)


def result_document(result: Result) -> bytes:
    """The result as the core computed it, in canonical form."""
    return canonical(RESULT.dump_python(result, mode="json"))


def read_result(document: str | bytes) -> Result:
    """Inverse of `result_document`."""
    return RESULT.validate_json(document)
