"""Real worker processes for the tests, and ways to ill-treat them."""

import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path
from types import TracebackType
from typing import Self

from service.core.plan import Plan, Resampling
from service.settings import Settings
from service.store.database import Database
from service.store.write_lock import Busy
from service.worker.supervise import ONE_THREAD

PROC = Path("/proc")
FIFTY_MILLISECONDS = Plan(resampling=Resampling(repeats=1000))  # on some 30 points
SECONDS = Plan(resampling=Resampling(folds=200, repeats=1000))  # on some thousands of points


class Workers:
    """`python -m service.worker` (or another module) as a child, killed at the end if it still runs."""

    def __init__(self, settings: Settings, *, module: str = "service.worker", prefix: tuple[str, ...] = ()) -> None:
        self._settings = settings
        watched = [] if prefix else ["--parent", str(os.getpid())]  # a prefix may put a process in between
        self._command = [*prefix, sys.executable, "-m", module, *watched]
        self.process: subprocess.Popen[bytes] | None = None

    def __enter__(self) -> Self:
        self.start()
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        self.kill()

    def start(self) -> None:
        """Start (again)."""
        self.process = subprocess.Popen(
            self._command,
            start_new_session=True,
            env={**os.environ, **self._settings.environment(), **ONE_THREAD, "LEASTBEND_LOG_LEVEL": "ERROR"},
        )

    @property
    def pid(self) -> int:
        """Of the keeper."""
        assert self.process is not None
        return self.process.pid

    def consumer(self) -> list[int]:
        """The consumer, if it lives."""
        return consumer_of(self.pid)

    def children(self) -> list[int]:
        """Worker and sweeper processes that live."""
        return hands_of(self.pid)

    def kill(self) -> None:
        """kill -9 of the keeper; consumer and workers go with it."""
        if self.process is not None and self.process.poll() is None:
            self.process.kill()
            self.process.wait()

    def stop(self, how: signal.Signals = signal.SIGTERM) -> int:
        """Ask it to stop; its exit status."""
        assert self.process is not None
        self.process.send_signal(how)
        return self.process.wait(180)


def children_of(pid: int) -> list[int]:
    """Process ids of the children (Linux)."""
    try:
        return [int(one) for one in (PROC / f"{pid}/task/{pid}/children").read_text().split()]
    except OSError:
        return []


def consumer_of(keeper: int) -> list[int]:
    """The keeper's consumer, if it lives."""
    return [pid for pid in children_of(keeper) if alive(pid)]


def hands_of(keeper: int) -> list[int]:
    """Worker and sweeper processes below this keeper that live."""
    return [pid for consumer in consumer_of(keeper) for pid in children_of(consumer) if alive(pid)]


def freeze(pids: list[int], database: Database) -> None:
    """SIGSTOP of all of them, but not in the middle of a write: SQLite's lock would then stop everybody else too."""
    while True:
        send(signal.SIGSTOP, pids)
        if database.lock is None:
            return
        try:
            with database.lock.held(seconds=0.2):
                return
        except Busy:
            send(signal.SIGCONT, pids)
            time.sleep(0.01)


def send(how: signal.Signals, pids: list[int]) -> None:
    """To those of them that live."""
    for pid in pids:
        if alive(pid):
            os.kill(pid, how)


def alive(pid: int) -> bool:
    """Whether the process runs and is no zombie."""
    try:
        return (PROC / f"{pid}/stat").read_text().rsplit(")", 1)[1].split()[0] not in "ZX"
    except OSError:
        return False


def until(condition: Callable[[], bool], *, seconds: float = 60, every: float = 0.02) -> None:
    """Wait; a test that waits in vain fails."""
    deadline = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < deadline, "waited in vain"
        time.sleep(every)
