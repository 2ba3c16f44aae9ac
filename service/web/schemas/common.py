"""Pieces that several bodies share."""

from datetime import datetime
from typing import Annotated, Any, Generic, TypeVar

from pydantic import AfterValidator, AwareDatetime, BaseModel, BeforeValidator, ConfigDict, Field

T = TypeVar("T")

NO_CONTROLS = r"^[^\x00-\x1f\x7f]*$"  # PostgreSQL text holds no NUL; logs and pages want no other controls either

Finite = Annotated[float, Field(allow_inf_nan=False)]
Label = Annotated[str, Field(min_length=1, max_length=200, pattern=NO_CONTROLS)]
Line = Annotated[str, Field(max_length=500, pattern=NO_CONTROLS)]


def _is_text(value: Any) -> Any:
    if not isinstance(value, str):
        raise ValueError("must be an RFC 3339 date and time as text")
    return value


def _usable(value: datetime) -> datetime:
    if not 1900 <= value.year <= 9000:
        raise ValueError("must lie in the years 1900 to 9000")
    return value


Moment = Annotated[
    AwareDatetime, Field(strict=False), BeforeValidator(_is_text, json_schema_input_type=str), AfterValidator(_usable)
]


class Body(BaseModel):
    """A request body."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True)


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
