"""Cursors: opaque to callers, and bound to the id of the last item, so that inserts neither skip nor repeat one."""

import base64
import binascii
import re
from typing import Annotated

from fastapi import Query

from service.errors import InvalidInput

Cursor = Annotated[
    str | None, Query(description="`next_cursor` of the page before.", max_length=100, pattern=r"^[A-Za-z0-9_-]+$")
]
Limit = Annotated[int | None, Query(ge=1, description="Most items on the page.")]
DEFAULT_SIZE = 50

IDENTIFIER = re.compile(r"[0-9a-z-]{1,64}")


def page_size(limit: int | None, most: int) -> int:
    """How many items the page may have. Raises InvalidInput: fewer than were asked for would look like the end."""
    if limit is None:
        return min(DEFAULT_SIZE, most)
    if limit > most:
        raise InvalidInput.at("/query/limit", f"must be at most {most}")
    return limit


def cursor_of(last: str | None) -> str | None:
    """The cursor for what follows `last`."""
    return None if last is None else base64.urlsafe_b64encode(last.encode()).decode().rstrip("=")


def position(cursor: str | None) -> str | None:
    """Inverse of `cursor_of`. Raises InvalidInput."""
    if cursor is None:
        return None
    try:
        last = base64.b64decode(cursor + "=" * (-len(cursor) % 4), altchars=b"-_", validate=True).decode("ascii")
    except (binascii.Error, ValueError):
        last = ""
    if not IDENTIFIER.fullmatch(last):
        raise InvalidInput.at("/query/cursor", "is not a next_cursor of this list")
    return last
