"""A job as asked for, in the history, and with its result."""

import json
from datetime import datetime
from typing import Annotated, Any, Literal, Self

from pydantic import Field, model_validator

from service.core.plan import Plan
from service.core.result import Reason
from service.store.clock import rfc3339
from service.store.records import JobDetail, JobRecord, NotificationRecord
from service.web.schemas.common import NO_SPACES, WHOLE, Answer, Body, FieldProblem, Label
from service.web.schemas.datasets import DatasetBody
from service.web.schemas.plans import PlanBody
from service.web.schemas.results import JobResult

StateWord = Literal["queued", "running", "succeeded", "failed", "cancelled"]
VerdictWord = Literal["adequate", "conditional", "inadequate", "undecided"]
Priority = Annotated[int, Field(ge=-100, le=100), WHOLE]


class JobBody(Body):
    """One fit-and-select of a dataset under a plan. Give the dataset itself or the id of a stored one."""

    dataset_id: Label | None = Field(None, description="A dataset that was posted before.")
    dataset: DatasetBody | None = Field(None, description="The dataset itself; it is stored as by POST /v1/datasets.")
    plan: PlanBody | None = Field(None, description="Absent, and no plan_id: every default.")
    plan_id: Label | None = Field(None, description="One version of a named plan.")
    subject: Label | None = Field(None, description="Absent: the dataset's.")
    priority: Priority = Field(0, description="Higher runs first.")
    notify_url: Annotated[str, Field(max_length=2000, pattern=NO_SPACES)] | None = Field(
        None, description="Told of the job's end by a POST signed after the Standard Webhooks specification."
    )

    @model_validator(mode="after")
    def _one_dataset(self) -> Self:
        if (self.dataset_id is None) == (self.dataset is None):
            raise ValueError("give exactly one of dataset_id and dataset")
        if self.plan is not None and self.plan_id is not None:
            raise ValueError("give at most one of plan and plan_id")
        return self


class Progress(Answer):
    """How far a running job is."""

    stage: str
    done: int
    of: int


class JobError(Answer):
    """Why a job failed."""

    code: str
    message: str
    errors: list[FieldProblem] | None = None


class JobSummary(Answer):
    """One line of the history."""

    id: str
    state: StateWord
    subject: str
    dataset_id: str
    plan_digest: str
    submitted_by: str
    priority: int
    queued_at: datetime
    started_at: datetime | None = Field(description="Start of the last attempt.")
    finished_at: datetime | None
    attempts: int
    worker: str | None
    progress: Progress | None
    verdict: VerdictWord | None
    chosen_degree: int | None
    error: JobError | None


class Notification(Answer):
    """Whom to tell of the job's end, and how far that has come."""

    url: str
    state: Literal["waiting", "delivered", "given_up"]
    attempts: int
    next_at: datetime | None
    last_at: datetime | None
    last_answer: str | None


class JobView(JobSummary):
    """One job, with its plan and, once it succeeded, its result."""

    plan: Plan = Field(description="The whole plan, defaults included.")
    notification: Notification | None = Field(description="Where `notify_url` was given.")
    result: JobResult | None


class Verdict(Answer):
    """The short statement for QA. Its ETag is the SHA-256 of its canonical JSON."""

    job_id: str
    subject: str
    verdict: VerdictWord
    chosen_degree: int
    reasons: list[Reason]
    dataset_digest: str
    plan_digest: str
    result_digest: str
    previous: str | None = Field(description="Digest of the verdict issued before this one, whatever its subject.")
    issued_at: datetime
    service_version: str


def job_summary(job: JobRecord) -> dict[str, Any]:
    """The JSON of JobSummary."""
    progress = None if job.stage is None else {"stage": job.stage, "done": job.stage_done, "of": job.stage_of}
    return {
        "id": job.id,
        "state": job.state.value,
        "subject": job.subject,
        "dataset_id": job.dataset_id,
        "plan_digest": job.plan_digest,
        "submitted_by": job.submitted_by,
        "priority": job.priority,
        "queued_at": rfc3339(job.queued_at),
        "started_at": None if job.started_at is None else rfc3339(job.started_at),
        "finished_at": None if job.finished_at is None else rfc3339(job.finished_at),
        "attempts": job.attempts,
        "worker": job.worker,
        "progress": progress,
        "verdict": job.verdict,
        "chosen_degree": job.chosen_degree,
        "error": None if job.error is None else json.loads(job.error),
    }


def job_document(detail: JobDetail, notification: NotificationRecord | None) -> bytes:
    """The JSON of JobView. Stored documents are spliced in as they are: nothing is rounded or reordered on the way."""
    result = "null"
    if detail.result is not None and detail.provenance is not None:
        result = f'{detail.result[:-1]},"provenance":{detail.provenance}}}'
    head = job_summary(detail.job) | {"notification": _notification(notification)}
    text = json.dumps(head, allow_nan=False, ensure_ascii=False)
    return f'{text[:-1]},"plan":{detail.plan},"result":{result}}}'.encode()


def _notification(found: NotificationRecord | None) -> dict[str, Any] | None:
    if found is None:
        return None
    return {
        "url": found.url,
        "state": found.state,
        "attempts": found.attempts,
        "next_at": None if found.next_at is None else rfc3339(found.next_at),
        "last_at": None if found.last_at is None else rfc3339(found.last_at),
        "last_answer": found.last_answer,
    }
