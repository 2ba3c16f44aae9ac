"""Callers that wait for jobs: none holds a thread, and one query a tick asks about all of them."""

import asyncio
from collections import defaultdict
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager

from starlette.concurrency import run_in_threadpool

from service.errors import LeastbendError
from service.store import jobs
from service.store.database import Database
from service.store.jobs import Standing
from service.store.tables import FINAL

MOST_IDS = 500  # in one query


class Changes:
    """Tells one caller when what it watches has changed."""

    def __init__(self) -> None:
        self._changed = asyncio.Event()
        self.standing: Standing | None = None

    def tell(self, standing: Standing) -> None:
        """The job stands so now."""
        if standing != self.standing:
            self.standing = standing
            self._changed.set()

    async def next(self) -> Standing | None:
        """Wait for a change that was not yet told."""
        await self._changed.wait()
        self._changed.clear()
        return self.standing


class Waiting:
    """Belongs to one event loop."""

    def __init__(self, database: Database, *, tick: float) -> None:
        self._database = database
        self._tick = tick
        self._watched: dict[str, set[Changes]] = defaultdict(set)
        self._task: asyncio.Task[None] | None = None
        self.queries = 0

    @asynccontextmanager
    async def watching(self, job_id: str) -> AsyncIterator[Changes]:
        """Meanwhile, changes of this job are told."""
        changes = Changes()
        self._watched[job_id].add(changes)
        if self._task is None or self._task.done():
            self._task = asyncio.create_task(self._look())
        try:
            yield changes
        finally:
            self._watched[job_id].discard(changes)
            if not self._watched[job_id]:
                del self._watched[job_id]

    async def until_ended(self, job_id: str, seconds: float) -> bool:
        """Whether the job ended within `seconds`."""
        async with self.watching(job_id) as changes:
            try:
                async with asyncio.timeout(seconds):
                    while (standing := await changes.next()) is None or standing.state not in FINAL:
                        pass
            except TimeoutError:
                return False
        return True

    async def _look(self) -> None:
        while self._watched:
            ids = list(self._watched)
            for start in range(0, len(ids), MOST_IDS):
                for standing in await self._standings(ids[start : start + MOST_IDS]):
                    for changes in self._watched.get(standing.id, ()):
                        changes.tell(standing)
            await asyncio.sleep(self._tick)

    async def _standings(self, ids: list[str]) -> list[Standing]:
        self.queries += 1
        try:
            return await run_in_threadpool(self._query, ids)
        except LeastbendError:  # the database is away: ask again at the next tick
            return []

    def _query(self, ids: list[str]) -> list[Standing]:
        with self._database.read() as connection:
            return jobs.standings(connection, ids)

    async def close(self) -> None:
        """Stop looking; who still waits is told nothing more."""
        if self._task is not None:
            self._task.cancel()
            await asyncio.gather(self._task, return_exceptions=True)
