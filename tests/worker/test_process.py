"""Names of workers, and what can be known of one from its name."""

import os
import signal
import subprocess
import sys

from service.worker.process import end, host_tag, is_gone, worker_name
from tests.worker.processes import until

NAME = "import time; from service.worker.process import worker_name; print(worker_name(), flush=True); time.sleep(60)"


def test_this_process_is_not_gone() -> None:
    assert worker_name() == worker_name()
    assert not is_gone(worker_name())


def test_a_killed_process_is_gone_even_as_a_zombie() -> None:
    with subprocess.Popen([sys.executable, "-c", NAME], stdout=subprocess.PIPE, text=True) as other:
        assert other.stdout is not None
        name = other.stdout.readline().strip()
        assert not is_gone(name)
        os.kill(other.pid, signal.SIGKILL)
        until(lambda: is_gone(name), seconds=10)
        other.wait()
        assert is_gone(name)


def test_another_process_under_the_same_number_is_not_mistaken_for_it() -> None:
    host, tag, pid, started = worker_name().rsplit("/", 3)
    assert is_gone(f"{host}/{tag}/{pid}/{int(started) - 1}")


def test_of_another_host_nothing_is_known() -> None:
    host, _, pid, _ = worker_name().rsplit("/", 3)
    for name in (f"{host}/00000000/{pid}/1", f"{host}/{host_tag()}/{pid}/-", "w1", ""):
        assert not is_gone(name)
        end(name)  # and nothing is done to it


def test_a_silent_worker_of_this_host_is_ended() -> None:
    with subprocess.Popen([sys.executable, "-c", NAME], stdout=subprocess.PIPE, text=True) as other:
        assert other.stdout is not None
        name = other.stdout.readline().strip()
        os.kill(other.pid, signal.SIGSTOP)
        end(name)
        assert other.wait(10) == -signal.SIGKILL
