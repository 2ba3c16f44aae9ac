"""Two workers in two network and process-id namespaces against one PostgreSQL; one is cut off.

That is as far apart as one machine allows: no shared network, no view of each other's processes. Needs root, iproute2
and unshare; elsewhere the workers are separate processes with no files in common, and one is stopped instead of cut.
"""

import os
import shutil
import signal
import subprocess
import uuid
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Protocol

import pytest

from service.settings import Settings
from service.store.database import open_database
from service.store.migrate import migrate
from service.store.tables import FINAL, State
from service.store.transport import open_transport
from tests.jobs import Desk
from tests.postgres import PrivatePostgres
from tests.worker.processes import FIFTY_MILLISECONDS, SECONDS, Workers, alive, until
from tests.worker.test_torture import check_everything

pytestmark = pytest.mark.slow
HOSTS = ("10.213.1.1", "10.213.2.1")  # this machine's end of each cable


class Cable(Protocol):
    """The connection of one host."""

    prefix: tuple[str, ...]

    def cut(self, workers: Workers) -> None:
        """Nothing gets through any more."""

    def mend(self, workers: Workers) -> None:
        """As before."""


@dataclass
class Veth:
    """A virtual cable into a network namespace; what runs there has its own process ids too."""

    name: str
    prefix: tuple[str, ...]

    def cut(self, workers: Workers) -> None:
        del workers
        ip("link", "set", self.name, "down")

    def mend(self, workers: Workers) -> None:
        del workers
        ip("link", "set", self.name, "up")


@dataclass
class Stopped:
    """No namespaces here: the other host's processes are stopped."""

    prefix: tuple[str, ...] = ()

    def cut(self, workers: Workers) -> None:
        self._signal(workers, signal.SIGSTOP)

    def mend(self, workers: Workers) -> None:
        self._signal(workers, signal.SIGCONT)

    def _signal(self, workers: Workers, number: signal.Signals) -> None:
        for pid in (workers.pid, *workers.consumer(), *workers.children()):
            if alive(pid):
                os.kill(pid, number)


def ip(*arguments: str) -> None:
    subprocess.run(["ip", *arguments], check=True, capture_output=True)


def namespaces_work() -> bool:
    """Whether this machine lets us make them."""
    if os.geteuid() != 0 or shutil.which("ip") is None or shutil.which("unshare") is None:
        return False
    probe = f"lb{uuid.uuid4().hex[:6]}"
    made = subprocess.run(["ip", "netns", "add", probe], check=False, capture_output=True)
    if made.returncode == 0:
        ip("netns", "del", probe)
    return made.returncode == 0


@contextmanager
def cable(address: str) -> Iterator[Cable]:
    """From `address` on this machine to a new namespace."""
    space = f"lb{uuid.uuid4().hex[:6]}"
    near, far = f"{space}n", f"{space}f"
    ip("netns", "add", space)
    try:
        ip("link", "add", near, "type", "veth", "peer", "name", far)
        ip("link", "set", far, "netns", space)
        ip("addr", "add", f"{address}/24", "dev", near)
        ip("link", "set", near, "up")
        ip("-n", space, "addr", "add", f"{address[:-1]}2/24", "dev", far)
        ip("-n", space, "link", "set", far, "up")
        ip("-n", space, "link", "set", "lo", "up")
        inside = ("unshare", "--pid", "--fork", "--kill-child", "--mount-proc")
        yield Veth(near, ("ip", "netns", "exec", space, *inside))
    finally:
        ip("netns", "del", space)


def test_jobs_spread_and_those_of_a_host_cut_off_finish_elsewhere(postgres_binaries: Path, tmp_path: Path) -> None:
    apart = namespaces_work()
    with ExitStack() as stack:
        cables: list[Cable] = [stack.enter_context(cable(host)) if apart else Stopped() for host in HOSTS]
        server = PrivatePostgres(postgres_binaries, hosts=HOSTS if apart else ())
        stack.callback(server.remove)
        server.start()
        base = Settings(
            data_dir=tmp_path,
            database_url=server.url(),
            workers=1,
            lease_seconds=4.0,
            max_attempts=20,
            log_level="ERROR",
        )
        database, transport = open_database(base, durable=True), open_transport(base)
        stack.callback(database.close)
        stack.callback(transport.close)
        migrate(database)
        desk = Desk(database, transport, base, datetime.now(UTC))
        hosts = []
        for number, (address, one) in enumerate(zip(HOSTS, cables, strict=True)):
            url = server.url(host=address) if apart else server.url()
            own = base.model_copy(update={"database_url": url, "data_dir": tmp_path / str(number)})
            hosts.append(stack.enter_context(Workers(own, prefix=one.prefix)))

        def worker_of(job_id: str) -> str:
            return str(desk.job(job_id).worker).rsplit("/", 2 if apart else 0)[0]

        def put(first: int, count: int) -> list[str]:
            return [desk.put(seed, points=30, plan=FIFTY_MILLISECONDS) for seed in range(first, first + count)]

        ids = put(0, 10)
        until(lambda: all(desk.job(one).state in FINAL for one in ids), seconds=120)
        more = put(100, 80)
        until(lambda: all(desk.job(one).state in FINAL for one in more), seconds=120)
        assert len({worker_of(one) for one in more}) == 2  # they spread

        long = [desk.put(seed, plan=SECONDS, points=2500) for seed in (500, 501)]
        until(lambda: all(desk.job(one).state == State.RUNNING for one in long))
        before = {one: worker_of(one) for one in long}
        assert len(set(before.values())) == 2
        cables[0].cut(hosts[0])
        meanwhile = put(200, 10)
        until(lambda: all(desk.job(one).state in FINAL for one in [*long, *meanwhile]), seconds=180)
        assert len({worker_of(one) for one in [*long, *meanwhile]}) == 1
        moved = [one for one in long if "requeued" in desk.history(one)]
        assert len(moved) == 1
        assert worker_of(moved[0]) != before[moved[0]]

        cables[0].mend(hosts[0])
        last: list[str] = []

        def both_work_again() -> bool:
            last.extend(put(1000 + len(last), 10))
            until(lambda: all(desk.job(one).state in FINAL for one in last), seconds=120)
            return len({worker_of(one) for one in last}) == 2

        until(both_work_again, seconds=120, every=1)
        check_everything(desk, [*ids, *more, *long, *meanwhile, *last], [])
