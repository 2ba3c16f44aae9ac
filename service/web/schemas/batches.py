"""A batch as posted, its progress, and its results line by line."""

import json
from dataclasses import dataclass
from datetime import datetime
from io import BytesIO
from itertools import islice
from typing import Any, Self

from pydantic import Field, model_validator

from service.core.plan import Plan
from service.errors import FieldError, InvalidInput, MalformedInput, TooLarge
from service.store.batches import BatchItem, BatchRecord
from service.store.clock import rfc3339
from service.store.records import DatasetContent
from service.web.schemas.common import Answer, Body, Label
from service.web.schemas.datasets import DatasetBody
from service.web.schemas.jobs import JobError, Priority, StateWord, VerdictWord
from service.web.schemas.plans import PlanBody
from service.web.schemas.results import JobResult
from service.web.strict_json import parse_json, read_value


@dataclass(frozen=True, kw_only=True, slots=True)
class PostedBatch:
    """A batch, whichever way it came: each dataset read, or what is wrong with it."""

    datasets: list[DatasetContent | InvalidInput]
    plan: Plan | None
    plan_id: str | None
    priority: int


class BatchBody(Body):
    """Many datasets under one plan."""

    datasets: list[Any] = Field(
        min_length=1,
        description="Datasets as of POST /v1/datasets. A bad one is refused by itself.",
        json_schema_extra={
            "items": {
                "anyOf": [
                    {"$ref": "#/components/schemas/DatasetBody"},
                    {"description": "Anything else: the batch is taken, and this item is refused by itself."},
                ]
            }
        },
    )
    plan: PlanBody | None = Field(None, description="Absent, and no plan_id: every default.")
    plan_id: Label | None = None
    priority: Priority = 0

    @model_validator(mode="after")
    def _one_plan(self) -> Self:
        if self.plan is not None and self.plan_id is not None:
            raise ValueError("give at most one of plan and plan_id")
        return self

    def posted(self, *, most: int) -> PostedBatch:
        """Each dataset by itself. Raises TooLarge before it looks at any, if there are more than `most`."""
        demand_few(len(self.datasets), most)
        return PostedBatch(
            datasets=[_read(one) for one in self.datasets],
            plan=None if self.plan is None else self.plan.plan("/plan"),
            plan_id=self.plan_id,
            priority=self.priority,
        )


class BatchStates(Answer):
    """Number of the batch's jobs in each state."""

    queued: int
    running: int
    succeeded: int
    failed: int
    cancelled: int


class BatchView(Answer):
    """A batch and how far it is. `size` = `refused` + its jobs."""

    id: str
    submitted_by: str
    plan_digest: str
    created_at: datetime
    size: int
    refused: int
    states: BatchStates
    ended: bool = Field(description="Every job has ended.")


class BatchItemView(Answer):
    """One line of the results."""

    position: int = Field(description="Place in the batch as posted, from 0.")
    job_id: str | None
    subject: str | None
    state: StateWord | None
    verdict: VerdictWord | None
    chosen_degree: int | None
    error: JobError | None = Field(description="Why the dataset was refused, or why its job failed.")
    result: JobResult | None


def demand_few(datasets: int, most: int) -> None:
    """Raises TooLarge."""
    if datasets > most:
        raise TooLarge(f"at most {most} datasets are taken in one batch")


def datasets_of(raw: bytes, plan_id: str | None, priority: int, *, most: int) -> PostedBatch:
    """NDJSON: a dataset a line; empty lines do not count. Raises TooLarge before it looks at any line."""
    lines = list(islice((line for line in BytesIO(raw) if line.strip()), most + 1))
    demand_few(len(lines), most)
    if not lines:
        raise MalformedInput.at("", "the body is empty; one dataset a line is expected")
    return PostedBatch(datasets=[_line(line) for line in lines], plan=None, plan_id=plan_id, priority=priority)


def _line(line: bytes) -> DatasetContent | InvalidInput:
    try:
        return _read(parse_json(line))
    except MalformedInput as error:
        return error


def _read(value: Any) -> DatasetContent | InvalidInput:
    try:
        return read_value(DatasetBody, value).content()
    except InvalidInput as error:
        return InvalidInput([FieldError(f"/dataset{one.pointer}", one.message) for one in error.errors])


def batch_view(batch: BatchRecord) -> dict[str, Any]:
    """The JSON of BatchView."""
    return {
        "id": batch.id,
        "submitted_by": batch.submitted_by,
        "plan_digest": batch.plan_digest,
        "created_at": rfc3339(batch.created_at),
        "size": batch.size,
        "refused": batch.refused,
        "states": batch.states,
        "ended": not (batch.states["queued"] or batch.states["running"]),
    }


def batch_item_line(item: BatchItem) -> bytes:
    """The JSON of BatchItemView and a line end; stored documents as they are."""
    error = item.error or (None if item.job_error is None else json.loads(item.job_error))
    head = {
        "position": item.position,
        "job_id": item.job_id,
        "subject": item.subject,
        "state": item.state,
        "verdict": item.verdict,
        "chosen_degree": item.chosen_degree,
        "error": error,
    }
    result = "null"
    if item.result is not None and item.provenance is not None:
        result = f'{item.result[:-1]},"provenance":{item.provenance}}}'
    return f'{json.dumps(head, allow_nan=False)[:-1]},"result":{result}}}\n'.encode()
