"""Callers that wait for jobs to end: none holds a thread, and one query a tick asks about all of them."""

import asyncio
from collections import defaultdict

from starlette.concurrency import run_in_threadpool

from service.errors import LeastbendError
from service.store import jobs
from service.store.database import Database

MOST_IDS = 500  # in one query


class Waiting:
    """Tells each caller when its job has ended. Belongs to one event loop."""

    def __init__(self, database: Database, *, tick: float) -> None:
        self._database = database
        self._tick = tick
        self._events: dict[str, set[asyncio.Event]] = defaultdict(set)
        self._task: asyncio.Task[None] | None = None

    async def until_ended(self, job_id: str, seconds: float) -> bool:
        """Whether the job ended within `seconds`."""
        event = asyncio.Event()
        self._events[job_id].add(event)
        if self._task is None or self._task.done():
            self._task = asyncio.create_task(self._look())
        try:
            await asyncio.wait_for(event.wait(), seconds)
        except TimeoutError:
            return False
        finally:
            self._events[job_id].discard(event)
            if not self._events[job_id]:
                del self._events[job_id]
        return True

    async def _look(self) -> None:
        while self._events:
            ids = list(self._events)
            for start in range(0, len(ids), MOST_IDS):
                for job_id in await self._ended(ids[start : start + MOST_IDS]):
                    for event in self._events.get(job_id, ()):
                        event.set()
            await asyncio.sleep(self._tick)

    async def _ended(self, ids: list[str]) -> set[str]:
        try:
            return await run_in_threadpool(self._query, ids)
        except LeastbendError:  # the database is away: ask again at the next tick
            return set()

    def _query(self, ids: list[str]) -> set[str]:
        with self._database.read() as connection:
            return jobs.finished_among(connection, ids)

    async def close(self) -> None:
        """Stop looking; who still waits is told nothing more."""
        if self._task is not None:
            self._task.cancel()
            await asyncio.gather(self._task, return_exceptions=True)
