"""Jobs a second: `python -m tests.benchmarks.throughput [--jobs N] [--postgresql | --database-url URL]`.

Embedded: the real API in its own process, two worker processes, eight callers that post 30-point datasets inline under
the default plan and wait for each acknowledgement, which is durable. The time is from the first post to the last
outcome. The same with workers whose analysis is one ready result is the ceiling. On PostgreSQL (a private instance, or
a server on which databases can be made) also: a queue filled beforehand, emptied by one worker process and by two.

The figures are of the machine and of whatever else it does; their ratios, taken in one run, are what to compare. On a
machine that does other work, processor time says what two processors of its own would do.
"""

import argparse
import http.client
import json
import os
import subprocess
import sys
import tempfile
import threading
import time
import uuid
from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, datetime
from pathlib import Path

import numpy as np
from sqlalchemy import func, select

from service.settings import Settings
from service.store.database import Database, open_database
from service.store.migrate import migrate
from service.store.tables import FINAL, jobs
from service.store.transport import open_transport
from tests.conftest import one_database
from tests.jobs import Desk
from tests.postgres import PrivatePostgres, find_binaries
from tests.worker.processes import Workers

CALLERS = 8
POINTS = 30
REAL, TRIVIAL = "service.worker", "tests.benchmarks.trivial_worker"


