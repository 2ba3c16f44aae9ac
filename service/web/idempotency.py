"""The Idempotency-Key header (draft-ietf-httpapi-idempotency-key-header): an sf-string, or bare."""

import re
from typing import Annotated

from fastapi import Header

from service.errors import InvalidInput

QUOTED = re.compile(r'"([\x20-\x21\x23-\x5b\x5d-\x7e]{1,255})"')
BARE = re.compile(r"[\x21\x23-\x2b\x2d-\x7e]{1,255}")

IdempotencyKey = Annotated[
    str | None,
    Header(
        alias="Idempotency-Key",
        description="Makes a retry safe: the same key and body within 24 hours make nothing new. 1 to 255 printable"
        " ASCII characters without comma, perhaps in double quotes (then also with comma and space).",
        json_schema_extra={"pattern": rf"^({QUOTED.pattern}|{BARE.pattern})$"},
    ),
]


def repeat_key(header: str | None) -> str | None:
    """The key itself. Raises InvalidInput."""
    if header is None:
        return None
    quoted = QUOTED.fullmatch(header.strip())
    if quoted:
        return quoted[1]
    if BARE.fullmatch(header.strip()):
        return header.strip()
    raise InvalidInput.at("/header/idempotency-key", "must be 1 to 255 printable ASCII characters, perhaps in quotes")
