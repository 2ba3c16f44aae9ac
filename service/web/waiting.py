"""Callers that wait for jobs: none holds a thread, and one query a tick asks about all of them."""

import asyncio
import contextlib
import logging
from collections import defaultdict
from collections.abc import AsyncIterator
from contextlib import asynccontextmanager

from sqlalchemy.exc import SQLAlchemyError
from starlette.concurrency import run_in_threadpool
from starlette.types import Receive

from service.errors import LeastbendError
from service.store import jobs
from service.store.database import Database
from service.store.jobs import Standing
from service.store.tables import FINAL

MOST_IDS = 500  # in one query

log = logging.getLogger("leastbend.web")


class Stopping(Exception):
    """The service is being stopped: do not wait on."""


class Changes:
    """Tells one caller when what it watches has changed."""

    def __init__(self) -> None:
        self._changed = asyncio.Event()
        self.standing: Standing | None = None
        self.stopping = False

    def tell(self, standing: Standing) -> None:
        """The job stands so now."""
        if standing != self.standing:
            self.standing = standing
            self._changed.set()

    def stop(self) -> None:
        """Nothing more will be told."""
        self.stopping = True
        self._changed.set()

    async def next(self) -> Standing | None:
        """Wait for a change that was not yet told. Raises Stopping."""
        await self._changed.wait()
        if self.stopping:
            raise Stopping
        self._changed.clear()
        return self.standing


class Waiting:
    """Belongs to one event loop."""

    def __init__(self, database: Database, *, tick: float) -> None:
        self._database = database
        self._tick = tick
        self._watched: dict[str, set[Changes]] = defaultdict(set)
        self._task: asyncio.Task[None] | None = None
        self._stopping = False
        self.queries = self.ticks = 0

    @asynccontextmanager
    async def watching(self, job_id: str) -> AsyncIterator[Changes]:
        """Meanwhile, changes of this job are told."""
        changes = Changes()
        if self._stopping:
            changes.stop()
        self._watched[job_id].add(changes)
        if self._task is None or self._task.done():
            self._task = asyncio.create_task(self._look())
        try:
            yield changes
        finally:
            self._watched[job_id].discard(changes)
            if not self._watched[job_id]:
                del self._watched[job_id]

    async def until_ended(self, job_id: str, seconds: float, *, gone: Receive) -> None:
        """Wait until the job ends; no longer than `seconds`, nor than the caller stays connected."""
        ending = asyncio.create_task(self._ended(job_id))
        leaving = asyncio.create_task(_left(gone))
        try:
            await asyncio.wait((ending, leaving), timeout=seconds, return_when=asyncio.FIRST_COMPLETED)
        finally:
            for task in (ending, leaving):
                task.cancel()
            await asyncio.gather(ending, leaving, return_exceptions=True)

    async def _ended(self, job_id: str) -> None:
        async with self.watching(job_id) as changes:
            with contextlib.suppress(Stopping):
                while (standing := await changes.next()) is None or standing.state not in FINAL:
                    pass

    @property
    def watched(self) -> int:
        """Number of jobs that somebody waits for."""
        return len(self._watched)

    @property
    def watchers(self) -> int:
        """Number of callers who wait."""
        return sum(len(watching) for watching in self._watched.values())

    def release(self) -> None:
        """Let go of everybody who waits, now and from now on: the service is about to stop."""
        self._stopping = True
        for watching in self._watched.values():
            for changes in watching:
                changes.stop()

    async def _look(self) -> None:
        while self._watched:
            self.ticks += 1
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
        except (LeastbendError, SQLAlchemyError) as error:  # the database is away: ask again at the next tick
            log.warning("who waits is told later: %s", error)
            return []

    def _query(self, ids: list[str]) -> list[Standing]:
        with self._database.read() as connection:
            return jobs.standings(connection, ids)

    async def close(self) -> None:
        """Stop looking; who still waits is told nothing more."""
        if self._task is not None:
            self._task.cancel()
            await asyncio.gather(self._task, return_exceptions=True)


async def _left(receive: Receive) -> None:
    """Until the caller, whose body has been read, has gone."""
    while (await receive())["type"] != "http.disconnect":
        pass
