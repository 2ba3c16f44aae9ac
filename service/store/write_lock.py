"""One lock file around SQLite's write lock.

SQLite has waiting writers sleep for up to 100 ms between tries, while whoever comes new may go first: three processes
that write all the time measured 0.4 to 1.1 s at the 99th percentile, and half the transactions of the same processes
behind this lock, which is tried ten times a millisecond (20 to 30 ms). The kernel frees it when its holder dies.
"""

import fcntl
import os
import threading
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

TRY_SECONDS = 0.0001


class Busy(Exception):
    """Somebody held the lock for all of the time."""


class WriteLock:
    """Held by one thread of one process at a time."""

    def __init__(self, path: Path, *, seconds: float) -> None:
        self._file = os.open(path, os.O_CREAT | os.O_RDWR | os.O_CLOEXEC, 0o600)
        self._within = threading.Lock()  # flock does not tell threads of one process apart
        self._seconds = seconds

    @contextmanager
    def held(self, *, seconds: float | None = None) -> Iterator[None]:
        """Wait for it, for so many seconds at most. Raises Busy."""
        seconds = self._seconds if seconds is None else seconds
        deadline = time.monotonic() + seconds
        if not self._within.acquire(timeout=seconds):
            raise Busy
        try:
            while True:
                try:
                    fcntl.flock(self._file, fcntl.LOCK_EX | fcntl.LOCK_NB)
                    break
                except BlockingIOError:
                    if time.monotonic() >= deadline:
                        raise Busy from None
                    time.sleep(TRY_SECONDS)
            try:
                yield
            finally:
                fcntl.flock(self._file, fcntl.LOCK_UN)
        finally:
            self._within.release()

    def close(self) -> None:
        """Give back the file."""
        os.close(self._file)
