"""Pieces that several bodies share."""

import re
from datetime import datetime
from itertools import islice
from typing import Annotated, Any, Generic, TypeVar

from fastapi import Path
from pydantic import (
    AfterValidator,
    AwareDatetime,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Field,
    WithJsonSchema,
    model_validator,
)

T = TypeVar("T")

MOST_UNKNOWN = 20  # keys of one object
NO_CONTROLS = r"^[^\x00-\x1f\x7f]*$"  # PostgreSQL text holds no NUL; logs and pages want no other controls either

# A name of spaces alone names nothing.
VISIBLE = r"^[^\x00-\x1f\x7f]*[^\x00-\x20\x7f\u00a0\u2000-\u200b\u3000][^\x00-\x1f\x7f]*$"
NO_SPACES = r"^[\x21-\x7e]+$"
IDENTIFIER = r"^[0-9A-Za-z-]{1,64}$"
DIGEST = r"^[0-9a-f]{64}$"
WORDS_OF_PATTERNS = {
    NO_CONTROLS: "must not hold control characters",
    VISIBLE: "must hold a visible character, and no control characters",
    NO_SPACES: "must be an address without spaces, in printable ASCII characters",
    DIGEST: "must be a digest: 64 hexadecimal digits, lower case",
    IDENTIFIER: "must be 1 to 64 letters, digits and hyphens",
}


def _whole(value: Any) -> Any:
    """3.0 is a whole number to JSON Schema, and to languages that know one kind of number."""
    return int(value) if isinstance(value, float) and value.is_integer() else value


WHOLE = BeforeValidator(_whole)
Whole = Annotated[int, WHOLE]
Identifier = Annotated[str, Path(pattern=IDENTIFIER, description="As answered when it was made.")]
Finite = Annotated[float, Field(allow_inf_nan=False)]
Label = Annotated[str, Field(min_length=1, max_length=200, pattern=VISIBLE)]
Line = Annotated[str, Field(max_length=500, pattern=NO_CONTROLS)]


RFC3339 = re.compile(r"\d{4}-\d\d-\d\d[Tt ]\d\d:\d\d:\d\d(\.\d+)?([Zz]|[+-]\d\d:\d\d)")


def _is_text(value: Any) -> Any:
    if not isinstance(value, str) or not RFC3339.fullmatch(value):  # pydantic takes seconds since 1970, too
        raise ValueError("must be an RFC 3339 date and time with time zone, as text")
    return value


def _usable(value: datetime) -> datetime:
    if not 1900 <= value.year <= 9000:
        raise ValueError("must lie in the years 1900 to 9000")
    return value


Moment = Annotated[
    AwareDatetime,
    Field(strict=False),
    BeforeValidator(_is_text),
    AfterValidator(_usable),
    WithJsonSchema({"type": "string", "format": "date-time"}, mode="validation"),
]


class Body(BaseModel):
    """A request body."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True)

    @model_validator(mode="before")
    @classmethod
    def _few_unknown_keys(cls, value: Any) -> Any:
        """Of very many unknown keys only the first are refused: each costs an error of a kilobyte."""
        if not isinstance(value, dict) or len(value) <= len(cls.model_fields) + MOST_UNKNOWN:
            return value
        unknown = islice((name for name in value if name not in cls.model_fields), MOST_UNKNOWN)
        return {name: value[name] for name in (*(one for one in value if one in cls.model_fields), *unknown)}


class Answer(BaseModel):
    """A response body."""

    model_config = ConfigDict(extra="forbid", frozen=True)


class PageOf(Answer, Generic[T]):
    """One page of a list. Pass `next_cursor` as `cursor` for the next; null at the end."""

    items: list[T]
    next_cursor: str | None


class FieldProblem(Answer):
    """One thing wrong with the input."""

    pointer: str = Field(description="RFC 6901 pointer into the body, or /query/NAME, /header/NAME, /path/NAME.")
    message: str


class Problem(BaseModel):
    """RFC 9457 problem details."""

    type: str = Field("about:blank", description="Always about:blank: `code` tells problems apart.")
    title: str
    status: int
    code: str = Field(description="Stable name of this kind of problem.")
    detail: str
    errors: list[FieldProblem] | None = Field(None, description="For bad input: each field and what is wrong with it.")
    request_id: str | None = Field(None, description="As in X-Request-Id; give it when asking for help.")


def given(body: BaseModel, *names: str) -> dict[str, Any]:
    """The named fields that the caller set, as JSON values."""
    return body.model_dump(mode="json", include=set(names), exclude_none=True)
