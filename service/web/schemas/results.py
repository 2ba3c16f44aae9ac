"""The result of a job: everything the core computed, and where it came from."""

from dataclasses import dataclass
from typing import Any

from service.core.result import Result


@dataclass(frozen=True, kw_only=True, slots=True)
class Provenance:
    """Where a result came from: enough to make it again."""

    dataset_digest: str
    plan_digest: str
    result_digest: str
    """SHA-256 of the canonical JSON (RFC 8785) of the result without `provenance`."""
    folds_digest: str
    seed: int | None
    versions: dict[str, str]
    blas: list[dict[str, Any]]
    platform: str
    submitted_by: str
    queued_at: str
    started_at: str
    finished_at: str
    worker: str
    attempt: int


@dataclass(frozen=True, kw_only=True, slots=True)
class JobResult(Result):
    """Everything a job computed."""

    provenance: Provenance
