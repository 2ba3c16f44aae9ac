"""A calibration dataset as posted and as answered."""

from datetime import datetime
from typing import Annotated, Any

import numpy as np
from pydantic import BeforeValidator, Field, WithJsonSchema

from service.store.clock import rfc3339
from service.store.records import DatasetContent, DatasetRecord
from service.web.schemas.common import NO_CONTROLS, VISIBLE, Answer, Body, Finite, Label, Line, Moment, given

MOST_TAGS = 50
# Of each column the first wrong item is named: half a million errors, of which few are shown, would fill the memory.
Column = Annotated[list[Finite], Field(min_length=3, fail_fast=True)]


def _few(value: Any) -> Any:
    """Counted before any is looked at: pydantic would collect the errors of all of them first."""
    if isinstance(value, dict) and len(value) > MOST_TAGS:
        raise ValueError(f"holds {len(value)} tags; at most {MOST_TAGS} are taken")
    return value


# Written out: what pydantic writes for keys with a pattern lets other keys through.
Tags = Annotated[
    dict[Label, Line],
    BeforeValidator(_few),
    WithJsonSchema(
        {
            "type": "object",
            "maxProperties": MOST_TAGS,
            "propertyNames": {"type": "string", "minLength": 1, "maxLength": 200, "pattern": VISIBLE},
            "additionalProperties": {"type": "string", "maxLength": 500, "pattern": NO_CONTROLS},
        }
    ),
]
DETAILS = (
    "title",
    "x_quantity",
    "x_unit",
    "y_quantity",
    "y_unit",
    "level_tolerance",
    "tags",
)


class DatasetBody(Body):
    """One calibration: readings y (the response, or indication) at stimuli x, in the order measured.

    The arrays have one length. A dataset is immutable and named by its digest.
    """

    subject: Label = Field(description="Identifier of the instrument or method, the caller's own.")
    x: Column = Field(description="Stimulus, in `x_unit`: the values of the standard.")
    y: Column = Field(description="Response, in `y_unit`: what the instrument showed.")
    u_x: Column | None = Field(None, description="Standard uncertainty of each x, in `x_unit`; needs `u_y` as well.")
    u_y: Column | None = Field(None, description="Standard uncertainty of each y, in `y_unit`.")
    series: Annotated[list[Label], Field(min_length=3, fail_fast=True)] | None = Field(
        None, description="The pass each point belongs to: up and down, day 1 and day 2."
    )
    title: Line | None = None
    x_quantity: Line | None = None
    x_unit: Line | None = None
    y_quantity: Line | None = None
    y_unit: Line | None = None
    level_tolerance: Annotated[Finite, Field(ge=0)] | None = Field(
        None, description="Points whose x differ by no more than this count as one level; absent: equal x only."
    )
    measured_at: Moment | None = Field(None, description="When it was measured, with time zone (RFC 3339).")
    tags: Tags | None = Field(None, max_length=MOST_TAGS, description="Anything else worth keeping.")

    def content(self) -> DatasetContent:
        """The same as the store keeps it."""
        details = given(self, *DETAILS)
        if self.measured_at is not None:
            details["measured_at"] = rfc3339(self.measured_at)
        return DatasetContent(
            subject=self.subject,
            x=np.array(self.x, dtype=np.float64),
            y=np.array(self.y, dtype=np.float64),
            u_x=None if self.u_x is None else np.array(self.u_x, dtype=np.float64),
            u_y=None if self.u_y is None else np.array(self.u_y, dtype=np.float64),
            series=None if self.series is None else tuple(self.series),
            details=details,
        )


class DatasetSummary(Answer):
    """What a dataset holds."""

    points: int
    levels: int = Field(description="Distinct values of x, within `level_tolerance`.")
    x_range: tuple[float, float]
    y_range: tuple[float, float]
    columns: list[str] = Field(description="Which of x, y, u_x, u_y and series there are.")


class DatasetPoints(Answer):
    """The numbers, exactly as posted."""

    x: list[float]
    y: list[float]
    u_x: list[float] | None = None
    u_y: list[float] | None = None
    series: list[str] | None = None


class DatasetView(Answer):
    """A stored dataset."""

    id: str
    digest: str = Field(description="SHA-256 of the canonical JSON (RFC 8785) of the dataset, in hexadecimal.")
    subject: str
    created_at: datetime
    summary: DatasetSummary
    title: str | None = None
    x_quantity: str | None = None
    x_unit: str | None = None
    y_quantity: str | None = None
    y_unit: str | None = None
    level_tolerance: float | None = None
    measured_at: str | None = None
    tags: dict[str, str] | None = None
    points: DatasetPoints | None = Field(None, description="With include=points only.")


def dataset_view(record: DatasetRecord, content: DatasetContent | None = None) -> dict[str, Any]:
    """The JSON of DatasetView."""
    return {
        "id": record.id,
        "digest": record.digest,
        "subject": record.subject,
        "created_at": rfc3339(record.created_at),
        "summary": record.summary,
        **{name: record.details.get(name) for name in (*DETAILS, "measured_at")},
        "points": None if content is None else points_view(content),
    }


def points_view(content: DatasetContent) -> dict[str, Any]:
    """The JSON of DatasetPoints."""
    return {
        "x": content.x.tolist(),
        "y": content.y.tolist(),
        "u_x": None if content.u_x is None else content.u_x.tolist(),
        "u_y": None if content.u_y is None else content.u_y.tolist(),
        "series": None if content.series is None else list(content.series),
    }
