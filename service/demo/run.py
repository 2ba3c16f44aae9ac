"""Start the real service in processes of its own, post the demo calibrations over HTTP, print what comes back."""

import json
import os
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager, nullcontext
from importlib.resources import files
from pathlib import Path
from typing import Any

from service.client import Client, Json
from service.errors import Unusable
from service.settings import PREFIX

RANK = {"note": 0, "caution": 1, "serious": 2}
STOP_SECONDS = 30
CAUTION = "A statistical check does not replace the laboratory's validated procedure or a qualified person's review."


def run_demo(*, data_dir: Path | None, keep: bool, said_when_up: str) -> int:
    """Answers 0 once every calibration has its verdict. `said_when_up`: how `serve` begins its first line."""
    demo = json.loads(files("service.demo").joinpath("calibrations.json").read_text("utf-8"))
    place = nullcontext(str(data_dir)) if data_dir is not None else tempfile.TemporaryDirectory(prefix="leastbend-")
    with place as directory, _serving(Path(directory), said_when_up) as address, Client(address) as client:
        print(f"{demo['about']}\n")
        jobs = [client.submit(one["dataset"], one["plan"]) for one in demo["calibrations"]]
        print(f"Posted {len(jobs)} calibrations to {address}/v1/jobs:")
        done = [_watched(client, job) for job in jobs]
        print()
        _print_table(done)
        last = done[-1]["id"]
        print(f"\nVerdict of {done[-1]['subject']}, in words:")
        for reason in client.verdict(last)["reasons"]:
            print(f"  {reason['severity']}: {reason['message']}")
        print(f"\n{CAUTION}")
        _print_next(address, last, kept=keep)
        if keep:
            print("\nThe service runs until you press Ctrl-C.", flush=True)
            _until_interrupted()
    return 0 if all(job["state"] == "succeeded" for job in done) else 1


@contextmanager
def _serving(data_dir: Path, said_when_up: str) -> Iterator[str]:
    command = [sys.executable, "-P", "-m", "service.cli", "serve", "--port", "0", "--data-dir", str(data_dir)]
    print("Starting the service: API and two worker processes, SQLite ...", flush=True)
    process = subprocess.Popen(
        command, stdout=subprocess.PIPE, text=True, env={**os.environ, f"{PREFIX}LOG_LEVEL": "WARNING"}
    )
    try:
        assert process.stdout is not None
        line = process.stdout.readline()
        if not line.startswith(said_when_up):
            raise Unusable("the service did not start; its message stands above")
        yield line.removeprefix(said_when_up).split()[0]
    finally:
        process.terminate()
        try:
            process.wait(STOP_SECONDS)
        except subprocess.TimeoutExpired:
            process.kill()
            process.wait()


def _watched(client: Client, job: Json) -> Json:
    seen: list[str] = []

    def show(now: Json) -> None:
        progress = now["progress"]
        state = now["state"] if progress is None else f"{now['state']}: {progress['stage']}"
        if state not in seen:
            seen.append(state)

    ended = client.wait(job["id"], seconds=120, progress=show)
    print(f"  {ended['subject']}  {' > '.join(seen)}", flush=True)
    return ended


def _print_table(jobs: list[Json]) -> None:
    rows: list[tuple[str, ...]] = [("subject", "points", "degree", "verdict", "CV error", "what matters most")]
    rows += [_row(job) for job in jobs]
    widths = [max(len(row[i]) for row in rows) for i in range(len(rows[0]))]
    for i, row in enumerate(rows):
        print("  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip())
        if i == 0:
            print("  ".join("-" * width for width in widths))


def _row(job: Json) -> tuple[str, ...]:
    if job["state"] != "succeeded":
        return (job["subject"], "", "", job["state"], "", job["error"]["message"])
    result = job["result"]
    chosen = next(c for c in result["candidates"] if c["degree"] == result["chosen_degree"])
    error = chosen["cv"]["rmse_mean"]
    return (
        job["subject"],
        str(result["points"]),
        str(result["chosen_degree"]),
        result["verdict"]["verdict"],
        "none" if error is None else f"{error:.3g}",
        _most_important(result),
    )


def _most_important(result: dict[str, Any]) -> str:
    worst = max(result["warnings"], key=lambda one: RANK[one["severity"]], default=None)
    return "nothing" if worst is None else f"{worst['code']} ({worst['severity']})"


def _print_next(address: str, job_id: str, *, kept: bool) -> None:
    if not kept:
        print("\nTo see the pages and try calls of your own, keep it running: leastbend demo --keep")
        return
    print(
        f"""
Try next:
  {address}/history  in a browser: the jobs, their figures and reports
  {address}/docs  the HTTP reference
  curl {address}/v1/jobs?limit=3
  curl {address}/v1/jobs/{job_id}/verdict
  curl -H 'Prefer: wait=10' -H 'Content-Type: application/json' {address}/v1/jobs \\
       -d '{{"dataset": {{"subject": "MY-01", "x": [0, 1, 2, 3, 4, 5], "y": [0.1, 1.0, 2.1, 2.9, 4.2, 5.0]}}}}'"""
    )


def _until_interrupted() -> None:
    try:
        while True:
            time.sleep(3600)
    except KeyboardInterrupt:
        print()
