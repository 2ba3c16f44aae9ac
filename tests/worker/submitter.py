"""Puts in jobs and says each id on standard output once it is acknowledged: the part of an API that can be killed.

With `die` the process kills itself -9 between the commit and the answer.
"""

import os
import signal
import sys
from datetime import UTC, datetime

from service.settings import Settings
from service.store.database import open_database
from service.store.transport import Transport, open_transport
from tests.jobs import Desk


class Fatal(Transport):
    """Dies where the commit is done and the message is not sent."""

    def send(self, job_id: str, priority: int) -> bool:  # noqa: ARG002
        os.kill(os.getpid(), signal.SIGKILL)
        return False


def main(count: int, *, die: bool) -> None:
    """Count jobs."""
    settings = Settings()
    transport = open_transport(settings)
    desk = Desk(
        open_database(settings, durable=True),
        Fatal(transport.huey) if die else transport,
        settings,
        datetime.now(UTC),
    )
    for number in range(count):
        sys.stdout.write(desk.put(number) + "\n")
        sys.stdout.flush()


if __name__ == "__main__":
    main(int(sys.argv[1]), die="die" in sys.argv[2:])
