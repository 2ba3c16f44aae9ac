"""What schemathesis is told of this service: how NDJSON is written, and which refusals the schema cannot foresee."""

import json
import re
from typing import Any

import schemathesis

# Rules between fields, or between a field and what is stored: JSON Schema cannot say them.
RULES = re.compile(
    "|".join(
        (
            # of a request with what is stored
            r"is not a next_cursor of this list",
            r"there is no (dataset|plan) ",
            r"was used within 24 hours for another body",
            # of one field with another
            r"give exactly one of dataset_id and dataset",
            r"give at most one of plan and plan_id",
            r"belongs? into the body when that is JSON",
            r"is missing: a table does not say what it calibrates",
            r"without keys, notifications are signed",
            # of a plan: service/core/plan.py
            r"must run from low to high",
            r"must be from min_degree \(\d+\) to 12",
            r"must be from 1 to 12",  # min_degree without an intercept
            r"must be at least limit_percent",
            # of numbers: service/core/observations.py
            r"has \d+ values where x has \d+",
            r"must be finite and at most .* in size",
            r"is closer to 0 than .* without being 0",
            r"must be greater than 0",
            # of a dataset with a plan: service/core/check.py
            r"all values are equal: no curve can be fitted",
            r"needs at least \d+ (points|distinct values)",
            r"has \d+ distinct values",
            r"the weights .* have no value",
            r'is "u_y", but the dataset gives no u_y',
            r"needs u_y",
            r"needs weights \"auto\" or \"u_y\"",
            r"shares no more than one value of x with the data",
            r"holds? (no|only|fewer)",
            # of text with its meaning
            r"must lie in the years 1900 to 9000",
            r"must be an http or https address with a host",
            r"must hold neither a user name nor a fragment",
            r"is a private or loopback address",
        )
    )
)


@schemathesis.serializer("application/x-ndjson")
def ndjson(_context: Any, value: Any) -> bytes:
    """Text as it is, anything else a line each."""
    if isinstance(value, bytes | str):
        return value if isinstance(value, bytes) else value.encode()
    lines = value if isinstance(value, list) else [value]
    return b"\n".join(json.dumps(one).encode() for one in lines)


@schemathesis.check
def refused_for_a_rule_between_fields(_context: Any, response: Any, case: Any) -> None:
    """A request that follows the schema is refused only for rules that the schema cannot say."""
    positive = case.meta is not None and case.meta.generation.mode.is_positive
    if case.media_type in (None, "application/json") and positive and response.status_code in (400, 422):
        # Tables and NDJSON are any bytes to the schema.
        for error in response.json()["errors"]:  # a list: none is left out
            assert RULES.search(error["message"]), f"unforeseen refusal: {error['pointer']} {error['message']}"
