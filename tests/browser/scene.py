"""Jobs for the browser tests, posted as applications post them."""

import json
from dataclasses import dataclass
from importlib.resources import files
from typing import Any

from tests.web.examples import BOWED, DATASET, PLAN
from tests.web.service import Service


def put(service: Service, dataset: dict[str, Any] = BOWED, **more: Any) -> str:
    """Id of a new job."""
    answer = service.http.post("/v1/jobs", json={"dataset": dataset, **more})
    answer.raise_for_status()
    return str(answer.json()["id"])


@dataclass(frozen=True)
class Scene:
    """One of everything. `addresses`: of every page, by what it shows."""

    addresses: dict[str, str]


def scene(service: Service) -> Scene:
    """The demo calibrations done, a batch, a plan, and a job in each other state."""
    demo = json.loads(files("service.demo").joinpath("calibrations.json").read_text("utf-8"))["calibrations"]
    done = {one["dataset"]["subject"]: put(service, one["dataset"], plan=one["plan"]) for one in demo}
    many = put(service, {**BOWED, "x": BOWED["x"] * 20, "y": BOWED["y"] * 20, "subject": "many points"})
    two = put(service, {**BOWED, "x": BOWED["x"][:4], "y": BOWED["y"][:4], "subject": "few points"})
    batch = service.http.post("/v1/batches", json={"datasets": [BOWED, {"subject": "bad", "x": [1]}]}).json()["id"]
    plan = service.http.post("/v1/plans", json={"name": "pressure, 0.1 % of span", "plan": PLAN}).json()["id"]
    service.work()
    cancelled = put(service, DATASET)
    service.http.delete(f"/v1/jobs/{cancelled}").raise_for_status()
    queued = put(service, DATASET)
    jobs = {f"job {subject}": f"/job/{job}" for subject, job in done.items()}
    first = next(iter(done.values()))
    return Scene(
        addresses={
            "history": "/history",
            "history, nothing found": "/history?subject=nothing",
            **jobs,
            "job, few points": f"/job/{two}",
            "job, cancelled": f"/job/{cancelled}",
            "job, queued": f"/job/{queued}",
            "report": f"/job/{first}/report",
            "report, many points": f"/job/{many}/report",
            "subject": "/subject?name=SM-PT-03",
            "queue": "/queue",
            "batches": "/batches",
            "batch": f"/batch/{batch}",
            "plans": "/plans",
            "plan": f"/plan/{plan}",
            "try": "/try",
            "sign in": "/sign-in",
            "error": "/job/none-such",
        }
    )
