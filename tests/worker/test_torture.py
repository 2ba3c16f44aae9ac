"""Jobs under kill -9: of workers and consumers at random, of everything at once. Nothing lost, nothing twice."""

import json
import os
import random
import signal
import statistics
import sys
import threading
import time
from datetime import UTC, datetime
from itertools import pairwise

import pytest

from service.settings import Settings
from service.store import events
from service.store.database import Database
from service.store.tables import FINAL, State
from service.store.transport import Transport
from service.worker.supervise import Companion
from tests.jobs import Desk
from tests.worker.processes import FIFTY_MILLISECONDS, consumer_of, hands_of, until

POINTS = 30


@pytest.mark.timeout(600)
@pytest.mark.parametrize(
    ("jobs", "seconds"),
    [pytest.param(150, 10, marks=pytest.mark.long), pytest.param(300, 20, marks=pytest.mark.slow)],
)
def test_random_kills(database: Database, transport: Transport, settings: Settings, jobs: int, seconds: int) -> None:
    """Jobs of some 50 ms, put in over the whole time; each second one worker or the consumer is killed -9."""
    settings = settings.model_copy(update={"max_attempts": 50, "log_level": "ERROR"})
    desk = Desk(database, transport, settings, datetime.now(UTC))
    kills: list[datetime] = []
    ids: list[str] = []
    with Companion(settings) as companion:
        until(lambda: len(hands_of(companion.pid or 0)) == settings.workers + 1)
        killer = threading.Thread(target=kill_each_second, args=(companion, seconds, kills))
        killer.start()
        began = time.monotonic()
        for number in range(jobs):
            ids.append(desk.put(number, points=POINTS, plan=FIFTY_MILLISECONDS, seconds=time.monotonic() - began))
            time.sleep(max(0.0, began + (number + 1) * seconds / jobs - time.monotonic()))
        killer.join()
        until(lambda: all(desk.job(job_id).state in FINAL for job_id in ids), seconds=400, every=0.2)
    reruns = check_everything(desk, ids, kills)
    sys.stderr.write(
        f"\n{jobs} jobs, {len(kills)} kills, {len(reruns)} runs again,"
        f" median {statistics.median(reruns or [0]):.2f} s after the kill, longest {max(reruns or [0]):.2f} s\n"
    )
    assert len(kills) >= seconds // 2


def kill_each_second(companion: Companion, seconds: int, kills: list[datetime]) -> None:
    chance = random.Random(20)
    for _ in range(seconds):
        time.sleep(1)
        keeper = companion.pid or 0
        victims = [*consumer_of(keeper), *hands_of(keeper)]
        if victims:
            kills.append(datetime.now(UTC))
            os.kill(chance.choice(victims), signal.SIGKILL)


def check_everything(desk: Desk, ids: list[str], kills: list[datetime]) -> list[float]:
    """None lost, none twice, events in order, one chain of verdicts. Answers seconds from kill to next start."""
    assert {desk.job(job_id).state for job_id in ids} == {State.SUCCEEDED}
    assert desk.recorded() == (len(ids), len(ids))
    reruns = []
    for job_id in ids:
        with desk.database.read() as connection:
            history = events.of_job(connection, job_id)
        kinds = [kind for kind, _, _ in history]
        again = (len(kinds) - 3) // 2
        assert kinds == ["queued", *["started", "requeued"] * again, "started", "succeeded"]
        assert all(before[1] <= after[1] for before, after in pairwise(history[1:]))
        for before, after in pairwise(history):
            if before[0] == "requeued":
                killed = max((moment for moment in kills if moment <= before[1]), default=before[1])
                reruns.append((after[1] - killed).total_seconds())
    chain = {}
    for job_id in ids:
        verdict = desk.verdict(job_id)
        chain[json.loads(verdict.document)["previous"]] = verdict.digest
    link, length = chain.get(None), 0
    while link is not None:
        link, length = chain.get(link), length + 1
    assert length == len(ids)
    return reruns
