"""One thread that draws: matplotlib is loaded when the first figure is asked for, and never used by two at once.

A request that waits for its figure holds no thread of the pool that serves the others.
"""

import asyncio
import threading
from collections import OrderedDict
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from datetime import datetime

from service.store.database import Database
from service.store.figures import FigureRecord
from service.store.records import DatasetContent, JobDetail
from service.web.figures.data import figure_data
from service.web.figures.names import TITLES, VERSION, FigureFormat, FigureName
from service.web.figures.words import alt_text
from service.workflows.callers import Caller
from service.workflows.figures import figure_inputs, kept_figure, make_figure
from service.workflows.read import read_events

MOST_WORDS = 500  # jobs


class DrawingDesk:
    """Draws figures one after the other. Belongs to one event loop."""

    def __init__(self, database: Database, *, now: Callable[[], datetime]) -> None:
        self._database = database
        self._now = now
        self._thread = ThreadPoolExecutor(max_workers=1, thread_name_prefix="drawing")
        self._words: OrderedDict[str, dict[FigureName, str]] = OrderedDict()
        self._lock = threading.Lock()

    async def figure(self, caller: Caller, job_id: str, name: FigureName, kind: FigureFormat) -> FigureRecord:
        """The figure, kept or drawn now. Raises NotFound."""
        loop = asyncio.get_running_loop()
        return await loop.run_in_executor(self._thread, self._make, caller, job_id, name, kind)

    def kept(self, caller: Caller, job_id: str, name: FigureName, kind: FigureFormat) -> FigureRecord | None:
        """The figure if it was drawn before. Raises NotFound if the caller may not see the job."""
        return kept_figure(self._database, caller, job_id, name, kind, version=VERSION)

    async def run(self, work: Callable[[], bytes]) -> bytes:
        """Anything else that draws, in the same thread."""
        return await asyncio.get_running_loop().run_in_executor(self._thread, work)

    def make_now(self, caller: Caller, job_id: str, name: FigureName, kind: FigureFormat) -> FigureRecord:
        """The figure, drawn if need be. Only for work that `run` does."""
        return self._make(caller, job_id, name, kind)

    def _make(self, caller: Caller, job_id: str, name: FigureName, kind: FigureFormat) -> FigureRecord:
        def draw(content: DatasetContent, detail: JobDetail) -> bytes:
            # Half a second and 60 MB that a service which draws nothing does not spend.
            from service.web.figures.draw import draw as draw_now  # noqa: PLC0415

            assert detail.result is not None
            data = figure_data(content, subject=detail.job.subject, plan=detail.plan, result=detail.result)
            return draw_now(name, kind, data)

        return make_figure(self._database, caller, job_id, name, kind, version=VERSION, draw=draw, now=self._now())

    def words(self, caller: Caller, job_id: str) -> dict[FigureName, str]:
        """What each figure shows. Raises NotFound. A result never changes, so the last ones asked for are kept."""
        with self._lock:
            known = self._words.get(job_id)
        if known is not None:
            read_events(self._database, caller, job_id)  # asks whether the caller may see the job
            return known
        content, detail = figure_inputs(self._database, caller, job_id)
        assert detail.result is not None
        data = figure_data(content, subject=detail.job.subject, plan=detail.plan, result=detail.result)
        said = {name: alt_text(name, data) for name in TITLES}
        with self._lock:
            self._words[job_id] = said
            while len(self._words) > MOST_WORDS:
                self._words.popitem(last=False)
        return said

    def close(self) -> None:
        """Finish what is being drawn and stop."""
        self._thread.shutdown(wait=True, cancel_futures=True)
