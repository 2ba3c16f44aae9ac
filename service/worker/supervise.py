"""The API's companion: `python -m service.worker` as a child process, restarted when it dies, stopped with the API."""

import logging
import os
import signal
import subprocess
import sys
import threading
import time
from types import TracebackType
from typing import Self

from service.settings import Settings

FIRST_PAUSE, LONGEST_PAUSE = 0.2, 10.0  # between restarts, s; doubles while it keeps dying
STEADY_SECONDS = 30.0  # having run so long, the next pause is the first again
LOOK_SECONDS = 0.1
KILL_SECONDS = 5.0  # beyond the graceful stop's own time
ONE_THREAD = {f"{library}_NUM_THREADS": "1" for library in ("OMP", "OPENBLAS", "MKL")}

logger = logging.getLogger(__name__)


class Companion:
    """`with Companion(settings):` keeps worker processes running for as long as the block does.

    The child is started, watched and stopped by one thread, since the kernel's "die with the parent" means the thread
    that started it. If this process is killed, the child and its workers are killed with it.
    """

    def __init__(self, settings: Settings) -> None:
        self._settings = settings
        self._stopping = threading.Event()
        self._thread = threading.Thread(target=self._watch, name="companion", daemon=True)
        self._process: subprocess.Popen[bytes] | None = None

    def __enter__(self) -> Self:
        if self._settings.workers > 0:
            self._thread.start()
        return self

    def __exit__(self, kind: type[BaseException] | None, error: BaseException | None, at: TracebackType | None) -> None:
        self._stopping.set()
        if self._thread.is_alive():
            self._thread.join()

    @property
    def pid(self) -> int | None:
        """Process id of the child, if it runs."""
        process = self._process
        return None if process is None or process.returncode is not None else process.pid

    def _watch(self) -> None:
        pause = FIRST_PAUSE
        while not self._stopping.is_set():
            began = time.monotonic()
            process = self._process = self._start()
            while process.poll() is None and not self._stopping.wait(LOOK_SECONDS):
                pass
            if self._stopping.is_set():
                break
            pause = FIRST_PAUSE if time.monotonic() - began > STEADY_SECONDS else min(2 * pause, LONGEST_PAUSE)
            logger.warning("the workers ended with status %s; starting them again", process.returncode)
            self._stopping.wait(pause)
        if self._process is not None:
            self._stop(self._process)

    def _start(self) -> subprocess.Popen[bytes]:
        # -P: a directory named `service` where the command was started must not be taken for this package.
        command = [sys.executable, "-P", "-m", "service.worker", "--parent", str(os.getpid())]
        return subprocess.Popen(command, env={**os.environ, **self._settings.environment(), **ONE_THREAD})

    def _stop(self, process: subprocess.Popen[bytes]) -> None:
        if process.poll() is not None:
            return
        process.send_signal(signal.SIGTERM)
        try:
            process.wait(self._settings.stop_seconds + KILL_SECONDS)
        except subprocess.TimeoutExpired:
            logger.warning("the workers did not stop in time and are killed")
            process.kill()
            process.wait()
