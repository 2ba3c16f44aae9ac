"""Where a result comes from: everything needed to compute it again and to see why it came out as it did."""

import platform
from dataclasses import dataclass
from datetime import datetime
from importlib.metadata import version
from typing import Any

import threadpoolctl

from service.core.result import Result
from service.store.clock import rfc3339
from service.store.records import Claim

NUMERIC = ("numpy", "scipy", "statsmodels", "scikit-learn", "odrpack")


@dataclass(frozen=True, kw_only=True, slots=True)
class Machine:
    """What a worker process computes with. It does not change while the process runs."""

    versions: dict[str, str]
    blas: list[dict[str, Any]]
    platform: str


def this_machine() -> Machine:
    """Describe this process; call it after the numeric libraries are loaded and their threads are limited."""
    return Machine(
        versions={
            "leastbend": version("leastbend"),
            "python": platform.python_version(),
            **{name: version(name) for name in NUMERIC},
        },
        blas=[
            {"library": pool["internal_api"], "version": pool["version"], "threads": pool["num_threads"]}
            for pool in sorted(threadpoolctl.threadpool_info(), key=lambda pool: str(pool["version"]))
            if pool["user_api"] == "blas"
        ],
        platform=platform.platform(),
    )


def provenance(
    claim: Claim, result: Result, machine: Machine, *, dataset_digest: str, result_digest: str, now: datetime
) -> dict[str, Any]:
    """The document kept beside a result. Times are RFC 3339 in UTC."""
    return {
        "dataset_digest": dataset_digest,
        "plan_digest": claim.plan_digest,
        "result_digest": result_digest,
        "folds_digest": result.resampling.digest,
        "seed": result.resampling.seed,
        "versions": machine.versions,
        "blas": machine.blas,
        "platform": machine.platform,
        "submitted_by": claim.submitted_by,
        "queued_at": rfc3339(claim.queued_at),
        "started_at": rfc3339(claim.started_at),
        "finished_at": rfc3339(now),
        "worker": claim.worker,
        "attempt": claim.attempt,
    }
