"""The keeper: a process that has everything loaded and does nothing but fork the consumer, and again if that dies.

Loading the numeric libraries takes seconds, a fork some milliseconds: so a killed consumer is back before its jobs are
missed.
"""

import logging
import os
import signal
import time
from collections.abc import Callable
from typing import Any

from service.worker.process import die_with

PAUSE_SECONDS = 0.5  # before the next start, if the last consumer did not live so long
STOPPING = (signal.SIGTERM, signal.SIGINT, signal.SIGHUP)

logger = logging.getLogger(__name__)


def keep(consume: Callable[[], None]) -> int:
    """Run `consume` in a child until SIGTERM, SIGINT or SIGHUP; answers the exit status."""
    keeper, child, stopping = os.getpid(), 0, False

    def stop(number: int, _frame: Any) -> None:
        nonlocal stopping
        if child and not stopping:
            # Once: to the consumer a second signal of one kind means not to wait. A terminal's SIGINT goes to the whole
            # group, and the API's companion sends SIGTERM on top of it.
            os.kill(child, signal.SIGTERM if number == signal.SIGINT else number)
        stopping = True

    for number in STOPPING:
        signal.signal(number, stop)
    status = 0
    while not stopping:
        began = time.monotonic()
        signal.pthread_sigmask(signal.SIG_BLOCK, STOPPING)
        child = os.fork()
        if child == 0:
            _in_child(keeper, consume)
        signal.pthread_sigmask(signal.SIG_UNBLOCK, STOPPING)
        _, waited = os.waitpid(child, 0)  # a signal is handled, then waiting goes on (PEP 475)
        child, status = 0, os.waitstatus_to_exitcode(waited)
        if not stopping:
            logger.warning("the consumer ended with status %s; starting it again", status)
            time.sleep(max(0.0, PAUSE_SECONDS - (time.monotonic() - began)))
    return status


def _in_child(keeper: int, consume: Callable[[], None]) -> None:
    status = 1
    try:
        for number in STOPPING:
            signal.signal(number, signal.SIG_DFL)
        signal.pthread_sigmask(signal.SIG_UNBLOCK, STOPPING)
        die_with(keeper)
        consume()
        status = 0
    finally:
        logging.shutdown()
        os._exit(status)