def main() -> None:
    """Measure and print."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--jobs", type=int, default=1500)
    parser.add_argument("--database-url", help="of a PostgreSQL server on which databases can be made")
    parser.add_argument("--postgresql", action="store_true", help="on a private instance made for this run")
    parser.add_argument("--only-postgresql", action="store_true", help="leave out the embedded part")
    asked = parser.parse_args()
    print(f"{os.cpu_count()} processors, load {os.getloadavg()[0]:.1f} before the run, {asked.jobs} jobs each")
    if not asked.only_postgresql:
        measure_embedded(asked.jobs)
    if asked.database_url:
        measure_postgresql(asked.database_url, asked.jobs)
    elif asked.postgresql or asked.only_postgresql:
        binaries = find_binaries()
        if binaries is None:
            parser.error("no PostgreSQL binaries here")
        server = PrivatePostgres(binaries, fsync=True)
        try:
            server.start()
            measure_postgresql(server.url(), asked.jobs)
        finally:
            server.remove()


def measure_embedded(count: int) -> None:
    """Real jobs and trivial ones."""
    rates = {}
    for name, module in (("default plan", REAL), ("trivial jobs", TRIVIAL)):
        with tempfile.TemporaryDirectory() as directory:
            rates[name] = embedded(Settings(data_dir=Path(directory), port=0, log_level="ERROR"), module, count)
        print(f"embedded, {name}: {rates[name]:.0f} jobs/s")
    print(f"of the ceiling: {rates['default plan'] / rates['trivial jobs']:.2f}")


def measure_postgresql(server: str, count: int) -> None:
    """One worker process and two."""
    drained = {}
    for workers in (1, 2):
        with one_database(server, f"leastbend_bench_{uuid.uuid4().hex[:8]}") as url:
            drained[workers] = drain(Settings(database_url=url, workers=workers, log_level="ERROR"), count)
        print(f"PostgreSQL, {workers} worker process(es): {drained[workers]:.0f} jobs/s")
    print(f"two to one: {drained[2] / drained[1]:.2f}")


def embedded(settings: Settings, module: str, count: int) -> float:
    """Jobs a second from the first post to the last outcome."""
    with api(settings) as (port, pid), Workers(settings, module=module) as workers:
        post(port, 20, seed=10**6)  # everything is loaded and connected
        database = open_database(settings, durable=False)
        wait_for(database, 20)
        processes = {"API": [pid], "workers": [workers.pid, *workers.consumer(), *workers.children()]}
        used = {name: -cpu_seconds(pids) for name, pids in processes.items()}
        used["callers"] = -time.process_time()
        began = time.monotonic()
        per_caller = count // CALLERS
        callers = [
            threading.Thread(target=post, args=(port, per_caller), kwargs={"seed": number * per_caller})
            for number in range(CALLERS)
        ]
        for caller in callers:
            caller.start()
        for caller in callers:
            caller.join()
        acknowledged = time.monotonic() - began
        wait_for(database, 20 + CALLERS * per_caller)
        took = time.monotonic() - began
        for name, pids in processes.items():
            used[name] += cpu_seconds(pids)
        used["callers"] += time.process_time()
        database.close()
    done = CALLERS * per_caller
    shares = ", ".join(f"{name} {1e3 * seconds / done:.1f} ms" for name, seconds in used.items())
    print(f"  processor time of one job: {shares}; two whole processors: {2 * done / sum(used.values()):.0f} jobs/s")
    print(f"  acknowledged at {CALLERS * per_caller / acknowledged:.0f} posts/s")
    return CALLERS * per_caller / took


@contextmanager
def api(settings: Settings) -> Iterator[tuple[int, int]]:
    """The API alone in its own process; its port and process id."""
    command = [
        sys.executable,
        "-c",
        "import sys; from service.cli import main; sys.exit(main(['serve', '--no-workers']))",
    ]
    process = subprocess.Popen(
        command,
        env={**os.environ, **settings.environment()},
        stdout=subprocess.PIPE,
        stderr=subprocess.DEVNULL,
        text=True,
    )
    try:
        assert process.stdout is not None
        for line in process.stdout:
            if "http://" in line:
                address = line.split("http://", 1)[1].split("/")[0].split()[0]
                yield int(address.rsplit(":", 1)[1].rstrip(".,")), process.pid
                break
    finally:
        process.terminate()
        process.wait()


def cpu_seconds(pids: list[int]) -> float:
    """User and system time that these processes have used (Linux, proc(5))."""
    ticks = 0
    for pid in pids:
        fields = Path(f"/proc/{pid}/stat").read_text().rsplit(")", 1)[1].split()
        ticks += int(fields[11]) + int(fields[12])
    return ticks / os.sysconf("SC_CLK_TCK")


def post(port: int, count: int, *, seed: int) -> None:
    """One caller: the next post follows the acknowledgement of the last."""
    connection = http.client.HTTPConnection("127.0.0.1", port)
    random = np.random.default_rng(seed)
    x = np.linspace(0.0, 10.0, POINTS)
    for number in range(count):
        y = 1.0 + 2.0 * x + 0.03 * x**2 + random.normal(0.0, 0.05, POINTS)
        dataset = {"subject": f"gauge-{seed + number}", "x": x.tolist(), "y": y.tolist()}
        body = json.dumps({"dataset": dataset})
        connection.request("POST", "/v1/jobs", body, {"Content-Type": "application/json"})
        answer = connection.getresponse()
        text = answer.read()
        if answer.status != 202:
            raise RuntimeError(f"{answer.status}: {text.decode()}")
    connection.close()


def wait_for(database: Database, count: int) -> None:
    """Until so many jobs have ended."""
    ended = select(func.count()).where(jobs.c.state.in_(FINAL))
    while True:
        with database.read() as connection:
            if connection.execute(ended).scalar_one() >= count:
                return
        time.sleep(0.05)


def drain(settings: Settings, count: int) -> float:
    """Jobs a second of worker processes that find the queue full."""
    database = open_database(settings, durable=False)
    migrate(database)
    transport = open_transport(settings)
    desk = Desk(database, transport, settings, datetime.now(UTC))
    for seed in range(count):
        desk.put(seed, points=POINTS)
    with Workers(settings):
        wait_for(database, 20)
        began = time.monotonic()
        wait_for(database, count)
        took = time.monotonic() - began
    transport.close()
    database.close()
    return (count - 20) / took


if __name__ == "__main__":
    main()
